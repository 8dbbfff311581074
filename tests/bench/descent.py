"""Newton steps against a general optimiser: ``python tests/bench/descent.py [TETS ...]`` (10k to 100k).

One function, one start: distortion of all tets plus the boundary matches of the settled map, held as they
are, at the final weight; from the affine alignment.  Contact is off for both, because its barrier is no
smooth function of a fixed set of pairs.  Ours: `Objective.descend` on that one mesh, from that start.
Theirs: SciPy's L-BFGS-B with value and gradient from our kernels on all threads, without the second
derivatives that ours needs.  Points where a tet is not positive, which its line search may ask for, get a
huge value and no slope.  Seconds until the function is within 1 % of where ours converges; after ten minutes
theirs is stopped.  Printed, and stored in ``tests/bench/descent.json``.
"""

from __future__ import annotations

import json
import os
import sys
import time
from pathlib import Path
from typing import Any

import growth
import numpy as np
from numba import njit, prange
from numpy.typing import NDArray
from scipy import sparse
from scipy.optimize import minimize

from volmap.kernels.distortion import FLAT, _forces, _gradient_of, _stretches, symmetrised
from volmap.kernels.observations import Observations
from volmap.mapping import Solved
from volmap.mapping.objective import Objective

Floats = NDArray[np.float64]
HERE = Path(__file__).parent
SIZES = (10_000, 30_000, 100_000)
FORCING = 0.02  # relative residual of our linear solves
WITHIN = 1.01  # times the converged value
MOST_S = 600.0
MEMORIES = (10, 20, 50)  # pairs of vectors L-BFGS-B keeps
MEMORY = 20
HUGE = 1e3  # times the value at the start, where a tet is not positive
CONVERGED = 1e-9  # relative decrease of the last step of ours


CHUNK = 256  # tets that share one set of work arrays


