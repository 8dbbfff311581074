"""Random maps that are one-to-one by theorem, and the smallest faults that can be planted in them.

All start from a block of cubes cut into six tets each along paths of edges x, y, z in some order (`box`), of
which random cubes are kept: pieces, cavities, handles, and pieces that touch in edges and corners.  A part of
a valid map is valid, so only maps of the whole, convex block need a proof; affine maps before and after keep
it.  The derivative of a piecewise affine map on such tets is made of difference quotients along edges.

* wave: x + g(x) with all partial derivatives of g bounded by b_ij, sum of b_ij^2 < 1.  Then
  |phi(x) - phi(y)| >= (1 - |b|) |x - y| > 0 on a convex block.
* twist: each layer between two heights is turned by less than 0.7 against its floor.  Heights are kept, and
  in one height phi differs from a rotation by a map of slope at most sqrt(2) 2 sin(0.35) < 1.
* bend: layers between two x become wedges between two half planes through an axis, each cut into prisms over
  convex quadrilaterals; less than a full turn in all.
"""

from fractions import Fraction
from itertools import product

import numpy as np
from box_of_two_labels import box
from exact_volumes import exact_volume

from volmap.types import TetMesh, VolumeMap


def random_valid_map(rng):
    """A map that is one-to-one, between meshes of some hundred tets; either side may be the mesh."""
    form = (_wave, _twist, _bend)[rng.integers(3)]
    cells = tuple(int(n) for n in rng.integers(2, 5, 3) + np.array([0, 0, 2]))
    if form is _bend:
        cells = cells[::-1]
    size = np.array(cells) * rng.uniform(0.8, 3.0, 3)
    whole = box(cells, size)
    kept = rng.random(np.prod(cells)) < rng.choice([0.4, 0.7, 0.9, 1.0])
    kept[rng.integers(len(kept))] = True
    used, tets = np.unique(whole.tets[np.tile(kept, 6)], return_inverse=True)
    start, end = _affine(rng), _affine(rng)
    labels = np.tile(rng.integers(1, 4, int(kept.sum())), 6)
    mesh = TetMesh(start(whole.points[used]), tets.reshape(-1, 4), labels)
    found = VolumeMap(mesh, end(form(rng, whole.points, size, cells)[used]))
    return found.reversed() if rng.random() < 0.5 else found


def _affine(rng):
    """Turned, stretched by 0.5 to 2 along three axes, turned, shifted by up to 100 mm."""
    turns = [np.linalg.qr(rng.normal(size=(3, 3)))[0] for _ in range(2)]
    turns = [q * np.sign(np.linalg.det(q)) for q in turns]
    matrix = turns[0] @ np.diag(rng.uniform(0.5, 2.0, 3)) @ turns[1]
    shift = rng.uniform(-100, 100, 3)
    return lambda x: x @ matrix.T + shift


def _wave(rng, x, size, _cells):
    frequency = rng.normal(size=(4, 3)) * 2 * np.pi / size.max()
    slope = rng.normal(size=(3, 4))
    bounds = np.abs(slope) @ np.abs(frequency)
    slope *= 0.9 / np.linalg.norm(bounds)
    return x + np.sin(x @ frequency.T + rng.uniform(0, 2 * np.pi, 4)) @ slope.T


def _twist(rng, x, size, cells):
    angle = np.cumsum(np.r_[0, rng.uniform(-0.69, 0.69, cells[2])])
    level = np.rint(x[:, 2] / size[2] * cells[2]).astype(int)
    c, s = np.cos(angle[level]), np.sin(angle[level])
    u, v = (x[:, :2] - rng.uniform(-0.5, 1.5, 2) * size[:2]).T
    return np.stack([c * u - s * v, s * u + c * v, x[:, 2]], axis=1)


def _bend(rng, x, size, _cells):
    angle = x[:, 0] / size[0] * rng.uniform(0.2, 6.1)
    radius = size[1] * rng.uniform(1.1, 3.0) - x[:, 1]
    return np.stack([radius * np.sin(angle), -radius * np.cos(angle), x[:, 2]], axis=1)


def with_one_tet_inverted(volume_map, ratio=-1e-14):
    """Images in which one tet has `ratio` times its volume, and every other tet is positive, exactly.

    A corner is put on the opposite face and moved by last bits until the rational volume is near enough.

    Returns
    -------
    images : (n, 3) float64
    tet : int
    """
    tets, images = volume_map.mesh.tets, np.array(volume_map.images)
    for tet, corner in product(range(len(tets)), range(4)):
        point = tets[tet, corner]
        star = [t for t in np.flatnonzero((tets == point).any(axis=1)) if t != tet]
        was, before = exact_volume(images[tets[tet]]), images[point].copy()
        images[point] = images[np.delete(tets[tet], corner)].mean(axis=0)
        if all(exact_volume(images[tets[t]]) > was * Fraction(1, 10**6) for t in star):
            found = _nearest_bits(images, tets[tet], point, was, ratio)
            if found is not None:
                images[point] = found
                assert all(exact_volume(images[tets[t]]) > 0 for t in star)
                return images, tet
        images[point] = before
    raise AssertionError("no tet of this map can be inverted alone")


def _nearest_bits(images, corners, point, was, ratio):
    """The place within a few last bits where the volume ratio is nearest to `ratio`; None beyond half."""
    start = images[point].copy()
    best, place = abs(ratio) / 2, None
    bits = 0.5 * np.spacing(np.abs(start))
    for steps in product(range(-9, 10, 2), repeat=3):
        images[point] = start + np.array(steps) * bits
        off = abs(float(exact_volume(images[corners]) / was) - ratio)
        if off < best:
            best, place = off, images[point].copy()
    images[point] = start
    return place
