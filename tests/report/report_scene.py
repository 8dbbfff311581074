"""Two nested bodies on a small lattice, moved by a smooth map whose volume ratio is known."""

from __future__ import annotations

import numpy as np

from volmap.report import ReportInput
from volmap.types import (
    Certificate,
    Gate,
    Grid,
    ImageVolume,
    IterationRecord,
    LabelVolume,
    LandmarkPairs,
    Surface,
    TetMesh,
    Verdict,
    VolumeMap,
)


def lattice(n: int) -> tuple[np.ndarray, np.ndarray]:
    """Cubes of a lattice over [-1, 1]^3, each cut into six tets around its long diagonal (Kuhn, 1960)."""
    i = np.stack(np.meshgrid(*3 * [np.arange(n + 1)], indexing="ij"), -1).reshape(-1, 3)
    cell = np.stack(np.meshgrid(*3 * [np.arange(n)], indexing="ij"), -1).reshape(-1, 3)
    step, tets = np.eye(3, dtype=int), []
    for order in [(0, 1, 2), (1, 2, 0), (2, 0, 1), (0, 2, 1), (2, 1, 0), (1, 0, 2)]:
        corners = [cell]
        for axis in order:
            corners.append(corners[-1] + step[axis])
        if order in [(0, 2, 1), (2, 1, 0), (1, 0, 2)]:
            corners[1], corners[2] = corners[2], corners[1]
        tets.append(np.stack([c @ [(n + 1) ** 2, n + 1, 1] for c in corners], 1))
    return 2.0 * i / n - 1.0, np.concatenate(tets)


def rounded(cube: np.ndarray) -> np.ndarray:
    """The cube [-1, 1]^3 most of the way to the unit ball, so that no tet at its edges is flattened."""
    size = np.abs(cube).max(axis=1, keepdims=True)
    length = np.linalg.norm(cube, axis=1, keepdims=True)
    return cube * (0.25 + 0.75 * size / np.where(length > 0, length, 1.0))


def move(points: np.ndarray) -> np.ndarray:
    """A bend, a swelling toward +z and a shift; volume ratio ``(1 + 0.012 z)^3``."""
    x, y, z = points.T
    s = 1.0 + 0.012 * z
    return np.stack([x * s + 0.006 * z**2 + 3.0, y * s - 2.0, z + 0.006 * z**2 + 1.0], axis=1)


def voxels(name: str, warp, spacing: tuple[float, float, float]) -> tuple[LabelVolume, ImageVolume]:
    shape = tuple(int(np.ceil(88 / s)) for s in spacing)
    affine = np.diag([-spacing[0], spacing[1], spacing[2], 1.0])
    affine[:3, 3] = [44.0, -42.0, -40.0]
    grid = Grid(shape, affine)
    index = np.stack(np.meshgrid(*[np.arange(k) for k in shape], indexing="ij"), -1).reshape(-1, 3)
    inside = warp(grid.to_world(index.astype(float)))
    radius = np.linalg.norm(inside / [24.0, 20.0, 30.0], axis=1)
    labels = (radius < 1).astype(np.uint16) + (radius < 0.5)
    noise = np.random.default_rng(5).normal(0, 6, len(labels))
    values = 40 + 60 * (labels == 1) + 110 * (labels == 2) + noise
    names = {1: "soft body", 2: "inclusion"}
    return (
        LabelVolume(grid, labels.reshape(shape), names, f"{name}.nii.gz"),
        ImageVolume(grid, values.reshape(shape).astype(np.float32), "", f"{name}-image.nii.gz"),
    )


def unmove(points: np.ndarray) -> np.ndarray:
    """The inverse of `move`, from its quadratic."""
    x, y, w = (points - [3.0, -2.0, 1.0]).T
    z = (-1 + np.sqrt(1 + 4 * 0.006 * w)) / (2 * 0.006)
    s = 1.0 + 0.012 * z
    return np.stack([(x - 0.006 * z**2) / s, y / s, z], axis=1)


def two_ways(one: tuple[float, float], other: tuple[float, float]) -> dict[str, dict[str, float]]:
    ways = zip(("map_to_scan", "scan_to_map"), (one, other), strict=True)
    return {way: {"mean": mean, "max": most} for way, (mean, most) in ways}


