"""What screening found."""

from __future__ import annotations

from dataclasses import asdict, dataclass
from typing import Any

from volmap.types.errors import InputError
from volmap.types.findings import Finding, Level


@dataclass(frozen=True)
class LabelScreen:
    """One label of a volume.

    Parameters
    ----------
    label : int
    name : str
    voxels : int
    volume_mm3 : float
    pieces : int
        Parts joined through faces (6-connected).
    piece_voxels : tuple of int
        Their sizes, largest first.
    euler : int
        Euler number, 6-connected: pieces + voids - handles.
    voids : int
        Regions enclosed by this label alone (26-connected), be they background or other labels.
    handles : int
    cavities : int
        Background regions enclosed by the body of all labels, of whose faces this label has the most.
    cavity_mm3 : float
    thinnest_voxels : int
        See `thickness.thinnest`.
    thin_voxels : int
        How many voxels lie in parts that thin, too far from anything thicker.
    thinnest_at_mm : tuple of 3 float or None
        A place where it is that thin; None when nothing is thinner than the thickness looked for.
    border : tuple of str
        Faces of the grid it touches ("left", "inferior").
    neighbours : tuple of (int, float)
        Labels it shares faces with, and the area of those faces, mm2.
    """

    label: int
    name: str
    voxels: int
    volume_mm3: float
    pieces: int
    piece_voxels: tuple[int, ...]
    euler: int
    voids: int
    handles: int
    cavities: int
    cavity_mm3: float
    thinnest_voxels: int
    thin_voxels: int
    thinnest_at_mm: tuple[float, float, float] | None
    border: tuple[str, ...]
    neighbours: tuple[tuple[int, float], ...]


@dataclass(frozen=True)
class ScreenResult:
    """A label volume, looked at.

    Parameters
    ----------
    name, sha256 : str
    shape : tuple of 3 int
    orientation : str
        Where the indices grow to ("LIP").
    spacing_mm : tuple of 3 float
    handedness : str
        'right' or 'left'.
    shear : float
        Largest cosine between two voxel axes.
    labels : tuple of LabelScreen
    findings : tuple of Finding
        The gravest first.
    """

    name: str
    sha256: str
    shape: tuple[int, int, int]
    orientation: str
    spacing_mm: tuple[float, float, float]
    handedness: str
    shear: float
    labels: tuple[LabelScreen, ...]
    findings: tuple[Finding, ...]

    @property
    def refused(self) -> bool:
        """True when the volume cannot be mapped as it is."""
        return any(f.level is Level.REFUSE for f in self.findings)

    def of_label(self, label: int) -> LabelScreen:
        """The entry of one label.

        Raises
        ------
        KeyError
        """
        return {entry.label: entry for entry in self.labels}[label]

    def require_mappable(self) -> None:
        """Raise what refuses the volume, if anything does.

        Raises
        ------
        InputError
            With refused=True.
        """
        raise_refusal(self.findings)

    def as_dict(self) -> dict[str, Any]:
        """Plain values, for JSON."""
        return asdict(self) | {
            "refused": self.refused,
            "findings": [f.as_dict() for f in self.findings],
        }


def by_gravity(findings: list[Finding]) -> tuple[Finding, ...]:
    """Refusals first, then warnings, then notes; else in the order given."""
    rank = {Level.REFUSE: 0, Level.WARN: 1, Level.NOTE: 2}
    return tuple(sorted(findings, key=lambda f: rank[f.level]))


def raise_refusal(findings: tuple[Finding, ...]) -> None:
    """Turn the first refusal into an error.

    Raises
    ------
    InputError
    """
    for finding in findings:
        if finding.level is Level.REFUSE:
            raise InputError(finding.sentence, where=finding.where, remedy=finding.remedy, refused=True)
