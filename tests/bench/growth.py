"""How the cost of a map grows: ``python tests/bench/growth.py [--million] [TETS ...]`` (10k to 300k).

`gel-column`, visit 0 to 3, meshed and solved as `volmap map` does (both scans at once, coarser meshes
first), each size in a process of its own after a small pair that loads the compiled kernels.  Stages are
measured from outside, by wrapping what the solver calls.  Memory is the highest resident set of the process
(VmHWM, set back before each stage; some 290 MB of it are libraries).  One product is `blocksystem.multiply`
with the solver's own matrix (float32, all threads); beside it SciPy's product of the same matrix in float64
(one core), which knows nothing of ours.  Both are medians of many, after the solve.  Printed, and stored in
``tests/bench/growth.json``, size by size.
"""

from __future__ import annotations

import json
import os
import platform
import subprocess
import sys
import time
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import volmap_phantoms
from scipy import sparse

from volmap.kernels import blocksystem
from volmap.mapping import Solved, climbing, map_mesh, solve
from volmap.mapping.objective import Objective
from volmap.mesh import MeshLevels, MeshSettings, levels, mesh_levels
from volmap.pipeline.at_once import on_both
from volmap.pipeline.machine import use_threads
from volmap.pipeline.pair import _voxel_mm, coarser_bodies
from volmap.types import LabelVolume, silent

HERE = Path(__file__).parent
SIZES = (10_000, 30_000, 100_000, 300_000)
EDGES_MM = {1_000_000: 1.05}  # shorter than "wanted tets" may ask for: the voxels say nothing finer
KB_A_TET, BASE_MB = 1.5, 400.0
PRODUCTS = 100


def memory_mb(field: str) -> float:
    """A line of /proc/self/status, in units of 10^6 bytes."""
    lines = Path("/proc/self/status").read_text(encoding="ascii").splitlines()
    return next(int(line.split()[1]) * 1024 / 1e6 for line in lines if line.startswith(field))


class Peak:
    """The highest resident set of a stretch of work, MB, and of all of them."""

    def __init__(self) -> None:
        self.highest_mb = 0.0

    def read(self) -> float:
        """Since the last `reset`."""
        now = memory_mb("VmHWM")
        self.highest_mb = max(self.highest_mb, now)
        return now

    def reset(self) -> None:
        """Let it start anew (Linux)."""
        self.read()
        Path("/proc/self/clear_refs").write_text("5", encoding="ascii")


PEAK = Peak()


class Stages:
    """Wall and processor seconds and peak memory by stage, from wrapped functions."""

    def __init__(self) -> None:
        self.wall: dict[str, float] = {}
        self.cpu: dict[str, float] = {}
        self.peak_mb: dict[str, float] = {}

    def watch(
        self, owner: Any, name: str, stage: str | Callable[..., str], *, own_thread: bool = False
    ) -> None:
        """Replace ``owner.name`` by itself with a watch; of its own thread, without memory, if need be."""
        function, clock = getattr(owner, name), time.thread_time if own_thread else time.process_time

        def watched(*args: Any, **kwargs: Any) -> Any:
            wall, cpu = time.perf_counter(), clock()
            if not own_thread:
                PEAK.reset()
            found = function(*args, **kwargs)
            key = stage if isinstance(stage, str) else stage(*args)
            self.wall[key] = self.wall.get(key, 0.0) + time.perf_counter() - wall
            self.cpu[key] = self.cpu.get(key, 0.0) + clock() - cpu
            if not own_thread:
                self.peak_mb[key] = max(self.peak_mb.get(key, 0.0), PEAK.read())
            return found

        setattr(owner, name, watched)

    def table(self) -> dict[str, dict[str, float]]:
        """What was measured, rounded."""
        told = {}
        for key in self.wall:
            told[key] = {"wall_s": round(self.wall[key], 2), "cpu_s": round(self.cpu[key], 2)}
            if key in self.peak_mb:
                told[key]["peak_mb"] = round(self.peak_mb[key])
        return told


def scans() -> tuple[LabelVolume, LabelVolume]:
    """The pair all sizes share."""
    visits = volmap_phantoms.make("gel-column", seed=0).visits
    return visits[0].labels, visits[3].labels


def meshed(pair: tuple[LabelVolume, LabelVolume], wanted_tets: int) -> list[MeshLevels]:
    """Fine and coarser meshes of both scans, as the program makes them."""
    settings = MeshSettings(
        edge_mm=EDGES_MM.get(wanted_tets), wanted_tets=wanted_tets, max_tets=max(600_000, 2 * wanted_tets)
    )
    return on_both(
        lambda volume, told: mesh_levels(volume, settings, progress=told),
        pair,
        silent,
        n_threads=use_threads(None),
    )


