"""Look at two label volumes that are to be mapped onto each other."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

from volmap.screen.results import LabelScreen, ScreenResult, by_gravity, raise_refusal
from volmap.screen.screening import screen
from volmap.types.findings import Finding, Level
from volmap.types.volumes import LabelVolume

# Volume ratios: common practice, no source.  3 is a stretch of 1.44 each way, 20 one of 2.7.
RATIO_WARN, RATIO_REFUSE = 3.0, 20.0


@dataclass(frozen=True)
class PairResult:
    """Two volumes, looked at, and how they compare.

    Parameters
    ----------
    source, target : ScreenResult
    volume_ratios : tuple of (int, float)
        Volume in TARGET over volume in SOURCE of each label in both.
    comparison : tuple of Finding
        What the comparison found.
    """

    source: ScreenResult
    target: ScreenResult
    volume_ratios: tuple[tuple[int, float], ...]
    comparison: tuple[Finding, ...]

    @property
    def findings(self) -> tuple[Finding, ...]:
        """Everything found, the gravest first."""
        return by_gravity([*self.source.findings, *self.target.findings, *self.comparison])

    @property
    def refused(self) -> bool:
        """True when the pair cannot be mapped as it is."""
        return any(f.level is Level.REFUSE for f in self.findings)

    def require_mappable(self) -> None:
        """Raise what refuses the pair, if anything does.

        Raises
        ------
        InputError
            With refused=True.
        """
        raise_refusal(self.findings)

    def as_dict(self) -> dict[str, Any]:
        """Plain values, for JSON."""
        return {
            "source": self.source.as_dict(),
            "target": self.target.as_dict(),
            "volume_ratios": {label: ratio for label, ratio in self.volume_ratios},
            "comparison": [f.as_dict() for f in self.comparison],
            "refused": self.refused,
        }


def screen_pair(
    source: LabelVolume,
    target: LabelVolume,
    *,
    edge_mm: float | None = None,
    allow_topology_change: bool = False,
) -> PairResult:
    """Screen two volumes and compare them.

    Parameters
    ----------
    source, target : LabelVolume
    edge_mm : float, optional
    allow_topology_change : bool
        Warn instead of refusing when a label differs in pieces or Euler number.
    """
    return compare(
        screen(source, edge_mm=edge_mm),
        screen(target, edge_mm=edge_mm),
        allow_topology_change=allow_topology_change,
    )


def compare(source: ScreenResult, target: ScreenResult, *, allow_topology_change: bool = False) -> PairResult:
    """Compare two screened volumes: sameness, label sets, names, pieces, Euler numbers, volume ratios."""
    findings = _of_sameness(source, target) + _of_label_sets(source, target)
    ratios = []
    shared = sorted({e.label for e in source.labels} & {e.label for e in target.labels})
    for label in shared:
        a, b = source.of_label(label), target.of_label(label)
        where = f"{source.name} and {target.name}, {a.name}"
        findings += _of_names(a, b, f"{source.name} and {target.name}, label {label}")
        findings += _of_topology(a, b, where, allow_topology_change)
        ratios.append((label, b.volume_mm3 / a.volume_mm3))
        findings += _of_ratio(ratios[-1][1], where)
    return PairResult(source, target, tuple(ratios), by_gravity(findings))


def _of_sameness(source: ScreenResult, target: ScreenResult) -> list[Finding]:
    if source.sha256 != target.sha256:
        return []
    sentence = "hold the same voxels at the same places: the map between them says nothing about change"
    where = f"{source.name} and {target.name}"
    return [Finding(Level.WARN, "same_volume", where, sentence, "check that two scans were named")]


def _of_label_sets(source: ScreenResult, target: ScreenResult) -> list[Finding]:
    found = []
    for here, there in ((source, target), (target, source)):
        if not here.labels or not there.labels:
            continue
        missing = sorted({e.label for e in there.labels} - {e.label for e in here.labels})
        for label in missing:
            sentence = f"lacks {there.of_label(label).name}, which {there.name} has"
            remedy = "segment it in both, or remove it from the other"
            found.append(Finding(Level.REFUSE, "missing_label", here.name, sentence, remedy))
    return found


def _of_names(a: LabelScreen, b: LabelScreen, where: str) -> list[Finding]:
    """Labels are matched by number: two names for one number may be two structures."""
    if a.name == b.name or f"label {a.label}" in (a.name, b.name):
        return []
    sentence = f"is called {a.name} in one and {b.name} in the other; labels are matched by number"
    return [Finding(Level.WARN, "names_differ", where, sentence, "check both tables of names")]


def _of_topology(a: LabelScreen, b: LabelScreen, where: str, allowed: bool) -> list[Finding]:
    if (a.pieces, a.euler) == (b.pieces, b.euler):
        return []
    level = Level.WARN if allowed else Level.REFUSE
    sentence = f"pieces {a.pieces} and {b.pieces}, Euler numbers {a.euler} and {b.euler}: {_difference(a, b)}"
    remedy = "no map without tearing exists between them; correct the segmentation (--mend may help)"
    if allowed:
        remedy = "the certificate will fail labels_agree; judge the boundary distance near the difference"
    return [Finding(level, "topology", where, sentence, remedy)]


def _difference(a: LabelScreen, b: LabelScreen) -> str:
    parts = [
        f"{x} {noun} against {y}"
        for noun, x, y in (
            ("pieces", a.pieces, b.pieces),
            ("handles", a.handles, b.handles),
            ("enclosed voids", a.voids, b.voids),
        )
        if x != y
    ]
    return ", ".join(parts)


def _of_ratio(ratio: float, where: str) -> list[Finding]:
    factor = max(ratio, 1.0 / ratio)
    if factor <= RATIO_WARN:
        return []
    level = Level.REFUSE if factor > RATIO_REFUSE else Level.WARN
    sentence = (
        f"volume ratio {ratio:.3g} (target over source); the limits of {RATIO_WARN:g} and "
        f"{RATIO_REFUSE:g} are common practice, no source"
    )
    return [Finding(level, "volume_ratio", where, sentence, "check that both show the same organ and unit")]
