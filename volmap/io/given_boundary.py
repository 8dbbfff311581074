"""A given boundary correspondence: a surface with `image_mm` on its points.

Read: what `mesh_parts` reads of the formats that can hold point data (VTP, VTU, VTK, PLY, gmsh), of triangles
or of tets (then its boundary counts, and what lies between its labels).
PLY has no vectors: three properties `image_mm_x`, `image_mm_y`, `image_mm_z` (or with 0, 1, 2) stand for one.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np
from numpy.typing import NDArray

from volmap.io.mesh_parts import LARGEST_MM, MeshParts, read_parts
from volmap.io.opening import shown_name
from volmap.io.vtk_xml import PathLike, write_surface
from volmap.kernels.topology import interfaces
from volmap.types.errors import InputError
from volmap.types.given_boundary import GivenBoundary
from volmap.types.surface import Surface

IMAGE = "image_mm"


def read_given_boundary(
    path: PathLike, *, tolerance_mm: float | None = None, reach_mm: float | None = None
) -> GivenBoundary:
    """Read a surface with `image_mm`, where each of its points goes.

    Parameters
    ----------
    path : path
    tolerance_mm, reach_mm : float, optional
        See `GivenBoundary`; what the file says of them itself (as one in a map folder does) stands back.

    Raises
    ------
    InputError
        Not readable, no triangles, no point array `image_mm` of three components, values not finite, or no
        tolerance from anywhere.
    """
    where = shown_name(path)
    parts = read_parts(path)
    points, arrays, told = parts.points, parts.point_data, parts.told
    triangles = _triangles(parts, where)
    if not len(triangles):
        raise InputError(
            "holds no triangles",
            where=where,
            expected="a surface of triangles with `image_mm` on its points",
            remedy="triangulate it and write it again",
        )
    images = _images(arrays, len(points), where)
    used = np.unique(triangles)
    for values, what in ((points, "points"), (images, f"values of `{IMAGE}`")):
        _require_finite(values, used, what, where)
    try:
        return GivenBoundary(
            points[used],
            np.searchsorted(used, triangles),
            images[used],
            _number(told, "tolerance_mm", tolerance_mm, where),
            _number(told, "reach_mm", reach_mm, where),
            where,
        )
    except InputError as fault:
        raise fault.at(where) from fault


def _require_finite(values: NDArray[np.float64], used: NDArray[np.int64], what: str, where: str) -> None:
    bad = ~(np.abs(values[used]) < LARGEST_MM).all(axis=1)
    if bad.any():
        raise InputError(
            f"some {what} are not finite",
            where=where,
            found=f"{int(bad.sum())} of {len(used)}, the first at point {int(used[bad.argmax()])}",
            expected=f"coordinates below {LARGEST_MM:g} mm",
            remedy="leave out the triangles of points that have no image",
        )


def write_given_boundary(path: PathLike, given: GivenBoundary, *, overwrite: bool = False) -> None:
    """Write it as .vtp, with its tolerance, reach and name in the field data.

    Raises
    ------
    InputError
        As `write_surface`.
    """
    sides = np.tile([1, 0], (len(given.triangles), 1))
    told: dict[str, str | float] = {
        "name": given.name,
        "tolerance_mm": given.tolerance_mm,
        "reach_mm": given.reach_mm,
    }
    write_surface(
        path,
        Surface(given.points, given.triangles, sides),
        point_data={IMAGE: given.images},
        field_data=told,
        overwrite=overwrite,
    )


def _triangles(parts: MeshParts, where: str) -> NDArray[np.int64]:
    """The triangles of a surface, or those around and between the labels of a tet mesh."""
    try:
        triangles, tets = parts.of_kind("triangle"), parts.of_kind("tetra")
    except InputError as fault:
        raise fault.at(where) from fault
    if len(tets) and len(triangles):
        raise InputError(
            "holds neither triangles nor tets alone", where=where,
            found=f"{len(triangles)} triangles and {len(tets)} tets", remedy="keep one of them",
        )  # fmt: skip
    if not len(tets):
        return triangles
    n_cells = sum(map(len, parts.rows.values()))
    labels = parts.cell_data.get("label", np.ones(n_cells, np.int64))
    return interfaces(tets, labels[parts.rows["tetra"]].astype(np.int64))[0]


def _images(arrays: Mapping[str, NDArray[Any]], n: int, where: str) -> NDArray[np.float64]:
    values = arrays.get(IMAGE)
    for ends in ("xyz", "012"):
        parts = [arrays.get(f"{IMAGE}_{end}") for end in ends]
        if values is None and all(part is not None for part in parts):
            values = np.stack([np.asarray(part) for part in parts], axis=-1)
    if values is None:
        raise InputError(
            f"holds no point array `{IMAGE}`",
            where=where,
            found=", ".join(sorted(map(str, arrays))) or "no point data",
            expected=f"`{IMAGE}`, three components: where each point goes in TARGET, mm",
            remedy="name the array so, on the points, not on the triangles",
        )
    if np.shape(values) != (n, 3) or np.asarray(values).dtype.kind not in "fiu":
        raise InputError(
            f"`{IMAGE}` does not fit the points",
            where=where,
            found=f"{np.asarray(values).dtype} of shape {np.shape(values)}",
            expected=f"numbers of shape ({n}, 3)",
        )
    return np.asarray(values, np.float64)


def _number(told: Mapping[str, Any], name: str, given: float | None, where: str) -> float:
    if given is not None:
        return given
    try:
        return float(np.asarray(told[name], np.float64).reshape(-1)[0])
    except (KeyError, ValueError, TypeError, IndexError) as fault:
        raise InputError(
            f"does not say its {name}", where=where, expected="a number in its field data"
        ) from fault
