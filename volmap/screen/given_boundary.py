"""Look at how a given boundary correspondence lies on the two bodies before a map is built on it."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from volmap.kernels.closest import build_tree, closest
from volmap.kernels.surface_map import read_off
from volmap.screen.results import by_gravity
from volmap.types.findings import Finding, Level
from volmap.types.given_boundary import GivenBoundary
from volmap.types.surface import Surface

Floats = NDArray[np.float64]

# Common practice, no source, all six.
LEAST_COVERED = 0.01  # share of the body's outer boundary; less than that is another place
MOSTLY = 0.5  # with less, it is asked whether the frame is another one
WHOLE = 0.98  # from here on a surface counts as covering the boundary
FAR_VOXELS = 2.0  # images farther from TARGET's surface than this are told of
FEW = 0.01  # share of the images that may lie so far
ELSEWHERE = 0.5  # of TARGET's radius: images that lie farther in the mean belong to another frame
LPS = np.array([-1.0, -1.0, 1.0])


def screen_given_boundary(
    given: GivenBoundary, source: Surface, target: Surface, *, voxel_mm: float
) -> tuple[Finding, ...]:
    """Whether the surface lies on SOURCE, how much of it it covers, and whether its images lie on TARGET.

    Parameters
    ----------
    given : GivenBoundary
    source, target : Surface
        Label surfaces of the two bodies.
    voxel_mm : float
    """
    covered = _covered(given.points, given, source)
    turned = _covered(given.points * LPS, given, source) if covered < MOSTLY else 0.0
    if covered < LEAST_COVERED or turned > 2 * covered:
        return (_elsewhere(given, source, target),)
    findings = []
    if covered < WHOLE:
        sentence = (
            f"it covers {100 * covered:.0f} % of SOURCE's outer boundary; the rest is matched with TARGET's "
            "surface as usual"
        )
        findings.append(Finding(Level.WARN, "boundary_covered", given.name, sentence))
    findings += _of_images(given, source, target, voxel_mm)
    return by_gravity(findings)


def _outer(surface: Surface) -> NDArray[np.int64]:
    return np.array(surface.triangles[surface.sides[:, 1] == 0])


def _apart(points: Floats, triangles: NDArray[np.int64], queries: Floats) -> Floats:
    """(q,) distance to the nearest triangle, mm."""
    points, triangles = np.array(points), np.array(triangles)
    return np.sqrt(closest(build_tree(points, triangles), points, triangles, np.array(queries))[2])


def _covered(points: Floats, given: GivenBoundary, body: Surface) -> float:
    """Share of a body's outer boundary, by area, that a surface speaks of when its points lie here."""
    outer = body.sides[:, 1] == 0
    spoken = read_off(
        body.points, body.triangles, outer, points, given.triangles, points, reach_mm=given.reach_mm
    )
    corners = body.points[body.triangles]
    cross = np.cross(corners[:, 1] - corners[:, 0], corners[:, 2] - corners[:, 0])
    area = np.linalg.norm(cross, axis=1) * outer
    return float(area[spoken.covered].sum() / area.sum())


def _elsewhere(given: GivenBoundary, source: Surface, target: Surface) -> Finding:
    apart = float(np.median(_apart(source.points, _outer(source), given.points)))
    remedy = "give coordinates in SOURCE's world, RAS+, mm"
    if _covered(given.points * LPS, given, source) >= LEAST_COVERED:
        remedy = "its coordinates are LPS, not RAS+: turn the signs of x and y, of the points and of image_mm"
    elif _covered(given.images, given, source) >= LEAST_COVERED:
        remedy = "its images lie on SOURCE: it runs the other way, so exchange SOURCE and TARGET"
    elif any(_covered(given.points * f, given, source) >= LEAST_COVERED for f in (10.0, 1000.0)):
        remedy = "its coordinates are in another unit: give mm"
    sentence = (
        f"the surface does not lie on SOURCE's boundary: half of its points are more than {apart:.3g} mm off"
    )
    return Finding(Level.REFUSE, "boundary_elsewhere", given.name, sentence, remedy)


def _of_images(given: GivenBoundary, source: Surface, target: Surface, voxel_mm: float) -> list[Finding]:
    used = np.unique(given.triangles)
    apart = _apart(target.points, target.triangles, given.images[used])
    radius = 0.5 * float(np.linalg.norm(np.ptp(target.points[np.unique(_outer(target))], axis=0)))
    found = (
        f"half of the images lie more than {np.median(apart):.3g} mm from TARGET's surface, the farthest "
        f"{apart.max():.3g} mm"
    )
    if np.median(apart) > ELSEWHERE * radius:
        remedy = "give image_mm in TARGET's world, RAS+, mm, as places, not as displacements"
        for others, words in (
            (given.points + given.images, "its image_mm are displacements: add the points to them"),
            (given.images * LPS, "its image_mm are LPS, not RAS+: turn the signs of x and y"),
        ):
            if np.median(_apart(target.points, target.triangles, others[used])) < FAR_VOXELS * voxel_mm:
                remedy = words
        return [Finding(Level.REFUSE, "images_elsewhere", given.name, found, remedy)]
    findings = []
    far = float((apart > FAR_VOXELS * voxel_mm).mean())
    if far > FEW:
        sentence = f"{found}; {100 * far:.1f} % of them are more than {FAR_VOXELS:.0f} voxels off"
        remedy = "the map follows the given images, not TARGET's labels, there"
        findings.append(Finding(Level.WARN, "images_far", given.name, sentence, remedy))
    if _enclosed(given.points, given) * _enclosed(given.images, given) < 0 and _closed(given):
        sentence = (
            "the images are mirrored: the surface is turned inside out, which no map of the inside can keep"
        )
        remedy = "check the handedness of the frames (LPS, exchanged axes)"
        findings.append(Finding(Level.WARN, "images_mirrored", given.name, sentence, remedy))
    return findings


def _enclosed(points: Floats, given: GivenBoundary) -> float:
    """Signed volume inside the surface when it is closed, mm3."""
    a, b, c = np.moveaxis(points[given.triangles] - points[given.triangles[0, 0]], 1, 0)
    return float(np.einsum("ij,ij->", np.cross(a, b), c) / 6.0)


def _closed(given: GivenBoundary) -> bool:
    """True when every edge is run along once each way (by place)."""
    _, place = np.unique(given.points + 0.0, axis=0, return_inverse=True)
    edges = place.reshape(-1)[given.triangles][:, [[0, 1], [1, 2], [2, 0]]].reshape(-1, 2)
    n = np.int64(edges.max() + 1)
    forth, back = edges[:, 0] * n + edges[:, 1], edges[:, 1] * n + edges[:, 0]
    return bool(np.array_equal(np.sort(forth), np.sort(back)))
