"""Solvers of the Newton systems, compared: ``python tests/bench/linear.py [TETS ...]`` (10k to 300k).

The matrix is that of distortion and boundary matches where `gel-column` 0 to 3 has settled, at the weight it
settled with and at a hundredth of it; the right side is the slope of the distortion there (the body let go).
Conjugate gradients with block Jacobi, with the lattice multigrid of `mapping/multigrid.py`, and with pyamg's
smoothed aggregation with the six rigid modes (no dependency of the project; left out where it is not
installed).  Iterations and seconds to a relative residual of 0.02 and of 1e-6; the set-up is what a new
matrix costs, that of the lattices, once a mesh, beside it.  Products with the matrix are ours in all three,
on all threads; pyamg's cycle is its own, in float64 on one.  The least of some runs.  Printed, and stored in
``tests/bench/linear.json``.
"""

from __future__ import annotations

import json
import os
import sys
import time
from collections.abc import Callable
from pathlib import Path
from typing import Any

import growth
import numpy as np
from descent import task
from numpy.typing import NDArray
from scipy import sparse

from volmap.kernels import blocksystem
from volmap.kernels.ties import no_ties
from volmap.mapping.multigrid import Multigrid, _inverted, _own_blocks, conjugate_gradients

Floats = NDArray[np.float64]
Solver = Callable[[float], int]
HERE = Path(__file__).parent
SIZES = (10_000, 30_000, 100_000, 300_000)
TOLERANCES = (0.02, 1e-6)
WEIGHTS = (1.0, 0.01)  # of the weight the map settled with
MOST = 2000
RUNS, OF_MANY_TETS = 3, 1  # the latter above 200k


def least_s(work: Callable[[], Any], runs: int) -> tuple[Any, float, float]:
    """What a piece of work gives, and its least wall and processor seconds."""
    walls, cpus = [], []
    for _ in range(runs):
        wall, cpu = time.perf_counter(), time.process_time()
        found = work()
        walls.append(time.perf_counter() - wall)
        cpus.append(time.process_time() - cpu)
    return found, min(walls), min(cpus)


def product_of(matrix: sparse.bsr_matrix) -> Callable[[Floats], Floats]:
    """Our product with a matrix."""

    def times(x: Floats) -> Floats:
        out = np.empty_like(x)
        blocksystem.multiply(matrix.indptr, matrix.indices, matrix.data, x, out)
        return out

    return times


def rigid_modes(points: Floats) -> Floats:
    """(3 n, 6) shifts and turns of points (n, 3) mm."""
    modes = np.zeros((len(points), 3, 6))
    for d in range(3):
        modes[:, d, d] = 1.0
        axis = np.zeros(3)
        axis[d] = 1.0
        modes[:, :, 3 + d] = np.cross(axis, points - points.mean(axis=0))
    return modes.reshape(-1, 6)


def jacobi(matrix: sparse.bsr_matrix, right: Floats) -> Solver:
    """Conjugate gradients with the inverses of the matrix's own blocks."""
    inverse, times = _inverted(_own_blocks(matrix)), product_of(matrix)
    return lambda tolerance: conjugate_gradients(
        times, lambda r: np.einsum("nij,nj->ni", inverse, r), right, tolerance=tolerance, most=MOST
    )[1]


def lattice(matrix: sparse.bsr_matrix, right: Floats, multigrid: Multigrid) -> Solver:
    """Ours; coarse matrices made here, and kept."""
    multigrid.forget()
    multigrid._renew(matrix)
    multigrid._fresh = MOST
    return lambda tolerance: multigrid.solve(matrix, no_ties(), right, tolerance=tolerance, most=MOST)[1]


