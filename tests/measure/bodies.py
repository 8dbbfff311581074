"""Bodies and surfaces of which everything is known."""

from itertools import permutations, product

import numpy as np

from volmap.types import Surface, TetMesh


def cubes(counts, size_mm, *, label_of=lambda centres: np.ones(len(centres), int)):
    """A block of cubes, cut into six positive tets each (Kuhn's); labels by the tets' centres."""
    counts = np.array(counts)
    steps = np.indices(counts + 1).reshape(3, -1).T
    points = steps * (np.array(size_mm) / counts)
    number = np.arange(len(points)).reshape(counts + 1)
    tets = []
    for order in permutations(range(3)):
        walk = np.zeros((4, 3), int)
        for i, axis in enumerate(order):
            walk[i + 1 :, axis] = 1
        corners = [tuple(slice(a, n + a) for a, n in zip(s, counts, strict=True)) for s in walk]
        tet = np.stack([number[corner].ravel() for corner in corners], axis=1)
        odd = np.linalg.det(np.eye(3)[list(order)]) < 0
        tets.append(tet[:, [0, 2, 1, 3]] if odd else tet)
    tets = np.concatenate(tets)
    return TetMesh(points, tets, label_of(points[tets].mean(axis=1)))


def sphere(radius_mm, halvings):
    """An octahedron, its edges halved some times and its points put on the sphere; normals outward."""
    points = [np.eye(3)[a] * s for a, s in product(range(3), (1, -1))]
    faces = [
        (a, b, c) if sa * sb * sc > 0 else (a, c, b)
        for (a, sa), (b, sb), (c, sc) in product(((0, 1), (1, -1)), ((2, 1), (3, -1)), ((4, 1), (5, -1)))
    ]
    for _ in range(halvings):
        known, finer = {}, []
        for face in faces:
            middles = []
            for a, b in ((0, 1), (1, 2), (2, 0)):
                ends = tuple(sorted((face[a], face[b])))
                if ends not in known:
                    known[ends] = len(points)
                    middle = points[ends[0]] + points[ends[1]]
                    points.append(middle / np.linalg.norm(middle))
                middles.append(known[ends])
            x, y, z = middles
            finer += [(face[0], x, z), (face[1], y, x), (face[2], z, y), (x, y, z)]
        faces = finer
    return surface(radius_mm * np.array(points), np.array(faces))


def surface(points, triangles):
    """The surface of label 1, outside beyond it."""
    return Surface(points, triangles, np.tile([1, 0], (len(triangles), 1)))


def enclosed(points, triangles):
    """Volume inside a closed surface, by the divergence theorem: exact for triangles."""
    a, b, c = (points[triangles[:, k]] for k in range(3))
    return float(np.einsum("nd,nd->n", a, np.cross(b, c)).sum() / 6)
