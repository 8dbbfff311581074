"""The figures the project promises, measured: ``python tests/bench/reach.py [PART ...]``.

Parts: subcortical, column, shell, order, speed, large.  Results are printed and stored in
``tests/bench/reach.json``.  Nothing here is a test: the machine's load enters the seconds.
"""

from __future__ import annotations

import json
import platform
import resource
import subprocess
import sys
import time
from pathlib import Path

import numpy as np
import volmap_phantoms

from volmap.carry import move_points
from volmap.io.nifti import read_labels
from volmap.kernels.tets import deformation_gradients
from volmap.mapping import MapSettings, map_mesh
from volmap.mesh import MeshSettings, mesh_levels
from volmap.pipeline import affine_baseline, map_pair
from volmap.pipeline.pair import coarser_bodies
from volmap.types import Grid, LabelVolume, LandmarkPairs

HERE = Path(__file__).parent
SUBCORTICAL = HERE.parents[1] / "shared" / "subcortical"
PAIRS = ((10021, 12876), (12876, 15697), (10021, 15697))


def subcortical() -> list[dict]:
    """The three open pairs: signs, boundary distance each way, Dice, range of J."""
    rows = []
    for a, b in PAIRS:
        volumes = [read_labels(SUBCORTICAL / f"donor-{i}.nii.gz") for i in (a, b)]
        begin = time.perf_counter()
        folder = map_pair(*volumes)
        gates = {g.name: g for g in folder.certificate.gates}
        distance = gates["boundary_distance_mm"].value["per_label"]
        dice = gates["overlap"].value["per_label"]
        ratios = gates["volume_ratio"].value
        rows.append(
            {
                "pair": f"{a}/{b}",
                "inverted_tets": gates["inverted_tets"].value["count"],
                "boundary_crossings": gates["boundary_crossings"].value["count"],
                "largest_mean_distance_mm": max(
                    way["mean"] for side in distance.values() for row in side.values() for way in row.values()
                ),
                "dice": {s: {k: round(v["dice"], 4) for k, v in d.items()} for s, d in dice.items()},
                "dice_below_own_mesh": max(
                    v["dice_of_own_mesh"] - v["dice"] for side in dice.values() for v in side.values()
                ),
                "J_min": ratios["min"],
                "J_0.1_99.9": [ratios["p0_1"], ratios["p99_9"]],
                "round_trip_voxels": gates["round_trip_mm"].value["mean"] / volumes[0].grid.voxel_mm,
                "order_difference_voxels": order_voxels(gates),
                "verdict": folder.certificate.verdict.value,
                "seconds": round(time.perf_counter() - begin, 1),
            }
        )
    return rows


def order_voxels(gates: dict) -> dict:
    """Difference of the two orders in voxels, mean and 95 %: as handed out, and of the independent solves."""
    value = gates["order_difference_mm"].value
    a_voxel = value["mean"] / value["mean_voxels"]
    told = {"handed out": value} | ({"alone": value["alone"]} if value.get("alone") else {})
    return {name: {k: round(v[k] / a_voxel, 4) for k in ("mean", "p95")} for name, v in told.items()}


def _phantom_pair(phantom, a: int, b: int) -> tuple[LabelVolume, LabelVolume, LandmarkPairs]:
    here, there = phantom.visits[a], phantom.visits[b]
    pairs = LandmarkPairs(here.beads.names, here.beads.points, there.beads.points)
    return here.labels, there.labels, pairs


def column(seeds: tuple[int, ...] = (0, 1, 2, 3)) -> list[dict]:
    """gel-column, visit 0 to each later one, labels only; several seeds (beads, texture and noise)."""
    rows = []
    for seed in seeds:
        phantom = volmap_phantoms.make("gel-column", seed=seed)
        for visit in (1, 2, 3):
            source, target, pairs = _phantom_pair(phantom, 0, visit)
            folder = map_pair(source, target, pairs=pairs)
            landed = move_points(folder.map, pairs.points, reach_mm=source.grid.voxel_mm).points
            error = np.linalg.norm(landed - pairs.to_points, axis=1)
            affine = affine_baseline(folder.certificate, pairs.points)
            baseline = np.linalg.norm(affine - pairs.to_points, axis=1)
            gates = {g.name: g for g in folder.certificate.gates}
            rows.append(
                {
                    "seed": seed,
                    "visit": visit,
                    "mean_mm": error.mean(),
                    "p95_mm": np.percentile(error, 95),
                    "within_2_mm": float((error <= 2).mean()),
                    "largest_mm": error.max(),
                    "voxel_mm": target.grid.voxel_mm,
                    "baseline_mean_mm": baseline.mean(),
                    "round_trip_voxels": gates["round_trip_mm"].value["mean"] / target.grid.voxel_mm,
                    "order_difference_voxels": order_voxels(gates),
                    "verdict": folder.certificate.verdict.value,
                }
            )
    return rows


def shell() -> list[dict]:
    """pressure-shell: the volume ratio against 1 (incompressible, exact), at points and tet by tet."""
    phantom = volmap_phantoms.make("pressure-shell")
    rows = []
    for visit in (1, 2):
        source, target, _ = _phantom_pair(phantom, 0, visit)
        here = map_pair(source, target).map
        points, tets = here.mesh.points, here.mesh.tets
        around = np.bincount(tets.ravel(), np.repeat(here.mesh.volumes, 4), len(points))
        exact = phantom.truth.carry(points, 0, visit)
        known = np.isfinite(exact).all(axis=1)[tets].all(axis=1)
        interpolant = np.linalg.det(deformation_gradients(points, np.nan_to_num(exact), tets[known]))
        weight = here.mesh.volumes
        rows.append(
            {
                "visit": visit,
                "mean_error_at_points": float(
                    np.average(abs(here.volume_ratio_at_points - 1), weights=around)
                ),
                "mean_error_tet_by_tet": float(np.average(abs(here.volume_ratio - 1), weights=weight)),
                "of_the_exact_map_on_this_mesh": float(
                    np.average(abs(interpolant - 1), weights=weight[known])
                ),
            }
        )
    return rows


