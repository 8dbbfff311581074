"""Small bodies made by hand: blocks of cubes with labels, a ball of tets around its centre; their matcher."""

import numpy as np

from volmap.kernels import blocksystem
from volmap.kernels.tets import signed_volumes
from volmap.mapping.matching import Matcher
from volmap.mapping.patches import matching_patches, steady_contacts
from volmap.types import TetMesh

PATHS = ((0, 1, 2), (1, 2, 0), (2, 0, 1), (0, 2, 1), (2, 1, 0), (1, 0, 2))


def cubes(labels, size_mm=1.0, origin=(0.0, 0.0, 0.0)):
    """Cubes of an (i, j, k) label array, each cut into six tets along its diagonal; 0 leaves a cube out."""
    labels = np.asarray(labels)
    index = np.argwhere(labels > 0)
    shape = np.array(labels.shape) + 1
    tets, tet_labels = [], []
    for path in PATHS:
        steps = np.zeros((4, 3), int)
        for i, axis in enumerate(path):
            steps[i + 1 :, axis] = 1
        corners = index[:, None, :] + steps[None]
        tets.append(np.ravel_multi_index(np.moveaxis(corners, -1, 0), shape))
        tet_labels.append(labels[tuple(index.T)])
    tets, tet_labels = np.concatenate(tets), np.concatenate(tet_labels)
    used, tets = np.unique(tets, return_inverse=True)
    tets = tets.reshape(-1, 4)
    points = np.stack(np.unravel_index(used, shape), axis=1) * float(size_mm) + np.array(origin)
    inverted = signed_volumes(points, tets) < 0
    tets[inverted] = tets[inverted][:, [0, 2, 1, 3]]
    return TetMesh(points, tets, tet_labels)


def lopsided():
    """Two labels, no symmetry at all: a step-shaped body of 2 mm cubes with a second label in one arm."""
    labels = np.zeros((9, 6, 5), int)
    labels[:, :3, :3] = 1
    labels[:3, 3:, :2] = 1
    labels[:2, :2, 3:] = 1
    labels[6:, :3, :3] = 2
    labels[7:, :2, 3] = 2
    return cubes(labels, 2.0, (-7.0, 3.0, 1.0))


def icosphere(level):
    """Points (n, 3) on the unit sphere and outward triangles, by halving the edges of an icosahedron."""
    g = (1 + 5**0.5) / 2
    points = [(-1, g, 0), (1, g, 0), (-1, -g, 0), (1, -g, 0), (0, -1, g), (0, 1, g)]
    points += [(0, -1, -g), (0, 1, -g), (g, 0, -1), (g, 0, 1), (-g, 0, -1), (-g, 0, 1)]
    faces = "0 11 5 0 5 1 0 1 7 0 7 10 0 10 11 1 5 9 5 11 4 11 10 2 10 7 6 7 1 8 "
    faces += "3 9 4 3 4 2 3 2 6 3 6 8 3 8 9 4 9 5 2 4 11 6 2 10 8 6 7 9 8 1"
    points = np.array(points, float) / np.sqrt(1 + g * g)
    triangles = np.array(faces.split(), int).reshape(-1, 3)
    for _ in range(level):
        pairs = np.sort(triangles[:, [[0, 1], [1, 2], [2, 0]]].reshape(-1, 2), axis=1)
        edges, middle = np.unique(pairs, axis=0, return_inverse=True)
        middle = middle.reshape(-1, 3) + len(points)
        points = np.concatenate([points, points[edges].mean(axis=1)])
        a, b, c = triangles.T
        ab, bc, ca = middle.T
        triangles = np.concatenate(
            [np.stack(t, axis=1) for t in ((a, ab, ca), (ab, b, bc), (ca, bc, c), (ab, bc, ca))]
        )
        points /= np.linalg.norm(points, axis=1, keepdims=True)
    return points, triangles


def ball(level):
    """The unit ball, label 1: a tet from the centre to each triangle of an icosphere."""
    points, triangles = icosphere(level)
    tets = np.concatenate([np.zeros((len(triangles), 1), int), triangles + 1], axis=1)
    return TetMesh(np.concatenate([np.zeros((1, 3)), points]), tets, np.ones(len(tets), int))


def rotation(axis, degrees):
    """(3, 3) rotation about an axis (Rodrigues' formula)."""
    x, y, z = np.asarray(axis, float) / np.linalg.norm(axis)
    k = np.array([[0, -z, y], [z, 0, -x], [-y, x, 0]])
    t = np.radians(degrees)
    return np.eye(3) + np.sin(t) * k + (1 - np.cos(t)) * k @ k


def matcher(mesh, target, *, across=0.05):
    """A matcher of a mesh and a surface in its place."""
    steady, _ = steady_contacts(mesh.interfaces, target, np.eye(4))
    return Matcher(
        matching_patches(mesh.interfaces, target, steady),
        np.array(mesh.points),
        np.array(target.points),
        pattern=blocksystem.pattern_of(np.array(mesh.tets), len(mesh.points)),
        across=across,
    )
