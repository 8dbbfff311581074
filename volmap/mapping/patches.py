"""Which part of one body's surface is matched with which part of the other's.

Faces between labels a and b form a patch of their own when that contact is *steady*: present in both
bodies with a like share of the labels' surfaces and in a like place.  All other faces of a label - towards
the outside, or towards a label it merely touches in one scan - form its *free* patch, so that an accidental
contact is matched to the nearest surface of the label itself.  A face of an accidental contact belongs to the
free patches of both labels, with half its weight in each.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from volmap.types import Surface

SMALLEST_SHARE = 0.02  # of the smaller label's whole surface, in both bodies
LARGEST_AREA_RATIO = 3.0  # between the bodies, after taking out their overall scale


@dataclass(frozen=True, eq=False)
class Patch:
    """Matching parts of two surfaces.

    Parameters
    ----------
    name : str
        "2|1" for the contact of labels 2 and 1, "2" for the free surface of label 2.
    source, target : (k, 3) int64
        Triangles, normals to the same side in both bodies.
    source_share, target_share : (k,) float64
        Weight of each triangle (1, or 0.5 in an accidental contact).
    """

    name: str
    source: NDArray[np.int64]
    target: NDArray[np.int64]
    source_share: NDArray[np.float64]
    target_share: NDArray[np.float64]


def face_normals(points: NDArray[np.float64], triangles: NDArray[np.int64]) -> NDArray[np.float64]:
    """(k, 3) normals, length twice the area."""
    p = points[triangles]
    return np.asarray(np.cross(p[:, 1] - p[:, 0], p[:, 2] - p[:, 0]))


def areas(points: NDArray[np.float64], triangles: NDArray[np.int64]) -> NDArray[np.float64]:
    """(k,) areas, mm2."""
    return np.asarray(0.5 * np.linalg.norm(face_normals(points, triangles), axis=1))


@dataclass(frozen=True)
class _Contact:
    area: float
    share: float  # of the smaller label's surface
    centre: NDArray[np.float64]


def _contacts(surface: Surface) -> dict[tuple[int, int], _Contact]:
    area = areas(surface.points, surface.triangles)
    whole: dict[int, float] = {}
    for label in np.unique(surface.sides[surface.sides > 0]):
        whole[int(label)] = float(area[(surface.sides == label).any(axis=1)].sum())
    found = {}
    for a, b in surface.pairs:
        if b == 0:
            continue
        here = (surface.sides == (a, b)).all(axis=1)
        total = float(area[here].sum())
        centres = surface.points[surface.triangles[here]].mean(axis=1)
        centre = (area[here, None] * centres).sum(axis=0) / total
        found[a, b] = _Contact(total, total / min(whole[a], whole[b]), centre)
    return found


def steady_contacts(
    source: Surface, target: Surface, alignment: NDArray[np.float64]
) -> tuple[set[tuple[int, int]], tuple[str, ...]]:
    """The label pairs whose contact is present in both bodies, by area and place.

    Parameters
    ----------
    source, target : Surface
    alignment : (4, 4) float64
        Affine that lays the source on the target.

    Returns
    -------
    steady : set of (int, int)
    notes : tuple of str
        A sentence for each contact that is not.
    """
    here, there = _contacts(source), _contacts(target)
    scale = abs(np.linalg.det(alignment[:3, :3])) ** (2 / 3)
    steady, notes = set(), []
    for pair in sorted(set(here) | set(there)):
        a, b = here.get(pair), there.get(pair)
        reason = ""
        if a is None or b is None:
            reason = "it occurs in one scan only"
        elif min(a.share, b.share) < SMALLEST_SHARE:
            reason = f"it covers {100 * min(a.share, b.share):.1f} % of the smaller label's surface"
        else:
            ratio = b.area / (a.area * scale)
            gap = np.linalg.norm(alignment[:3, :3] @ a.centre + alignment[:3, 3] - b.centre)
            reach = np.sqrt(a.area * scale / np.pi) + np.sqrt(b.area / np.pi)
            if not 1 / LARGEST_AREA_RATIO < ratio < LARGEST_AREA_RATIO:
                reason = f"its area differs by a factor of {max(ratio, 1 / ratio):.1f}"
            elif gap > reach:
                reason = f"it lies {gap:.1f} mm apart in the aligned scans"
        if reason:
            notes.append(
                f"The contact of labels {pair[1]} and {pair[0]} is treated as accidental ({reason}): "
                "its faces are matched to the nearest surface of each label."
            )
        else:
            steady.add(pair)
    return steady, tuple(notes)


def _free(
    surface: Surface, label: int, steady: set[tuple[int, int]]
) -> tuple[NDArray[np.int64], NDArray[np.float64]]:
    closed = surface.of_label(label)
    other = closed.sides[:, 1]
    held = np.array([(max(label, o), min(label, o)) in steady for o in other.tolist()], bool)
    return closed.triangles[~held], np.where(other[~held] == 0, 1.0, 0.5)


def matching_patches(source: Surface, target: Surface, steady: set[tuple[int, int]]) -> tuple[Patch, ...]:
    """Every patch that is present in both bodies.

    Parameters
    ----------
    source, target : Surface
    steady : set of (int, int)
        Label pairs with a patch of their own, larger label first.
    """
    patches = []
    for label in sorted({a for a, _ in source.pairs} | {b for _, b in source.pairs if b}):
        s, s_share = _free(source, label, steady)
        t, t_share = _free(target, label, steady)
        if len(s) and len(t):
            patches.append(Patch(str(label), s, t, s_share, t_share))
    for a, b in sorted(steady):
        s = source.triangles[(source.sides == (a, b)).all(axis=1)]
        t = target.triangles[(target.sides == (a, b)).all(axis=1)]
        patches.append(Patch(f"{a}|{b}", s, t, np.ones(len(s)), np.ones(len(t))))
    return tuple(patches)
