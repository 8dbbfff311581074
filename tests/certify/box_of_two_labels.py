"""A box of two labels and an affine map: everything about them is known."""

import numpy as np

from volmap.types import Grid, GridField, LabelVolume, TetMesh

GRADIENT = np.array([[1.1, 0.2, 0.0], [0.0, 0.9, 0.1], [0.1, 0.0, 1.05]])
SHIFT = np.array([5.0, -3.0, 2.0])


def moved(points):
    return points @ GRADIENT.T + SHIFT


def moved_back(points):
    return (points - SHIFT) @ np.linalg.inv(GRADIENT).T


def box(cells, size_mm, split=None, origin=(0.0, 0.0, 0.0)):
    """A block of cubes cut into six positive tets each; label 2 where the centre's x is beyond `split`."""
    counts = np.array(cells)
    lattice = np.stack(np.meshgrid(*(np.arange(n + 1) for n in counts), indexing="ij"), axis=-1)
    points = lattice.reshape(-1, 3) * (np.array(size_mm) / counts) + np.array(origin)
    index = np.arange(len(points)).reshape(counts + 1)
    nx, ny, nz = counts
    corner = {
        (a, b, c): index[a : nx + a, b : ny + b, c : nz + c].ravel()
        for a in (0, 1)
        for b in (0, 1)
        for c in (0, 1)
    }
    tets = []
    for order, odd in (
        ((0, 1, 2), 0),
        ((1, 2, 0), 0),
        ((2, 0, 1), 0),
        ((0, 2, 1), 1),
        ((2, 1, 0), 1),
        ((1, 0, 2), 1),
    ):
        steps = np.zeros((4, 3), int)
        for i, axis in enumerate(order):
            steps[i + 1 :, axis] = 1
        path = [corner[tuple(s)] for s in steps]
        tets.append(np.stack([path[0], path[2], path[1], path[3]] if odd else path, axis=1))
    tets = np.concatenate(tets)
    beyond = np.zeros(len(tets), bool) if split is None else points[tets].mean(axis=1)[:, 0] > split
    return TetMesh(points, tets, np.where(beyond, 2, 1))


def drawn_box(shape, affine, to_box, size_mm, split):
    """Labels of the box at voxel centres, by its inequalities: no mesh is asked."""
    grid = Grid(shape, affine)
    index = np.stack(np.meshgrid(*(np.arange(n) for n in shape), indexing="ij"), axis=-1).reshape(-1, 3)
    world = to_box(grid.to_world(index.astype(float)))
    inside = ((world >= 0) & (world <= size_mm)).all(axis=1)
    labels = np.where(inside, np.where(world[:, 0] > split, 2, 1), 0).astype(np.uint16)
    return LabelVolume(grid, labels.reshape(shape), {1: "near half", 2: "far half"})


def field(volume, destination, names):
    """An exact sampled displacement where a volume has labels."""
    index = np.argwhere(np.ones(volume.grid.shape, bool)).astype(float)
    world = volume.grid.to_world(index)
    u = (destination(world) - world).reshape(*volume.grid.shape, 3).astype(np.float32)
    u[volume.labels == 0] = np.nan
    return GridField(volume.grid, u, *names)


SIZE = np.array([16.0, 12.0, 10.0])