def gates() -> tuple[Gate, ...]:
    """Gates of the kinds a certificate holds: a count, nested lengths, Dice, a range, one not assessed."""
    distance = {"1": two_ways((0.08, 0.9), (0.11, 1.4)), "2": two_ways((0.05, 0.4), (0.06, 0.5))}
    dice = {"1": {"dice": 0.973, "dice_warns_below": 0.95}, "2": {"dice": 0.942, "dice_warns_below": 0.91}}
    spot = {"point_mm": [24.0, -2.0, 1.0], "space": "target", "note": "soft body: 1.4 mm"}
    return (
        Gate("inverted_tets", 0, "tets", None, {"count_above": 0}, "A law.", Verdict.PASS, (), "Signs hold."),
        Gate(
            "boundary_distance_mm",
            {"mean": 0.11, "max": 1.4, "per_label": {"target": distance}},
            "mm",
            {"mean_above": 0.2, "max_above": 1.2},
            {"mean_above": 0.5, "max_above": 3.0},
            "A fifth of a voxel.",
            Verdict.WARN,
            (spot,),
            "The largest distance is 1.4 mm.",
        ),
        Gate(
            "overlap",
            {"lowest_dice": 0.942, "shell_mm": 0.3, "per_label": {"target": dice}},
            "Dice",
            {"shell_above": 0.6},
            {"shell_above": 1.2},
            "Knows the label's size.",
            Verdict.PASS,
        ),
        Gate(
            "volume_ratio",
            {"min": 0.31, "p0_1": 0.35, "p99_9": 2.1, "max": 2.2},
            "1",
            {"p0_1_below": 0.1},
            {"min_below": 0.001},
            "Common practice, no source.",
            Verdict.PASS,
        ),
        Gate("check_points_mm", None, "mm", {"p95_above": 2.0}, None, "TG-132.", Verdict.NOT_ASSESSED),
    )


def certificate() -> Certificate:
    return Certificate(
        source={"name": "visit-0.nii.gz"},
        target={"name": "visit-1.nii.gz"},
        gates=gates(),
        settings={"mesh": {"edge_mm": 4.5}, "map": {"energy": "smooth", "ladder": [0.01, 0.1, 1.0]}},
        versions={"volmap": "0.1.0", "numpy": "2.4"},
        mesh={"min_dihedral_deg": 14.2},
        seconds={"mesh": 1.2, "map": 8.4},
        peak_mb=640.0,
        status="The boundaries agree within the declared uncertainty and the distortion has settled.",
    )


def make_inputs(n: int = 12, **changes) -> ReportInput:  # type: ignore[no-untyped-def]
    cube, tets = lattice(n)
    points = rounded(cube) * [24.0, 20.0, 30.0]
    inner = np.abs(cube[tets]).max(axis=(1, 2)) < 0.5 + 1e-9
    mesh = TetMesh(points, tets, 1 + inner.astype(int))
    images = move(points)
    own = mesh.interfaces
    surface = Surface(images + 0.3 * np.sin(images / 5.0), own.triangles, own.sides)
    source, source_image = voxels("visit-0", lambda p: p, (1.2, 1.2, 2.0))
    target, target_image = voxels("visit-1", unmove, (1.0, 1.0, 1.5))
    beads = np.random.default_rng(3).uniform(-12, 12, (7, 3))
    pairs = LandmarkPairs(
        tuple(f"bead {k}" for k in range(7)), beads, move(beads), ("guide", "guide") + ("check",) * 5
    )
    history = tuple(
        IterationRecord(k, 0.01 * 10 ** (k // 4), 1.0, 0.1, 2.0 * 0.7**k, 1.0, 20 + k, 0.8 - 0.02 * k)
        for k in range(14)
    )
    values = {
        "map": VolumeMap(mesh, images, "visit-0", "visit-1"),
        "certificate": certificate(),
        "source": source,
        "target": target,
        "target_surface": surface,
        "source_image": source_image,
        "target_image": target_image,
        "checks": pairs,
        "carried": move(beads) + 0.4,
        "baseline": move(beads) + 1.7,
        "history": history,
        "title": "",
    }
    return ReportInput(**(values | changes))
