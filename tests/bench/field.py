"""A field on a 256^3 grid from about 100k tets: ``python tests/bench/field.py``.

Against SciPy's LinearNDInterpolator with the same points and values, asked for the same voxel centres.  It
makes a Delaunay triangulation of its own (timed apart) and searches with one thread; it is asked for whole
planes in grid order, which is the order in which its search is fastest, evenly spread over the grid, and its
time is scaled to all planes.  The map needs no solve: its images are those of a smooth deformation.
Results are printed and stored in ``tests/bench/field.json``.  Nothing here is a test: the machine's load
enters the seconds, so compare ratios.
"""

from __future__ import annotations

import hashlib
import json
import os
import resource
import time
from pathlib import Path

import numba
import numpy as np
import volmap_phantoms
from numpy.typing import NDArray
from scipy.interpolate import LinearNDInterpolator
from scipy.spatial import Delaunay

from volmap.carry.fields import forward_field
from volmap.mesh import MeshSettings, mesh
from volmap.types import Grid, TetMesh, VolumeMap

WANTED_TETS, SIDE, PLANES, ROUNDS = 115_000, 256, 8, 3


def main() -> None:
    """Print and store."""
    body = mesh(
        volmap_phantoms.make("gel-column").visits[0].labels, MeshSettings(wanted_tets=WANTED_TETS)
    ).mesh
    volume_map = VolumeMap(body, body.points + 2.0 * np.sin(body.points[:, [1, 2, 0]] / 15.0))
    assert volume_map.volume_ratio.min() > 0
    grid = grid_around(body, SIDE)
    forward_field(volume_map, grid_around(body, 16))  # compiles, or loads what was compiled
    before = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
    row = {
        "tets": len(body.tets),
        "points": len(body.points),
        "grid": SIDE,
        "threads": numba.get_num_threads(),
    }
    ours, field = timed(lambda: forward_field(volume_map, grid))
    after = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
    row |= {
        "inside": float(field.support.mean()),
        "field_mb": field.displacement.nbytes / 2**20,
        "peak_above_start_mb": (after - before) / 1024,
        "ours_s": ours[0],
        "ours_cpu_s": ours[1],
        "sha256": hashlib.sha256(field.displacement.tobytes()).hexdigest()[:16],
    }
    row |= against_scipy(volume_map, grid, field.displacement)
    row["ratio_seconds"] = row["scipy_s"] / row["ours_s"]
    row["ratio_cpu"] = row["scipy_cpu_s"] / row["ours_cpu_s"]
    for key, value in row.items():
        print(f"{key:28s} {value:.4g}" if isinstance(value, float) else f"{key:28s} {value}")
    stored = json.dumps(row, indent=1) + "\n"
    (Path(__file__).parent / "field.json").write_text(stored, encoding="utf-8")


def grid_around(body: TetMesh, side: int) -> Grid:
    """A grid whose box the body fills along each axis."""
    low, high = body.points.min(axis=0), body.points.max(axis=0)
    edge = (high - low) / (side - 4)
    affine = np.diag([*edge, 1.0])
    affine[:3, 3] = low - 1.5 * edge
    return Grid((side, side, side), affine)


def timed(call):  # type: ignore[no-untyped-def]
    """Seconds on the wall and of all processors, the least of some rounds, and the last answer."""
    wall, cpu = [], []
    for _ in range(ROUNDS):
        answer = None  # two at once would be counted as peak memory
        a, b = time.perf_counter(), os.times()
        answer = call()
        c = os.times()
        wall.append(time.perf_counter() - a)
        cpu.append(c.user + c.system - b.user - b.system)
    return (min(wall), min(cpu)), answer


def against_scipy(volume_map: VolumeMap, grid: Grid, field: NDArray[np.float32]) -> dict[str, float]:
    """LinearNDInterpolator's seconds for the whole grid, from some of its planes."""
    points = volume_map.mesh.points
    a, b = time.perf_counter(), time.process_time()
    triangulation = Delaunay(points)
    built, built_cpu = time.perf_counter() - a, time.process_time() - b
    interpolate = LinearNDInterpolator(triangulation, volume_map.images - points)
    planes = np.linspace(0, SIDE - 1, PLANES + 2).round().astype(int)[1:-1]
    index = np.stack(np.meshgrid(planes, *[np.arange(SIDE)] * 2, indexing="ij"), axis=-1)
    centres = grid.to_world(index.reshape(-1, 3).astype(np.float64))
    (wall, cpu), found = timed(lambda: interpolate(centres))
    found = found.reshape(PLANES, SIDE, SIDE, 3)
    both = ~np.isnan(field[planes, ..., 0]) & ~np.isnan(found[..., 0])
    apart = np.linalg.norm(field[planes] - found, axis=-1)[both]
    return {
        "scipy_tets": len(triangulation.simplices),
        "scipy_build_s": built,
        "scipy_build_cpu_s": built_cpu,
        "scipy_planes_asked": PLANES,
        "scipy_s": wall * SIDE / PLANES,
        "scipy_cpu_s": cpu * SIDE / PLANES,
        "median_difference_mm": float(np.median(apart)),
    }


if __name__ == "__main__":
    main()
