"""How the cost of meshing grows: ``python tests/bench/meshing.py [TETS ...]`` (10k to 300k; 1M by asking).

Each size is meshed in a process of its own, after a small mesh that loads the compiled kernels.  Seconds are
of the processor, on one thread, by step; memory is the highest resident set of the process, and what of it
came with the mesh.  Printed, and stored in ``tests/bench/meshing.json``.
"""

from __future__ import annotations

import json
import os
import platform
import subprocess
import sys
import time
from pathlib import Path

import numpy as np
import volmap_phantoms

from volmap.mesh import MeshSettings, mesh, mesh_levels
from volmap.mesh.prepare import prepare

HERE = Path(__file__).parent
SIZES = (10_000, 30_000, 100_000, 300_000)


class Steps:
    """A progress callback that keeps the processor's seconds of each step."""

    def __init__(self) -> None:
        self.seconds: dict[str, float] = {}
        self.name, self.begin = "", 0.0

    def __call__(self, stage: str, step: int, total: int, note: str = "") -> None:
        self.turn(f"{step} {note.split(' with ')[0]}")

    def turn(self, name: str) -> None:
        """End the step that runs and begin another."""
        now = time.process_time()
        if self.name:
            self.seconds[self.name] = round(self.seconds.get(self.name, 0.0) + now - self.begin, 3)
        self.name, self.begin = name, now


def memory_mb(field: str) -> float:
    """A line of /proc/self/status, MB."""
    lines = Path("/proc/self/status").read_text(encoding="ascii").splitlines()
    return next(int(line.split()[1]) / 1024 for line in lines if line.startswith(field))


def one(wanted_tets: int) -> dict:
    """Mesh one size in this process."""
    volume = volmap_phantoms.make("gel-column", seed=0).visits[0].labels
    mesh_levels(volume, MeshSettings(wanted_tets=3000), coarser=1)
    Path("/proc/self/clear_refs").write_text("5", encoding="ascii")  # the peak starts anew (Linux)
    before, steps, begin = memory_mb("VmRSS"), Steps(), time.perf_counter()
    steps.turn("0 prepare")
    prepare(volume)
    result = mesh(volume, MeshSettings(wanted_tets=wanted_tets), progress=steps)
    steps.turn("")
    wall, peak = time.perf_counter() - begin, memory_mb("VmHWM")
    steps.seconds["quality table"] = steps.seconds.pop("6 done")
    seconds, n_tets = sum(steps.seconds.values()), result.quality.tets
    begin_levels = time.process_time()
    levels = mesh_levels(volume, MeshSettings(wanted_tets=wanted_tets), coarser=2) if n_tets < 4e5 else None
    with_coarse = time.process_time() - begin_levels
    return {
        "wanted_tets": wanted_tets,
        "tets": n_tets,
        "cpu_s": round(seconds, 2),
        "wall_s": round(wall, 2),
        "steps_s": steps.seconds,
        "with_two_coarser_s": round(with_coarse, 2) if levels else None,
        "coarser_tets": [r.quality.tets for r in levels.coarser] if levels else None,
        "rss_before_mb": round(before),
        "peak_mb": round(peak),
        "bytes_a_tet": round((peak - before) * 2**20 / n_tets),
        "least_dihedral_deg": round(result.quality.min_dihedral_deg, 2),
        "largest_volume_error_pct": round(max(abs(r.volume_error_pct) for r in result.quality.rows), 3),
    }


def exponent(rows: list[dict], key: str) -> float:
    """Slope of the logarithm of a column over that of the tets."""
    return float(np.polyfit(np.log([r["tets"] for r in rows]), np.log([r[key] for r in rows]), 1)[0])


def main(sizes: tuple[int, ...]) -> None:
    """All sizes, each in a child process."""
    rows = []
    for size in sizes:
        command = [sys.executable, __file__, "--one", str(size)]
        child = subprocess.run(
            command, check=True, capture_output=True, text=True, env=os.environ | {"NUMBA_NUM_THREADS": "1"}
        )
        rows.append(json.loads(child.stdout.splitlines()[-1]))
        print(json.dumps(rows[-1]), flush=True)
    table = {"machine": platform.processor() or platform.machine(), "cores": os.cpu_count(), "rows": rows}
    if len(rows) > 1:
        table["exponent_of_cpu"] = round(exponent(rows, "cpu_s"), 3)
        print("seconds grow as tets to the power", table["exponent_of_cpu"])
    text = json.dumps(table, indent=1)
    (HERE / "meshing.json").write_text(text + "\n", encoding="utf-8")


if __name__ == "__main__":
    if sys.argv[1:2] == ["--one"]:
        print(json.dumps(one(int(sys.argv[2]))))
    else:
        main(tuple(int(n) for n in sys.argv[1:]) or SIZES)
