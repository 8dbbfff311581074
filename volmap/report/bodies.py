"""Bodies in the round, coloured by volume ratio."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from volmap.kernels import planecuts, zbuffer
from volmap.kernels.topology import face_corners, match_faces
from volmap.report import scales
from volmap.report.views import View

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Image = NDArray[np.float32]

_SAMPLES = 2
_NOTHING = -(10**6)
_KEY, _FILL = np.array([-0.45, 0.55, 0.70]), np.array([0.80, -0.10, 0.60])
_GHOST = np.array([0.45, 0.49, 0.55])


@dataclass(frozen=True, eq=False)
class Sheet:
    """Triangles to be drawn.

    Parameters
    ----------
    points : (n, 3) float64, mm
    triangles : (m, 3) int64
    colours : (m, 3) float64, 0 to 1
    group : (m,) int64
        A dark line is drawn where the group changes.
    kind : str
        'solid' (soft light), 'face' (a cut face: no shading, so that its colours read true), 'ghost' (seen
        through, denser toward its rim).
    """

    points: Floats
    triangles: Ints
    colours: Floats
    group: Ints
    kind: str = "solid"


@dataclass(frozen=True, eq=False)
class Faces:
    """Faces of a mesh with the tet each belongs to; corners counter-clockwise from outside that tet."""

    triangles: Ints
    tet: Ints


def hull_faces(tets: Ints) -> Faces:
    """Faces toward the outside."""
    hull = match_faces(tets)[2]
    return Faces(face_corners(tets, hull), hull // 4)


def label_faces(tets: Ints, labels: Ints, label: int) -> Faces:
    """The closed surface of one label, seen from its own tets."""
    first, second, hull = match_faces(tets)
    a, b = labels[first // 4] == label, labels[second // 4] == label
    own = np.concatenate([first[a & ~b], second[b & ~a], hull[labels[hull // 4] == label]])
    return Faces(face_corners(tets, own), own // 4)


def opened(
    points: Floats, tets: Ints, labels: Ints, values: Floats, tet_colours: Floats, moved: Floats | None = None
) -> list[Sheet]:
    """A body cut open where `values` is zero, the part above taken away.

    Parameters
    ----------
    points : (n, 3) float64, mm
        Kept for the cut; drawn when `moved` is None.
    values : (n,) float64
        Signed height over the cut.
    tet_colours : (m, 3) float64
    moved : (n, 3) float64, optional
        Where the points are drawn instead: the cut goes with the material.
    """
    at = points if moved is None else moved
    faces = hull_faces(tets)
    shell = planecuts.clip_triangles(values, faces.triangles)
    owner = faces.tet[shell.parent]
    cut = planecuts.cut_tets(values, tets)
    return [
        Sheet(shell.at(at), shell.cells, tet_colours[owner], -1 - labels[owner]),
        Sheet(cut.at(at), cut.cells, tet_colours[cut.parent], labels[cut.parent], "face"),
    ]


def paint(
    sheets: Sequence[Sheet], view: View, centre: Floats, *, mm_per_px: float, height: int, width: int
) -> Image:
    """A picture of several sheets.

    Parameters
    ----------
    centre : (3,) float64, mm
        Stands in the middle of the picture.

    Returns
    -------
    (height, width, 3) float32, 0 to 1
    """
    shape = (height * _SAMPLES, width * _SAMPLES)
    opaque = [s for s in sheets if s.kind != "ghost"]
    ghosts = [s for s in sheets if s.kind == "ghost"]
    image, depth, face = _draw(
        opaque, view, centre, mm_per_px, shape, (*scales.channels(scales.BACKDROP), 1.0)
    )
    group = np.concatenate([*(s.group for s in opaque), np.array([_NOTHING])])[face]
    image[zbuffer.rims(group, depth, 0.06 * min(height, width) * mm_per_px), :3] *= 0.35
    if ghosts:
        veil, veil_depth, _ = _draw(ghosts, view, centre, mm_per_px, shape)
        zbuffer.lay_over(veil, image, veil_depth < depth)
    return np.asarray(zbuffer.shrink(image, _SAMPLES)[..., :3])


def _draw(
    sheets: list[Sheet],
    view: View,
    centre: Floats,
    mm_per_px: float,
    shape: tuple[int, int],
    ground: tuple[float, float, float, float] = (0.0, 0.0, 0.0, 0.0),
) -> tuple[Image, Floats, Ints]:
    screens, triangles, colours, offset = [], [], [], 0
    for sheet in sheets:
        local = (sheet.points - centre) @ view.axes.T
        screens.append(local)
        triangles.append(sheet.triangles + offset)
        colours.append(_corner_colours(local, sheet))
        offset += len(local)
    world = np.concatenate([*screens, np.zeros((0, 3))])
    scale = _SAMPLES / mm_per_px
    screen = np.stack(
        [shape[1] / 2 + scale * world[:, 0], shape[0] / 2 - scale * world[:, 1], -world[:, 2]], axis=1
    )
    return zbuffer.draw_triangles(
        screen,
        np.concatenate([*triangles, np.zeros((0, 3), np.int64)]),
        np.concatenate([*colours, np.zeros((0, 3, 4))]),
        height=shape[0],
        width=shape[1],
        ground=ground,
    )


def _corner_colours(local: Floats, sheet: Sheet) -> Floats:
    """(m, 3, 4) colours at the corners: the triangle's own, under soft light."""
    result = np.ones((len(sheet.triangles), 3, 4))
    if sheet.kind == "face":
        result[..., :3] = sheet.colours[:, None]
        return result
    normals = _corner_normals(local, sheet.triangles)
    if sheet.kind == "ghost":
        result[..., :3] = _GHOST
        result[..., 3] = 0.045 + 0.45 * (1.0 - np.abs(normals[..., 2])) ** 2
        return result
    light = 0.66 + 0.30 * _soft(normals @ (_KEY / np.linalg.norm(_KEY)))
    light += 0.10 * _soft(normals @ (_FILL / np.linalg.norm(_FILL)))
    result[..., :3] = np.minimum(sheet.colours[:, None] * light[..., None], 1.0)
    return result


def _soft(cosine: Floats) -> Floats:
    """Light of a wide lamp: it reaches a little round the corner."""
    return np.asarray(np.clip((cosine + 0.35) / 1.35, 0.0, 1.0))


def _corner_normals(points: Floats, triangles: Ints) -> Floats:
    """(m, 3, 3) unit normals at the corners: area-weighted means over the triangles around a point."""
    a, b, c = (points[triangles[:, k]] for k in range(3))
    normal = np.cross(b - a, c - a)
    flat = triangles.ravel()
    around = np.stack(
        [np.bincount(flat, np.repeat(normal[:, d], 3), minlength=len(points)) for d in range(3)], axis=1
    )
    length = np.linalg.norm(around, axis=1, keepdims=True)
    return np.asarray((around / np.where(length > 0, length, 1.0))[triangles])