@njit(parallel=True)
def _forces_of(code, points, tets, shape_gradients, weights, out, forces):  # type: ignore[no-untyped-def]
    """`distortion.derivatives` without second derivatives."""
    for chunk in prange((len(tets) + CHUNK - 1) // CHUNK):
        f, v, s = np.empty((3, 3)), np.empty((3, 3)), np.empty(3)
        g, h, w = np.empty(3), np.empty((3, 3)), np.empty(3)
        g2, h2, u, turned = np.empty(3), np.empty((3, 3)), np.empty((3, 3)), np.empty((4, 3))
        for t in range(chunk * CHUNK, min(len(tets), (chunk + 1) * CHUNK)):
            if _gradient_of(points, tets, shape_gradients, t, f) <= FLAT:
                out[t] = np.inf
                continue
            _stretches(f, v, s)
            for k in range(3):
                for i in range(3):
                    u[i, k] = f[i, k] / s[k]
            out[t] = symmetrised(code, s, g, h, w, g2, h2)
            _forces(weights[t], shape_gradients[t], u, v, g, turned, forces[t])


@njit(parallel=True)
def _summed(start, item, forces, gradient):  # type: ignore[no-untyped-def]
    """Forces of the corners at each point, as `blocksystem.gather` sums them."""
    for p in prange(len(gradient)):
        for i in range(3):
            gradient[p, i] = 0.0
        for k in range(start[p], start[p + 1]):
            for i in range(3):
                gradient[p, i] += forces[item[k] >> 2, item[k] & 3, i]


class Smooth:
    """The function both are given, for an optimiser of vectors."""

    def __init__(self, objective: Objective, pulls: Observations, start: Floats) -> None:
        self.objective, self.pulls = objective, pulls
        n, k = objective.gradient.shape[0], len(pulls.strengths)
        used = pulls.weights != 0.0
        row = np.repeat(np.arange(k), 4).reshape(k, 4)
        self.places = sparse.csr_matrix((pulls.weights[used], (row[used], pulls.corners[used])), shape=(k, n))
        self.back = self.places.T.tocsr()
        self.calls = self.outside = 0
        self.huge = HUGE * self(start.ravel())[0]

    def __call__(self, x: Floats) -> tuple[float, Floats]:
        o, points = self.objective, x.reshape(-1, 3)
        self.calls += 1
        _forces_of(o.code, points, o.tets, o.shape_gradients, o.weights, o.densities, o.forces)
        spent = float(o.weights @ o.densities)
        if not np.isfinite(spent):
            self.outside += 1
            return self.huge, np.zeros_like(x)
        gradient = np.empty_like(points)
        _summed(o.pattern.corner_start, o.pattern.corner_item, o.forces, gradient)
        p = self.pulls
        off = self.places @ points - p.anchors
        along = np.einsum("ij,ij->i", off, p.normals)
        part = p.across[:, None] * off + ((1.0 - p.across) * along)[:, None] * p.normals
        gradient += self.back @ (2.0 * p.strengths[:, None] * part)
        misfit = float(p.strengths @ (p.across * (off * off).sum(axis=1) + (1.0 - p.across) * along**2))
        return spent + misfit, gradient.ravel()

    def check(self, start: Floats) -> None:
        """The same value and gradient as the program's own, at the start.

        Raises
        ------
        AssertionError
        """
        value, gradient = self(start.ravel())
        own = self.objective.differentiate(start, self.pulls).total
        if not (
            np.isclose(value, own, rtol=1e-10)
            and np.allclose(
                gradient, self.objective.gradient.ravel(), rtol=1e-8, atol=1e-10 * np.abs(gradient).max()
            )
        ):
            raise AssertionError("the optimisers were given different functions")


class _EnoughError(Exception):
    """The goal is reached, or the time is up."""


def ours(objective: Objective, pulls: Observations, start: Floats) -> list[tuple[float, float, float]]:
    """Wall and processor seconds and value after each Newton step, to convergence."""
    objective.multigrid.forget()
    images, wall, cpu = start, time.perf_counter(), time.process_time()
    trace = []
    while True:
        before = objective.differentiate(images, pulls)
        step = objective.descend(images, pulls, at=before, forcing=FORCING)
        images = step.images
        trace.append((time.perf_counter() - wall, time.process_time() - cpu, step.value.total))
        if before.total - step.value.total <= CONVERGED * before.total:
            return trace


def theirs(smooth: Smooth, start: Floats, goal: float, *, memory: int) -> dict[str, Any]:
    """L-BFGS-B to the goal, or until the time is up."""
    smooth.calls = smooth.outside = 0
    wall, cpu = time.perf_counter(), time.process_time()
    best = [np.inf]

    def watched(x: Floats) -> tuple[float, Floats]:
        value, gradient = smooth(x)
        best[0] = min(best[0], value)
        if value <= goal or time.perf_counter() - wall > MOST_S:
            raise _EnoughError
        return value, gradient

    ending = "goal"
    try:
        options = {"maxcor": memory, "maxiter": 10**7, "maxfun": 10**7, "ftol": 0.0, "gtol": 0.0}
        found = minimize(watched, start.ravel(), jac=True, method="L-BFGS-B", options=options)
        ending = str(found.message)
    except _EnoughError:
        if best[0] > goal:
            ending = "stopped by time"
    return {
        "memory": memory,
        "ending": ending,
        "wall_s": round(time.perf_counter() - wall, 2),
        "cpu_s": round(time.process_time() - cpu, 2),
        "evaluations": smooth.calls,
        "not_positive": smooth.outside,
        "value": best[0],
        "share_of_goal": best[0] / goal,
    }


def task(result: Solved) -> tuple[Objective, Observations, Floats]:
    """The function's parts and the start, from a settled map."""
    solver, state = result.solver, result.state
    pulls, _ = solver.pulls(state)
    mesh = result.outcome.map.mesh
    points, tets = np.array(mesh.points), np.array(mesh.tets)
    objective = Objective(points, tets, energy=solver.settings.energy, growth=solver.objective.growth)
    return objective, pulls, result.alignment.apply(points)


def one(wanted_tets: int) -> dict[str, Any]:
    """Both optimisers at one size, in this process."""
    pair = growth.scans()
    growth.solved(pair, growth.meshed(pair, 4000))
    both = growth.meshed(pair, wanted_tets)
    load = os.getloadavg()[0]
    wall, cpu = time.perf_counter(), time.process_time()
    result = growth.solved(pair, both)
    whole = time.perf_counter() - wall, time.process_time() - cpu
    objective, pulls, start = task(result)
    smooth = Smooth(objective, pulls, start)
    smooth.check(start)
    runs = [ours(objective, pulls, start) for _ in range(3)]
    trace = min(runs, key=lambda t: t[-1][1])
    goal = WITHIN * trace[-1][2]
    wall_s, cpu_s, _ = next(row for row in trace if row[2] <= goal)
    first = {
        "steps": sum(row[2] > goal for row in trace) + 1,
        "wall_s": round(wall_s, 3),
        "cpu_s": round(cpu_s, 3),
        "to_convergence_wall_s": round(trace[-1][0], 3),
        "to_convergence_steps": len(trace),
    }
    gradient = growth.median_s(lambda: smooth(start.ravel()), 20)
    newton = growth.median_s(lambda: objective.differentiate(start, pulls), 20)
    memories = MEMORIES if wanted_tets <= SIZES[0] else (MEMORY,)
    second = [theirs(smooth, start, goal, memory=m) for m in memories]
    best = min(second, key=lambda r: (r["ending"] != "goal", r["wall_s"]))
    return {
        "wanted_tets": wanted_tets,
        "tets": len(objective.tets),
        "load": [round(load, 1), round(os.getloadavg()[0], 1)],
        "start": smooth.huge / HUGE,
        "goal": goal,
        "ours": first,
        "l_bfgs_b": second,
        "gradient_ms": round(1e3 * gradient[0], 2),
        "gradient_and_hessian_ms": round(1e3 * newton[0], 2),
        "whole_coarse_to_fine_solve": {"wall_s": round(whole[0], 2), "cpu_s": round(whole[1], 2)},
        "times_faster": ("" if best["ending"] == "goal" else "at least ") + f"{best['wall_s'] / wall_s:.1f}",
        "times_faster_cpu": round(best["cpu_s"] / cpu_s, 1),
        "whole_solve_times_faster": round(best["wall_s"] / whole[0], 1),
    }


def main(sizes: tuple[int, ...]) -> None:
    """All sizes, each in a child process."""
    for size in sizes:
        row = growth.in_child(__file__, size)
        growth.stored(HERE / "descent.json", row)
        print(json.dumps(row, indent=1), flush=True)


if __name__ == "__main__":
    if sys.argv[1:2] == ["--one"]:
        print(json.dumps(one(int(sys.argv[2]))))
    else:
        main(tuple(int(a) for a in sys.argv[1:]) or SIZES)
