"""What a user can ask of the mesher."""

from __future__ import annotations

from dataclasses import dataclass

from volmap.types.errors import InputError


@dataclass(frozen=True)
class MeshSettings:
    """Settings of the mesher.

    Parameters
    ----------
    edge_mm : float or None
        Wanted edge length; None chooses the one that gives about `wanted_tets`.
    wanted_tets : int
        Used when `edge_mm` is None.
    smoothing_voxels : float
        Width of the spline that smooths the labels; corners are rounded by about half of it.
    refine : int
        Times the edge may be halved where a part is thinner than the lattice.
    max_tets : int
        No attempt that is expected to give more is made.

    Raises
    ------
    InputError
        A number out of its range.
    """

    edge_mm: float | None = None
    wanted_tets: int = 40_000
    smoothing_voxels: float = 1.5
    refine: int = 1
    max_tets: int = 600_000

    def __post_init__(self) -> None:
        _require(self.edge_mm is None or 0 < self.edge_mm < float("inf"), "edge_mm", self.edge_mm, "above 0")
        _require(self.wanted_tets >= 100, "wanted_tets", self.wanted_tets, "at least 100")
        _require(
            0.8 <= self.smoothing_voxels <= 3.0, "smoothing_voxels", self.smoothing_voxels, "from 0.8 to 3"
        )
        _require(0 <= self.refine <= 3, "refine", self.refine, "from 0 to 3")
        _require(self.max_tets >= 1000, "max_tets", self.max_tets, "at least 1000")


def _require(holds: bool, name: str, found: object, expected: str) -> None:
    if not holds:
        raise InputError(
            "a mesh setting is out of its range", where=name, found=str(found), expected=expected
        )
