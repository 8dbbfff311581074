"""Named points."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from volmap.types.errors import InputError
from volmap.types.frozen import Frozen, require_finite

ROLES = ("guide", "check")


def _check_roles(roles: tuple[str, ...], n: int) -> tuple[str, ...]:
    roles = tuple(roles) if roles else ("check",) * n
    for role in roles:
        if role not in ROLES:
            raise InputError(
                "a landmark's role is unknown", where="role", found=repr(role), expected="guide or check"
            )
    if len(roles) != n:
        raise InputError("one role a landmark", found=f"{len(roles)} for {n}")
    return roles


def _check_sd(sd: NDArray[np.float64]) -> None:
    if not (np.isfinite(sd).all() and (sd > 0).all()):
        raise InputError("sd_mm of a landmark must be above 0", where="sd_mm")


@dataclass(frozen=True, eq=False)
class Landmarks(Frozen):
    """Named points of one scan.

    Parameters
    ----------
    names : tuple of str
    points : (n, 3) float64, mm, RAS+
    roles : tuple of str
        'guide' steers the map, 'check' only measures it; empty means all 'check'.
    sd_mm : (n,) float64 or None
        Standard deviation of a point's placement, mm; None when it is not known.
    """

    names: tuple[str, ...]
    points: NDArray[np.float64]
    roles: tuple[str, ...] = ()
    sd_mm: NDArray[np.float64] | None = None

    def __post_init__(self) -> None:
        points = self._own("points", np.float64, (None, 3))
        require_finite(points, "Landmarks.points")
        object.__setattr__(self, "names", tuple(str(n) for n in self.names))
        if len(self.names) != len(points):
            raise InputError("one name a landmark", found=f"{len(self.names)} for {len(points)}")
        object.__setattr__(self, "roles", _check_roles(self.roles, len(points)))
        if self.sd_mm is not None:
            _check_sd(self._own("sd_mm", np.float64, (len(points),)))


@dataclass(frozen=True, eq=False)
class LandmarkPairs(Frozen):
    """Named points of one scan with their partners in the other.

    Parameters
    ----------
    names : tuple of str
    points : (n, 3) float64, mm, RAS+
        In SOURCE's world.
    to_points : (n, 3) float64, mm, RAS+
        In TARGET's world.
    roles : tuple of str
        'guide' or 'check', never both.
    sd_mm : (n,) float64
        Standard deviation of a pair's placement, mm.
    """

    names: tuple[str, ...]
    points: NDArray[np.float64]
    to_points: NDArray[np.float64]
    roles: tuple[str, ...] = ()
    sd_mm: NDArray[np.float64] | None = None

    def __post_init__(self) -> None:
        points = self._own("points", np.float64, (None, 3))
        to_points = self._own("to_points", np.float64, (len(points), 3))
        require_finite(points, "LandmarkPairs.points")
        require_finite(to_points, "LandmarkPairs.to_points")
        object.__setattr__(self, "names", tuple(str(n) for n in self.names))
        if len(self.names) != len(points):
            raise InputError("one name a landmark", found=f"{len(self.names)} for {len(points)}")
        object.__setattr__(self, "roles", _check_roles(self.roles, len(points)))
        if self.sd_mm is None:
            object.__setattr__(self, "sd_mm", np.ones(len(points)))
        _check_sd(self._own("sd_mm", np.float64, (len(points),)))

    def of_role(self, role: str) -> LandmarkPairs:
        """The pairs of one role."""
        keep = [i for i, r in enumerate(self.roles) if r == role]
        assert self.sd_mm is not None
        return LandmarkPairs(
            tuple(self.names[i] for i in keep),
            self.points[keep],
            self.to_points[keep],
            tuple(self.roles[i] for i in keep),
            self.sd_mm[keep],
        )

    def reversed(self) -> LandmarkPairs:
        """The same pairs asked for the other way round."""
        return LandmarkPairs(self.names, self.to_points, self.points, self.roles, self.sd_mm)
