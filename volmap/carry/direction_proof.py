"""Does a field still say what its document says, and what the map says?  If not: which mistake is it?

The mistakes that cost most are few: the sign of an axis, the order of the components, the whole vector turned
round, the field of the other direction, a grid that is one voxel off.  Each leaves a signature that can be
tried for; so a field that fails is not only refused, the mistake is named.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from itertools import permutations, product
from typing import Any

import numpy as np
from numpy.typing import NDArray

from volmap.carry.points import move_points
from volmap.types import Grid, GridField, VolumeMap

Floats = NDArray[np.float64]

TOLERANCE_MM = 1e-3  # of positions and float32 displacements
N_COMPARED = 5000  # voxels of a field that are compared with each mistake
FARTHEST_VOXELS = 2  # shifts of a grid that are tried for


@dataclass(frozen=True)
class DirectionProof:
    """A field's check point, read back.

    Parameters
    ----------
    name : str
        Of the field's file.
    faults : tuple of str
        A sentence for each thing that is not as it must be.
    told : str
        What was checked, in one sentence; empty when there were faults.
    """

    name: str
    faults: tuple[str, ...]
    told: str = ""


def direction_proof(
    field: GridField,
    document: Mapping[str, Any],
    *,
    name: str,
    exact: VolumeMap | None = None,
) -> DirectionProof:
    """Check a field as read from its file against the check point in its document, and against the map.

    Parameters
    ----------
    field : GridField
    document : mapping
        The field's .json.
    name : str
        Of the field's file.
    exact : VolumeMap, optional
        The map in the direction of the field.
    """
    point = _check_point(document)
    if point is None:
        empty = not field.support.any() and document.get("check_point", 0) is None
        fault = f"{name}: its .json holds no check point (voxel, x_mm, u_mm, y_mm) that can be read"
        return DirectionProof(name, () if empty else (fault,), f"{name}: an empty field" if empty else "")
    voxel, x, u, y = point
    faults = [f"{name}: {what}" for what in _point_faults(field, voxel, x, u, y)]
    told = (
        f"{name}: check point read back at voxel {voxel}: x = {_mm(x)}, u = {_mm(u)}, y = {_mm(y)} mm, "
        f"y = x + u, all within {TOLERANCE_MM:g} mm"
    )
    if exact is not None:
        image = move_points(exact, x[None]).points[0]
        if not np.abs(image - y).max() <= TOLERANCE_MM:
            faults.append(
                f"{name}: the exact map sends the check point x = {_mm(x)} to {_mm(image)} mm, not to "
                f"y = {_mm(y)} mm"
            )
        told += ", and the exact map agrees"
    return DirectionProof(name, tuple(faults), "" if faults else told)


def _check_point(document: Mapping[str, Any]) -> tuple[tuple[int, ...], Floats, Floats, Floats] | None:
    """Voxel, x, u and y, or None when the document does not hold them as it should."""
    point = document.get("check_point")
    try:
        voxel = tuple(int(i) for i in point["voxel"])  # type: ignore[index]
        x, u, y = (np.array(point[k], np.float64) for k in ("x_mm", "u_mm", "y_mm"))  # type: ignore[index]
    except (TypeError, KeyError, ValueError):
        return None
    fits = len(voxel) == 3 and all(v.shape == (3,) and np.isfinite(v).all() for v in (x, u, y))
    return (voxel, x, u, y) if fits else None


def _point_faults(field: GridField, voxel: tuple[int, ...], x: Floats, u: Floats, y: Floats) -> Iterator[str]:
    if any(not 0 <= i < n for i, n in zip(voxel, field.grid.shape, strict=True)):
        yield f"the check point's voxel {voxel} lies outside its {field.grid.shape} voxels"
        return
    here = field.grid.to_world(np.array([voxel], np.float64))[0]
    if np.abs(here - x).max() > TOLERANCE_MM:
        cause = _named_place(field.grid, voxel, x)
        yield f"voxel {voxel} lies at {_mm(here)} mm, and the check point says x = {_mm(x)}{cause}"
    stored = field.displacement[voxel].astype(np.float64)
    if not np.abs(stored - u).max() <= TOLERANCE_MM:
        cause = _named(mistake_between(stored[None], u[None]))
        yield f"the vector at voxel {voxel} is {_mm(stored)} mm, and the check point says u = {_mm(u)}{cause}"
    if np.abs(x + u - y).max() > TOLERANCE_MM:
        yield f"the check point's y = {_mm(y)} mm is not its x + u = {_mm(x + u)}"


def _named(mistake: str) -> str:
    return f": {mistake}" if mistake else ""


def _mm(vector: Floats) -> str:
    return "(" + ", ".join(f"{v:.4g}" for v in vector) + ")"


def _named_place(grid: Grid, voxel: tuple[int, ...], x: Floats) -> str:
    """What moved the grid, as far as one voxel tells."""
    offset = grid.to_index(x[None])[0] - voxel
    steps = np.rint(offset)
    if np.abs(offset - steps).max() * grid.spacing.max() <= TOLERANCE_MM and 0 < np.abs(steps).max() <= 2:
        return f": its affine is off by {_steps(steps)}"
    here = grid.to_world(np.array([voxel], np.float64))[0]
    return _named(mistake_between(here[None], x[None]).replace("the vectors", "its positions"))


def _steps(steps: Floats) -> str:
    """ "1 voxel along i and -1 voxel along k"."""
    moved = [(int(n), axis) for n, axis in zip(steps, "ijk", strict=True) if n]
    return " and ".join(f"{n} voxel{'s' if abs(n) > 1 else ''} along {axis}" for n, axis in moved)


def grid_mistake(found: Grid, wanted: Grid) -> str:
    """In which way one grid is not the other, in words; what is not recognised is told by its corners."""
    if found.shape != wanted.shape:
        return f"{found.shape} voxels instead of {wanted.shape}"
    offset = wanted.to_index(found.affine[None, :3, 3])[0]
    steps = np.rint(offset)
    same_axes = np.allclose(found.affine[:3, :3], wanted.affine[:3, :3], atol=1e-5)
    if same_axes and np.abs(offset - steps).max() * wanted.spacing.max() <= TOLERANCE_MM:
        return f"its affine is off by {_steps(steps)}"
    for signs in product((1.0, -1.0), repeat=3):
        turned = np.diag([*signs, 1.0]) @ wanted.affine
        if np.allclose(found.affine, turned, atol=TOLERANCE_MM):
            return _signs(signs).replace("the vectors have", "its affine has")
    gap = np.abs(found.affine - wanted.affine).max()
    return f"its affine differs by up to {gap:.3g} mm"


def field_mistake(stored: GridField, wanted: GridField, other: GridField | None = None) -> str:
    """The mistake that explains a whole field, in words; empty when none that is known does.

    Parameters
    ----------
    stored, wanted : GridField
        On one grid: as found, and as the map gives it.
    other : GridField, optional
        What the map gives in the other direction.
    """
    both = np.argwhere((stored.support & wanted.support) > 0)
    some = both[:: max(1, len(both) // N_COMPARED)]
    if not len(some):
        return ""
    found, right = (f.displacement[tuple(some.T)].astype(np.float64) for f in (stored, wanted))
    named = mistake_between(found, right)
    if named:
        return named
    turned = other is not None and other.grid.shape == stored.grid.shape
    if other is not None and turned and _alike(found, other.displacement[tuple(some.T)].astype(np.float64)):
        return "it holds the displacements of the other direction"
    return _shifted(some, found, wanted)


def mistake_between(found: Floats, right: Floats) -> str:
    """Which turning or swapping of components makes vectors of others, in words; empty when none does.

    Parameters
    ----------
    found, right : (n, 3) float64, mm
    """
    if _alike(found, right):
        return ""
    orders = sorted(permutations(range(3)), key=lambda o: sum(a != b for a, b in enumerate(o)))
    signs = sorted(product((1.0, -1.0), repeat=3), key=_rarity)
    for order in orders:
        for sign in signs:
            if _alike(found, right[:, order] * sign):
                return _swap(order) if sign == (1, 1, 1) else _both(order, sign)
    return ""


_COMMON: dict[tuple[float, ...], str] = {  # the mistakes people make
    (1.0, 1.0, 1.0): "",
    (-1.0, -1.0, -1.0): "the vectors have their sign turned (the negative of a field is not its inverse)",
    (-1.0, -1.0, 1.0): "the vectors have x and y turned, as in LPS instead of RAS+",
}


def _rarity(signs: tuple[float, ...]) -> int:
    """The common mistakes come first."""
    return list(_COMMON).index(signs) if signs in _COMMON else len(_COMMON)


def _both(order: tuple[int, ...], signs: tuple[float, ...]) -> str:
    return _signs(signs) if order == (0, 1, 2) else f"{_swap(order)}, and {_signs(signs)}"


def _signs(signs: tuple[float, ...]) -> str:
    turned = " and ".join(axis for axis, s in zip("xyz", signs, strict=True) if s < 0)
    return _COMMON.get(signs, f"the vectors have {turned} turned")


def _swap(order: tuple[int, ...]) -> str:
    return f"the vectors have their components in the order {', '.join('xyz'[k] for k in order)}"


def _shifted(voxels: NDArray[np.int64], found: Floats, wanted: GridField) -> str:
    """A field that was laid down one or two voxels beside its place."""
    shape = np.array(wanted.grid.shape)
    steps = np.arange(-FARTHEST_VOXELS, FARTHEST_VOXELS + 1)
    for step in sorted(product(steps, repeat=3), key=lambda s: sum(abs(n) for n in s))[1:]:
        place = voxels + step
        inside = ((place >= 0) & (place < shape)).all(axis=1)
        right = wanted.displacement[tuple(place[inside].T)].astype(np.float64)
        known = ~np.isnan(right[:, 0])
        if known.sum() > len(voxels) // 2 and _alike(found[inside][known], right[known]):
            return f"it is laid down off its place by {_steps(-np.array(step, np.float64))}"
    return ""


def _alike(found: Floats, right: Floats) -> bool:
    return bool(np.abs(found - right).max(initial=0.0) <= TOLERANCE_MM)
