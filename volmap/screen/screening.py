"""Look at one label volume."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage

from volmap.kernels import voxels
from volmap.screen import judging
from volmap.screen.regions import Box, Region, body_box, enclosed, most_common, pieces
from volmap.screen.results import LabelScreen, ScreenResult, by_gravity
from volmap.screen.thickness import thinnest
from volmap.types.findings import Finding
from volmap.types.grid import Grid
from volmap.types.volumes import LabelVolume

_TOWARDS = {"L": "left", "R": "right", "A": "anterior", "P": "posterior", "S": "superior", "I": "inferior"}
_OPPOSITE = {"L": "R", "R": "L", "A": "P", "P": "A", "S": "I", "I": "S"}


def screen(labels: LabelVolume, *, edge_mm: float | None = None) -> ScreenResult:
    """What is in a label volume, and what would go wrong with it.

    Parameters
    ----------
    labels : LabelVolume
    edge_mm : float, optional
        Mesh edge the volume is meant for; parts too small for it are then warned of too.
    """
    present = labels.present
    findings = judging.of_grid(labels)
    if not present or len(present) > judging.MOST_LABELS:
        return _result(labels, (), [*findings, *judging.of_label_set(labels.name, present)])
    box = body_box(labels.labels, margin=1)
    body = np.array(labels.labels[box])
    findings += judging.of_body(labels, body, edge_mm)
    cavities = _cavities_by_label(body)
    contacts = voxels.face_contacts(np.pad(body, 1))
    border = _borders(labels)
    entries = []
    for label, small in zip(present, _label_boxes(body, present), strict=True):
        mask = np.pad(body[small] == label, 1)
        origin = np.array([b.start + s.start - 1 for b, s in zip(box, small, strict=True)])
        entry = _entry(labels, label, mask, origin, cavities.get(label, []), border.get(label, ()))
        entry = _with_neighbours(entry, contacts, labels.grid)
        entries.append(entry)
        findings += judging.of_label(labels, entry, mask, origin, cavities.get(label, []), edge_mm)
    return _result(labels, tuple(entries), findings)


def face_areas_mm2(grid: Grid) -> NDArray[np.float64]:
    """(3,) area of the voxel faces across i, j and k, mm2."""
    a, b, c = grid.affine[:3, :3].T
    return np.array([np.linalg.norm(np.cross(*pair)) for pair in ((b, c), (c, a), (a, b))])


def _result(labels: LabelVolume, entries: tuple[LabelScreen, ...], findings: list[Finding]) -> ScreenResult:
    grid = labels.grid
    x, y, z = (float(v) for v in grid.spacing)
    return ScreenResult(
        labels.name,
        labels.sha256,
        grid.shape,
        grid.orientation,
        (x, y, z),
        grid.handedness,
        grid.shear,
        entries,
        by_gravity(findings),
    )


def _label_boxes(body: NDArray[np.uint16], present: tuple[int, ...]) -> list[Box]:
    boxes = ndimage.find_objects(body.astype(np.int32))
    return [boxes[label - 1] for label in present]


def _cavities_by_label(body: NDArray[np.uint16]) -> dict[int, list[Region]]:
    found: dict[int, list[Region]] = {}
    for region in enclosed(body == 0):
        found.setdefault(most_common(region.values_around(body)), []).append(region)
    return found


def _borders(labels: LabelVolume) -> dict[int, tuple[str, ...]]:
    """Faces of the grid each label touches, in words."""
    found: dict[int, tuple[str, ...]] = {}
    for axis, letter in enumerate(labels.grid.orientation):
        for index, towards in ((0, _OPPOSITE[letter]), (-1, letter)):
            for label in np.unique(np.take(labels.labels, index, axis)).tolist():
                found[label] = (*found.get(label, ()), _TOWARDS[towards])
    return found


def _entry(
    labels: LabelVolume,
    label: int,
    mask: NDArray[np.bool_],
    origin: NDArray[np.int64],
    cavities: list[Region],
    border: tuple[str, ...],
) -> LabelScreen:
    _, sizes = pieces(mask)
    n, voxel_mm3 = int(sizes.sum()), labels.grid.voxel_mm3
    euler, voids = voxels.euler_number(mask), len(enclosed(~mask))
    thin, n_thin, place = thinnest(mask)
    at = None if place is None else _world(labels.grid, np.array(place) + origin)
    return LabelScreen(
        label=label,
        name=labels.name_of(label),
        voxels=n,
        volume_mm3=n * voxel_mm3,
        pieces=len(sizes),
        piece_voxels=tuple(sorted(sizes.tolist(), reverse=True)),
        euler=euler,
        voids=voids,
        handles=len(sizes) + voids - euler,
        cavities=len(cavities),
        cavity_mm3=sum(c.voxels for c in cavities) * voxel_mm3,
        thinnest_voxels=thin,
        thin_voxels=n_thin,
        thinnest_at_mm=at,
        border=border,
        neighbours=(),
    )


def _with_neighbours(
    entry: LabelScreen, contacts: dict[tuple[int, int], NDArray[np.int64]], grid: Grid
) -> LabelScreen:
    areas = face_areas_mm2(grid)
    beside = [
        (b if a == entry.label else a, float(faces @ areas))
        for (a, b), faces in contacts.items()
        if entry.label in (a, b) and a > 0
    ]
    return replace(entry, neighbours=tuple(sorted(beside)))


def _world(grid: Grid, index: NDArray[np.int64]) -> tuple[float, float, float]:
    x, y, z = grid.to_world(index[None].astype(np.float64))[0].tolist()
    return x, y, z