def order() -> list[dict]:
    """(A, B) against (B, A): the same map and its inverse, to the last bit."""
    volumes = [read_labels(SUBCORTICAL / f"donor-{i}.nii.gz") for i in PAIRS[0]]
    there, back = map_pair(*volumes), map_pair(*volumes[::-1])
    apart = np.abs(there.map.images - back.map.mesh.points).max()
    return [
        {"largest_difference_mm": float(max(apart, np.abs(back.map.images - there.map.mesh.points).max()))}
    ]


def speed() -> list[dict]:
    """About 100k tets of the column, mesh given: seconds of the solve, peak memory, second process."""
    code = (
        "import sys, time, json, resource; sys.path.insert(0, sys.argv[1]); import reach; "
        "print(json.dumps(reach.solve_100k()))"
    )
    rows = []
    for run in ("first process", "second process"):
        begin = time.perf_counter()
        done = subprocess.run(
            [sys.executable, "-c", code, str(HERE)], capture_output=True, text=True, check=True
        )
        rows.append(
            {"run": run, "process_s": round(time.perf_counter() - begin, 1)} | json.loads(done.stdout)
        )
    return rows


def solve_100k() -> dict:
    """One solve at about 100k tets; in a process of its own so that peak memory means something."""
    phantom = volmap_phantoms.make("gel-column")
    source, target, _ = _phantom_pair(phantom, 0, 3)
    settings = MeshSettings(wanted_tets=110_000)
    begin = time.perf_counter()
    here, there = (mesh_levels(volume, settings) for volume in (source, target))
    meshed = time.perf_counter()
    solved = map_mesh(
        here.fine.mesh,
        there.fine.mesh.interfaces,
        MapSettings(),
        voxel_mm=source.grid.voxel_mm,
        coarser=coarser_bodies(here, there),
    )
    ended = time.perf_counter()
    return {
        "tets": len(here.fine.mesh.tets),
        "mesh_both_s": round(meshed - begin, 1),
        "solve_s": round(ended - meshed, 1),
        "steps": len(solved.outcome.history),
        "linear_iterations": sum(r.linear_iterations for r in solved.outcome.history),
        "status": solved.outcome.status.name,
        "peak_mb": round(resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024),
    }


def large() -> list[dict]:
    """Two 256^3 volumes to a report, as a user would: one command, timed from outside."""
    import tempfile

    from volmap.io.nifti import write_labels

    with tempfile.TemporaryDirectory() as place:
        folder = Path(place)
        for name, stretch in (("a", 1.0), ("b", 1.12)):
            write_labels(folder / f"{name}.nii.gz", _large_body(stretch))
        begin = time.perf_counter()
        done = subprocess.run(
            [sys.executable, "-m", "volmap_cli.main", "map", "a.nii.gz", "b.nii.gz", "--out", "m", "--json"],
            cwd=folder,
            capture_output=True,
            text=True,
            check=False,
        )
        seconds = time.perf_counter() - begin
        document = json.loads(done.stdout)
    return [
        {
            "seconds": round(seconds, 1),
            "by_stage": document["seconds"],
            "peak_mb": document["peak_mb"],
            "tets": document["mesh"]["tets"],
            "verdict": document["verdict"],
        }
    ]


def _large_body(stretch: float) -> LabelVolume:
    """A 256^3 body of an ellipsoid with two inner ones, at 0.8 mm."""
    grid = Grid((256, 256, 256), np.diag([0.8, 0.8, 0.8, 1.0]))
    x, y, z = (np.arange(256) * 0.8 - 102.0 for _ in range(3))
    x, y, z = x[:, None, None], y[None, :, None], z[None, None, :]
    labels = np.zeros(grid.shape, np.uint16)
    labels[(x / 80) ** 2 + (y / (60 * stretch)) ** 2 + (z / 70) ** 2 < 1] = 1
    labels[((x - 25) / 20) ** 2 + (y / (25 * stretch)) ** 2 + (z / 22) ** 2 < 1] = 2
    labels[((x + 30) / 18) ** 2 + (y / 18) ** 2 + ((z - 10) / 25) ** 2 < 1] = 3
    return LabelVolume(grid, labels, {}, f"stretch {stretch}")


PARTS = {f.__name__: f for f in (subcortical, column, shell, order, speed, large)}


def main(names: list[str]) -> None:
    """Run parts, print and store them."""
    store = HERE / "reach.json"
    found = json.loads(store.read_text()) if store.exists() else {}
    for name in names or list(PARTS):
        rows = PARTS[name]()
        found[name] = rows
        print(f"\n{name}: {(PARTS[name].__doc__ or '').splitlines()[0]}")
        for row in rows:
            print("  " + json.dumps(row, default=float))
        sys.stdout.flush()
    found["machine"] = {"python": platform.python_version(), "system": platform.system()}
    store.write_text(json.dumps(found, indent=1, default=float) + "\n")


if __name__ == "__main__":
    main(sys.argv[1:])
