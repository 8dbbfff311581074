"""The words and numbers that go beside a field's file, so that nobody has to guess its direction."""

from __future__ import annotations

import math
from dataclasses import asdict
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage

from volmap.carry.direction_proof import TOLERANCE_MM
from volmap.carry.sampling import N_RANDOM, FieldError, RoundTrip, field_error
from volmap.types import Grid, GridField, InputError, VolumeMap
from volmap.types.notice import caution

Direction = Literal["forward", "backward"]


def field_sidecar(
    field: GridField,
    volume_map: VolumeMap,
    *,
    direction: Direction,
    grid_sha256: str,
    points_into_sha256: str,
    points_into_grid: Grid,
    paired_file: str,
    paired: RoundTrip,
) -> dict[str, Any]:
    """Everything a reader must know to use a field, as one JSON document.

    Parameters
    ----------
    field : GridField
    volume_map : VolumeMap
        The map, never reversed.
    direction : 'forward' or 'backward'
        Forward: on SOURCE's grid, into TARGET.  Backward: on TARGET's grid, into SOURCE.
    grid_sha256, points_into_sha256 : str
        Digests of the label volume whose grid this is, and of the one the field points into.
    points_into_grid : Grid
        Of that one: what has its voxels can be told to belong to it.
    paired_file : str
        File name of the field of the other direction.
    paired : RoundTrip
        ``round_trip(field, the other field)``.

    Raises
    ------
    InputError
        Names that hold a path; a field that does not run in that direction.
    """
    exact = volume_map if direction == "forward" else volume_map.reversed()
    _check_names(field, exact, paired_file)
    here, there = ("SOURCE", "TARGET") if direction == "forward" else ("TARGET", "SOURCE")
    return {
        "schema": "volmap-field/1",
        "direction": direction,
        **_meaning(field, here, there),
        "grid_space": {"role": here, "name": field.grid_space, "sha256": grid_sha256}
        | {"grid": _grid_words(field.grid)},
        "points_into": {"role": there, "name": field.points_into, "sha256": points_into_sha256}
        | {"grid": _grid_words(points_into_grid)},
        "digest": "SHA-256 of the label volume: shape (3 int64), voxels (uint16, first index fastest) and "
        "affine (16 float32, row by row), all little-endian",
        **_CONVENTIONS,
        "against_exact_map": _against_exact(field_error(field, exact)),
        "paired_file": paired_file,
        "round_trip": _pair(paired, here, there),
        "check_point": check_point(field),
        "notice": caution(),
    }


_CONVENTIONS = {
    "frame": "NIfTI world, RAS+: x grows to the right, y to the front, z to the head; vectors have "
    "components along these axes, never along the axes of the voxel grid",
    "order": "the component is the fifth NIfTI dimension, x then y then z; NIfTI intent 1006, "
    "displacement vector",
    "units": "mm",
    "outside": "NaN in all three components: the voxel centre is outside the mesh, and the map is not "
    "defined there",
    "interpolation": "trilinear between voxel centres, and only where all voxels with a share are defined; "
    "the exact map is affine in each tet of map.vtu and was evaluated at the voxel centres",
}


def _grid_words(grid: Grid) -> dict[str, Any]:
    """Voxels and affine: what any volume of that scan on that grid has."""
    return {"shape": list(grid.shape), "affine": grid.affine.tolist()}


def _meaning(field: GridField, here: str, there: str) -> dict[str, Any]:
    """Formula and both uses, in words."""
    return {
        "formula": f"y = x + u(x): x is the centre of a voxel of this grid, a point in the world of {here} "
        f"({field.grid_space}); u(x) is the vector stored there; y is the matching point in the world of "
        f"{there} ({field.points_into})",
        "uses": [
            f"resamples images of {there} onto {here}'s grid: the voxel at x takes the value of the {there} "
            "image at y",
            f"moves points from {here} into {there}: a point at x goes to y",
        ],
        "not_for": f"moving points from {there} into {here}: that is the paired field; this one with its "
        "sign changed in place is not the inverse",
    }