def solved(pair: tuple[LabelVolume, LabelVolume], both: list[MeshLevels]) -> Solved:
    """The map of the pair, as the program solves it."""
    here, there = both
    return map_mesh(
        here.fine.mesh,
        there.fine.mesh.interfaces,
        voxel_mm=_voxel_mm(*pair),
        coarser=coarser_bodies(here, there),
    )


def median_s(work: Callable[[], object], times: int = PRODUCTS) -> tuple[float, float, float]:
    """Median wall seconds, mean processor seconds and least wall seconds of a piece of work."""
    walls, cpu = [], time.process_time()
    for _ in range(times):
        begin = time.perf_counter()
        work()
        walls.append(time.perf_counter() - begin)
    return float(np.median(walls)), (time.process_time() - cpu) / times, min(walls)


def products(matrix: sparse.bsr_matrix) -> dict[str, float]:
    """Milliseconds of one product with a matrix: ours, and SciPy's in float64."""
    x = np.cos(np.arange(matrix.shape[0], dtype=np.float64))
    out, rows = np.empty((len(x) // 3, 3)), x.reshape(-1, 3)
    ours = median_s(lambda: blocksystem.multiply(matrix.indptr, matrix.indices, matrix.data, rows, out))
    double = matrix.astype(np.float64)
    theirs = median_s(lambda: double @ x)
    if not np.allclose(out.ravel(), double @ x, rtol=1e-4, atol=1e-5 * np.abs(out).max()):
        raise AssertionError("the two products differ")
    return {
        "ours_float32_ms": 1e3 * ours[0],
        "ours_float32_cpu_ms": 1e3 * ours[1],
        "ours_float32_least_ms": 1e3 * ours[2],
        "scipy_float64_ms": 1e3 * theirs[0],
        "scipy_float64_cpu_ms": 1e3 * theirs[1],
        "scipy_float64_least_ms": 1e3 * theirs[2],
    }


def by_level(history: tuple[Any, ...]) -> list[dict[str, int]]:
    """Newton steps and linear iterations of each mesh of a solve."""
    return [
        {
            "tets": n,
            "newton_steps": sum(r.tets == n for r in history),
            "linear_iterations": sum(r.linear_iterations for r in history if r.tets == n),
        }
        for n in sorted({r.tets for r in history})
    ]


def one(wanted_tets: int) -> dict[str, Any]:
    """Mesh and solve one size in this process."""
    pair = scans()
    solved(pair, meshed(pair, 4000))  # loads the kernels
    mesh_stages, map_stages, inside = Stages(), Stages(), Stages()
    mesh_stages.watch(levels, "prepare", "voxels", own_thread=True)
    mesh_stages.watch(levels, "mesh_prepared", "fine mesh", own_thread=True)
    mesh_stages.watch(levels, "_coarse", "coarse meshes", own_thread=True)
    load, before = os.getloadavg(), memory_mb("VmRSS")
    PEAK.reset()
    wall, cpu = time.perf_counter(), time.process_time()
    both = meshed(pair, wanted_tets)
    mesh_wall, mesh_cpu = time.perf_counter() - wall, time.process_time() - cpu
    mesh_peak, n = PEAK.read(), both[0].fine.quality.tets
    PEAK.reset()
    PEAK.highest_mb = 0.0

    def place(solver: climbing.Climber, *_: object) -> str:
        return "fine climb" if len(solver.objective.tets) == n else "coarse climbs"

    map_stages.watch(solve, "align", "align")
    map_stages.watch(solve, "climb", place)
    map_stages.watch(
        solve._Task,
        "climber",
        lambda task, depth, *_: f"set up {'fine' if depth + 1 == len(task.levels) else 'coarse'}",
    )
    map_stages.watch(solve, "carried", "to the finer mesh")
    map_stages.watch(solve, "valid_start", "to the finer mesh")
    for owner, name, what in (
        (climbing.Climber, "pulls", "match"),
        (Objective, "differentiate", "differentiate"),
        (Objective, "newton_step", "linear solves"),
        (Objective, "largest_step", "step bounds"),
        (Objective, "value", "values"),
    ):
        inside.watch(owner, name, what)
    wall, cpu = time.perf_counter(), time.process_time()
    result = solved(pair, both)
    map_wall, map_cpu = time.perf_counter() - wall, time.process_time() - cpu
    PEAK.read()
    map_peak = PEAK.highest_mb
    product = products(result.solver.objective.matrix)
    return {
        "wanted_tets": wanted_tets,
        "tets": n,
        "tets_of_target": both[1].fine.quality.tets,
        "load": [round(load[0], 1), round(os.getloadavg()[0], 1)],
        "threads": use_threads(None),
        "status": result.outcome.status.name,
        "residual_mm": round(result.outcome.history[-1].residual_mm, 4),
        "mesh_wall_s": round(mesh_wall, 2),
        "mesh_cpu_s": round(mesh_cpu, 2),
        "solve_wall_s": round(map_wall, 2),
        "solve_cpu_s": round(map_cpu, 2),
        "mesh_stages": mesh_stages.table(),
        "solve_stages": map_stages.table(),
        "on_all_levels_of_which": inside.table(),
        "levels": by_level(result.outcome.history),
        "product": {k: round(v, 3) for k, v in product.items()},
        "solve_in_our_products": round(1e3 * map_wall / product["ours_float32_ms"]),
        "solve_in_our_products_cpu": round(1e3 * map_cpu / product["ours_float32_cpu_ms"]),
        "solve_in_scipy_products": round(1e3 * map_wall / product["scipy_float64_ms"]),
        "solve_in_scipy_products_cpu": round(1e3 * map_cpu / product["scipy_float64_cpu_ms"]),
        "rss_before_mb": round(before),
        "mesh_peak_mb": round(mesh_peak),
        "solve_peak_mb": round(map_peak),
        "peak_mb": round(max(mesh_peak, map_peak)),
        "allowed_mb": round(BASE_MB + KB_A_TET * n / 1e3),
    }


def exponent(rows: list[dict[str, Any]], value: Callable[[dict[str, Any]], float]) -> float:
    """Slope of the logarithm of a figure over that of the tets."""
    sizes = np.log([r["tets"] for r in rows])
    return round(float(np.polyfit(sizes, np.log([value(r) for r in rows]), 1)[0]), 3)


def exponents(rows: list[dict[str, Any]]) -> dict[str, float]:
    """How the figures grow over these sizes."""
    return {
        "solve_cpu": exponent(rows, lambda r: r["solve_cpu_s"]),
        "solve_wall": exponent(rows, lambda r: r["solve_wall_s"]),
        "mesh_cpu": exponent(rows, lambda r: r["mesh_cpu_s"]),
        "all_cpu": exponent(rows, lambda r: r["solve_cpu_s"] + r["mesh_cpu_s"]),
        "all_wall": exponent(rows, lambda r: r["solve_wall_s"] + r["mesh_wall_s"]),
        "memory_above_the_libraries": exponent(rows, lambda r: r["peak_mb"] - r["rss_before_mb"]),
    }


def in_child(file: str, size: int) -> dict[str, Any]:
    """What a bench file measures of one size, in a process of its own."""
    command = [sys.executable, file, "--one", str(size)]
    child = subprocess.run(command, check=True, stdout=subprocess.PIPE, text=True)
    return dict(json.loads(child.stdout.splitlines()[-1]))


def stored(file: Path, row: dict[str, Any]) -> dict[str, Any]:
    """The table of a bench with a row put in place of the one of that size, written."""
    table = json.loads(file.read_text()) if file.exists() else {"rows": []}
    rows = [r for r in table["rows"] if r["wanted_tets"] != row["wanted_tets"]]
    table["rows"] = sorted([*rows, row], key=lambda r: r["wanted_tets"])
    table["machine"] = {"cores": os.cpu_count(), "system": platform.system(), "kind": platform.machine()}
    file.write_text(json.dumps(table, indent=1) + "\n", encoding="utf-8")
    return table


def main(sizes: tuple[int, ...]) -> None:
    """All sizes, each in a child process."""
    file = HERE / "growth.json"
    for size in sizes:
        row = in_child(__file__, size)
        print(json.dumps(row, indent=1), flush=True)
        table = stored(file, row)
    if len(table["rows"]) > 2:
        table["exponents"] = exponents(table["rows"])
        table["exponents_without_the_smallest"] = exponents(table["rows"][1:])
        file.write_text(json.dumps(table, indent=1) + "\n", encoding="utf-8")
        print(json.dumps({k: v for k, v in table.items() if k.startswith("exponents")}, indent=1))


if __name__ == "__main__":
    given = [a for a in sys.argv[1:] if a != "--million"]
    if given[:1] == ["--one"]:
        print(json.dumps(one(int(given[1]))))
    else:
        asked = tuple(int(a) for a in given) or SIZES
        main((*asked, 1_000_000) if "--million" in sys.argv else asked)