def aggregated(matrix: sparse.bsr_matrix, right: Floats, points: Floats) -> Solver:
    """pyamg's smoothed aggregation, one V-cycle an iteration."""
    import pyamg

    # In float64: its set-up takes no float32.  `max_coarse` counts blocks of six; the last level is dense.
    hierarchy = pyamg.smoothed_aggregation_solver(
        matrix.astype(np.float64), B=rigid_modes(points), max_coarse=50
    )
    cycle, times = hierarchy.aspreconditioner(), product_of(matrix)
    cycle @ right.ravel()  # the coarsest level is solved for at first use: part of the set-up
    return lambda tolerance: conjugate_gradients(
        times, lambda r: (cycle @ r.ravel()).reshape(-1, 3), right, tolerance=tolerance, most=MOST
    )[1]


def measured(name: str, set_up: Callable[[], Solver], runs: int) -> dict[str, Any]:
    """A row of the table."""
    solver, wall, cpu = least_s(set_up, runs)
    row: dict[str, Any] = {"solver": name, "set_up_s": round(wall, 3), "set_up_cpu_s": round(cpu, 3)}
    for tolerance in TOLERANCES:
        iterations, wall, cpu = least_s(lambda t=tolerance: solver(t), runs)  # type: ignore[misc]
        row[f"{tolerance:g}"] = {
            "iterations": iterations,
            "solve_s": round(wall, 3),
            "solve_cpu_s": round(cpu, 3),
        }
    return row


def one(wanted_tets: int) -> dict[str, Any]:
    """All solvers at one size, in this process."""
    pair = growth.scans()
    growth.solved(pair, growth.meshed(pair, 4000))
    load, result = os.getloadavg()[0], growth.solved(pair, growth.meshed(pair, wanted_tets))
    objective, pulls, _ = task(result)
    runs = OF_MANY_TETS if wanted_tets > 200_000 else RUNS
    points, images = np.array(result.outcome.map.mesh.points), result.state.images
    objective.differentiate(images, pulls._replace(strengths=0.0 * pulls.strengths))
    right, systems = -objective.gradient, {}
    _, lattices_s, lattices_cpu_s = least_s(lambda: Multigrid(points, mean_edge_mm(objective, points)), runs)
    for weight in WEIGHTS:
        objective.differentiate(images, pulls._replace(strengths=weight * pulls.strengths))
        matrix = objective.matrix
        rows = [
            measured("block Jacobi", lambda m=matrix: jacobi(m, right), runs),  # type: ignore[misc]
            measured("lattices", lambda m=matrix: lattice(m, right, objective.multigrid), runs),  # type: ignore[misc]
        ]
        try:
            rows.append(measured("pyamg", lambda m=matrix: aggregated(m, right, points), runs))  # type: ignore[misc]
        except ImportError:
            rows.append({"solver": "pyamg", "left_out": "not installed"})
        systems[f"{weight:g}"] = rows
    return {
        "wanted_tets": wanted_tets,
        "tets": len(objective.tets),
        "load": [round(load, 1), round(os.getloadavg()[0], 1)],
        "lattices_once_a_mesh_s": round(lattices_s, 3),
        "lattices_once_a_mesh_cpu_s": round(lattices_cpu_s, 3),
        "by_share_of_the_final_weight": systems,
    }


def mean_edge_mm(objective: Any, points: Floats) -> float:
    """Mean edge of the mesh, mm."""
    a, b = objective.pattern.edges.T
    return float(np.linalg.norm(points[a] - points[b], axis=1).mean())


def main(sizes: tuple[int, ...]) -> None:
    """All sizes, each in a child process."""
    for size in sizes:
        row = growth.in_child(__file__, size)
        growth.stored(HERE / "linear.json", row)
        print(f"{row['tets']} tets, load {row['load']}, lattices {row['lattices_once_a_mesh_s']} s")
        for weight, rows in row["by_share_of_the_final_weight"].items():
            for line in rows:
                print("  ", weight, json.dumps(line), flush=True)


if __name__ == "__main__":
    if sys.argv[1:2] == ["--one"]:
        print(json.dumps(one(int(sys.argv[2]))))
    else:
        main(tuple(int(a) for a in sys.argv[1:]) or SIZES)