def _against_exact(error: FieldError) -> dict[str, Any]:
    how = (
        "trilinear samples against the exact piecewise affine map at all mesh points, all tet centroids and "
        f"{N_RANDOM} random places (fixed seed), where the sample is defined"
    )
    return _without_nan(asdict(error)) | {"how": how}


def _pair(paired: RoundTrip, here: str, there: str) -> dict[str, Any]:
    how = (
        f"every defined voxel centre of this grid goes from {here} to {there} by this field and back by the "
        "paired one, sampled trilinearly; coverage is the part of them for which the way back is defined"
    )
    return _without_nan(asdict(paired)) | {"how": how}


_PLAIN_MM = 1.0  # a component that is off by this is seen in any viewer


def check_point(field: GridField) -> dict[str, Any] | None:
    """A voxel deep inside the support that tells mistakes best, with its numbers; None for an empty field.

    Where a component is 0, nobody sees its sign turned; where two are equal, nobody sees them swapped.  So of
    the voxels at least half as deep as the deepest, that one is taken whose vector is farthest from its
    turnings and swappings: of equal ones the deepest, then the first.

    Returns
    -------
    dict
        ``voxel`` (i, j, k from 0), ``x_mm``, ``u_mm`` (as stored, float32) and ``y_mm``.
    """
    voxel = _most_telling(field)
    if voxel is None:
        return None
    x = field.grid.to_world(np.array([voxel], np.float64))[0]
    u = field.displacement[voxel].astype(np.float64)
    return {"voxel": list(voxel), "x_mm": x.tolist(), "u_mm": u.tolist(), "y_mm": (x + u).tolist()}


def _most_telling(field: GridField) -> tuple[int, int, int] | None:
    """Depth is counted in steps to an undefined voxel (or past the border)."""
    if not field.support.any():
        return None
    box = ndimage.find_objects(field.support)[0]
    steps = ndimage.distance_transform_cdt(np.pad(field.support[box], 1), "chessboard")[1:-1, 1:-1, 1:-1]
    places = np.argwhere(2 * steps >= steps.max())
    depths = steps[tuple(places.T)]
    told = _told_by(field.displacement[box][tuple(places.T)].astype(np.float64))
    best = np.lexsort((-depths, -told))[0]
    i, j, k = (int(p) + s.start for p, s in zip(places[best], box, strict=True))
    return i, j, k


def _told_by(vectors: NDArray[np.float64]) -> NDArray[np.float64]:
    """(n,) Product of how far the nearest turning and the two nearest swappings are, in clearly seen steps.

    Each between what is within the tolerance, which counts alike however small, and what is plain to see.
    """
    a, b, c = np.sort(np.abs(vectors), axis=1).T
    apart = np.stack([2 * a, b - a, c - b])
    return np.asarray(np.clip(apart, TOLERANCE_MM, _PLAIN_MM).prod(axis=0))


def _check_names(field: GridField, exact: VolumeMap, paired_file: str) -> None:
    if (field.grid_space, field.points_into) != (exact.source, exact.target):
        raise InputError(
            "a field does not run in the direction it is said to",
            found=f"{field.grid_space} to {field.points_into}",
            expected=f"{exact.source} to {exact.target}",
        )
    for name in (field.grid_space, field.points_into, paired_file):
        if "/" in name or "\\" in name:
            raise InputError("a name holds a path", where=name, expected="a file name only")


def _without_nan(values: dict[str, Any]) -> dict[str, Any]:
    """None for what was not measured: JSON has no NaN."""

    def plain(value: Any) -> Any:
        if isinstance(value, tuple):
            return [plain(v) for v in value]
        return None if isinstance(value, float) and math.isnan(value) else value

    return {name: plain(value) for name, value in values.items()}
