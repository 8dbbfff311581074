"""A lattice mesh and the known maps that the tests of carry share."""

from __future__ import annotations

import itertools

import numpy as np
import pytest

from volmap.types import TetMesh, VolumeMap


def kuhn_box(counts, low, high) -> TetMesh:
    """A box of cubes, each cut into six positive tets along its main diagonal (Kuhn 1960)."""
    counts = np.broadcast_to(counts, 3)
    nodes = np.stack(np.meshgrid(*[np.arange(n + 1) for n in counts], indexing="ij"), -1).reshape(-1, 3)
    cells = np.stack(np.meshgrid(*[np.arange(n) for n in counts], indexing="ij"), -1).reshape(-1, 3)
    place = np.array([(counts[1] + 1) * (counts[2] + 1), counts[2] + 1, 1])
    tets = []
    for order in itertools.permutations(range(3)):
        steps = np.eye(3, dtype=np.int64)[list(order)]
        corners = [cells + sum(steps[:a], np.zeros(3, np.int64)) for a in range(4)]
        tet = np.stack([c @ place for c in corners], axis=1)
        tets.append(tet if np.linalg.det(steps) > 0 else tet[:, [0, 1, 3, 2]])
    tets = np.concatenate(tets)
    low, high = np.broadcast_to(low, 3).astype(float), np.broadcast_to(high, 3).astype(float)
    points = low + nodes / counts * (high - low)
    return TetMesh(points, tets, np.ones(len(tets), np.int64))


def shears(x):
    """Three shears, J = 1 (shared/outside-checks: recomputed)."""
    x, y, z = np.moveaxis(np.array(x, float), -1, 0)
    x = x + 0.3 * np.sin(2 * y) + 0.2 * z**2
    y = y + 0.25 * np.cos(x + z)
    z = z + 0.4 * x * y
    return np.stack([x, y, z], -1)


def unshears(x):
    """Their inverse, undone in reverse order."""
    x, y, z = np.moveaxis(np.array(x, float), -1, 0)
    z = z - 0.4 * x * y
    y = y - 0.25 * np.cos(x + z)
    x = x - 0.3 * np.sin(2 * y) - 0.2 * z**2
    return np.stack([x, y, z], -1)


def twist(x, rate=0.7):
    """Rotation about z by rate * z: J = 1."""
    angle = rate * x[..., 2]
    c, s = np.cos(angle), np.sin(angle)
    return np.stack([c * x[..., 0] - s * x[..., 1], s * x[..., 0] + c * x[..., 1], x[..., 2]], -1)


def wave(x, amplitude=0.5):
    """x + A sin x along x: J = 1 + A cos x, folds iff A >= 1."""
    return x + np.stack([amplitude * np.sin(x[..., 0]), 0 * x[..., 1], 0 * x[..., 2]], -1)


def mapped(mesh: TetMesh, rule) -> VolumeMap:
    return VolumeMap(mesh, rule(np.array(mesh.points)))


def jittered(mesh: TetMesh, fraction: float, seed: int = 0) -> TetMesh:
    """The same mesh with its inner points moved at random; the hull stays."""
    points = np.array(mesh.points)
    low, high = points.min(axis=0), points.max(axis=0)
    inner = ((points > low) & (points < high)).all(axis=1)
    step = (high - low) / len(points) ** (1 / 3) * fraction
    points[inner] += np.random.default_rng(seed).uniform(-1, 1, (inner.sum(), 3)) * step
    return mesh.moved(points)


class Known:
    """Everything above, under one fixture."""

    box = staticmethod(kuhn_box)
    jittered = staticmethod(jittered)
    mapped = staticmethod(mapped)
    shears = staticmethod(shears)
    unshears = staticmethod(unshears)
    twist = staticmethod(twist)
    wave = staticmethod(wave)


@pytest.fixture(scope="session")
def known() -> type[Known]:
    return Known
