"""What carrying costs on a map of about 100k tets: ``python tests/bench/carrying.py``.

A million points strewn at random through the body, with and without values; tables of a million rows; lines
of a hundred thousand segments.  VTK's probe, given the same mesh, images and points, is asked in the same
rounds: its locator is built anew each time, as ours is.  (It takes a cell a little beside a point for the
one that holds it, hence the difference.)  The map needs no solve: its images are those of a smooth
deformation.  Results are printed and stored in ``tests/bench/carrying.json``, part by part.  Nothing here is
a test: the machine's load enters the seconds, so compare processor seconds and ratios.
"""

from __future__ import annotations

import json
import os
import tempfile
import time
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numba
import numpy as np
import volmap_phantoms
from numpy.typing import NDArray

from volmap.carry import carry, move_points, with_bends
from volmap.io.landmarks import read_landmarks, write_landmarks
from volmap.io.measurements import read_measurements, write_measurements
from volmap.mesh import MeshSettings, mesh
from volmap.types import (
    Landmarks,
    Measurements,
    Polylines,
    Quantity,
    Rule,
    Rules,
    TetMesh,
    VolumeMap,
)

WANTED_TETS, N_POINTS, N_LINES, ROUNDS = 115_000, 1_000_000, 10_000, 3
STORED = Path(__file__).parent / "carrying.json"
Row = dict[str, Any]


def main() -> None:
    """Print and store."""
    body = mesh(
        volmap_phantoms.make("gel-column").visits[0].labels, MeshSettings(wanted_tets=WANTED_TETS)
    ).mesh
    volume_map = VolumeMap(body, body.points + 2.0 * np.sin(body.points[:, [1, 2, 0]] / 15.0))
    assert volume_map.volume_ratio.min() > 0
    told: Row = {"tets": len(body.tets), "threads": numba.get_num_threads()}
    points = inside(body, N_POINTS)
    for part in (of_points, of_values, of_tables, of_lines):
        told[part.__name__.removeprefix("of_")] = part(volume_map, points)
        show(told)
    STORED.write_text(json.dumps(told, indent=1) + "\n", encoding="utf-8")


def of_points(volume_map: VolumeMap, points: NDArray[np.float64]) -> Row:
    """Points alone, against VTK's probe of the same mesh."""
    move_points(volume_map, points[:100_000])  # compiles, or loads what was compiled
    probe = vtk_probe(volume_map, points)
    ours, theirs = paired(lambda: move_points(volume_map, points), probe)
    apart = np.linalg.norm(ours["answer"].points - theirs["answer"][0], axis=1)[theirs["answer"][1]]
    return {
        "points": len(points),
        "seconds": ours["wall"],
        "cpu_seconds": ours["cpu"],
        "vtk_seconds": theirs["wall"],
        "vtk_cpu_seconds": theirs["cpu"],
        "times_faster_cpu": theirs["cpu"] / ours["cpu"],
        "vtk_found": float(theirs["answer"][1].mean()),
        "largest_difference_mm": float(apart.max()),
    }


def of_values(volume_map: VolumeMap, points: NDArray[np.float64]) -> Row:
    """Points with a density, a vector and a tensor on each."""
    thing = measured(points)
    found = timed(lambda: carry(thing, volume_map))
    return {"points": len(points), "seconds": found["wall"], "cpu_seconds": found["cpu"]}


def of_tables(volume_map: VolumeMap, points: NDArray[np.float64]) -> Row:
    """CSV of as many rows: measurements (13 columns of numbers) and landmarks, out and in."""
    thing = measured(points)
    rules = Rules(None, {q.name: q.rule for q in thing.quantities})
    marks = Landmarks(thing.names, points)
    row: Row = {"rows": len(points)}
    with tempfile.TemporaryDirectory() as folder:
        table, list_of_marks = Path(folder, "t.csv"), Path(folder, "m.csv")
        calls: dict[str, Callable[[], Any]] = {
            "write_measurements": lambda: write_measurements(table, thing, overwrite=True),
            "read_measurements": lambda: read_measurements(table, rules),
            "write_landmarks": lambda: write_landmarks(list_of_marks, marks, overwrite=True),
            "read_landmarks": lambda: read_landmarks(list_of_marks),
        }
        for name, call in calls.items():
            found = timed(call, rounds=1)
            row |= {f"{name}_seconds": found["wall"], f"{name}_cpu_seconds": found["cpu"]}
        row["measurements_mb"] = table.stat().st_size / 2**20
    return row


def of_lines(volume_map: VolumeMap, points: NDArray[np.float64]) -> Row:
    """Lines of eleven points a few edges apart, with their bends."""
    ends = points[: 2 * N_LINES].reshape(-1, 2, 3)
    share = np.linspace(0, 1, 11)[:, None]
    along = (ends[:, :1] + share * 0.5 * (ends[:, 1:] - ends[:, :1])).reshape(-1, 3)
    lines = Polylines(tuple(map(str, range(N_LINES))), along, np.arange(N_LINES + 1) * 11)
    bent = timed(lambda: with_bends(lines, volume_map), rounds=1)
    whole = timed(lambda: carry(lines, volume_map), rounds=1)
    return {
        "segments": len(lines.segments),
        "points_after": len(bent["answer"].points),
        "bends_seconds": bent["wall"],
        "bends_cpu_seconds": bent["cpu"],
        "seconds": whole["wall"],
        "cpu_seconds": whole["cpu"],
    }


def measured(points: NDArray[np.float64]) -> Measurements:
    """A density, a vector and a tensor at each point."""
    random = np.random.default_rng(1)
    tensors = random.normal(size=(len(points), 3, 3))
    return Measurements(
        tuple(map(str, range(len(points)))),
        points,
        (
            Quantity("activity", "kBq_per_ml", random.random(len(points)), Rule.DENSITY),
            Quantity("flow", "mm_per_s", random.normal(size=(len(points), 3)), Rule.FLUX),
            Quantity("d", "mm2_per_s", tensors + tensors.swapaxes(1, 2), Rule.TURN),
        ),
    )


def inside(body: TetMesh, n: int) -> NDArray[np.float64]:
    """Random places in the body, in no order."""
    random = np.random.default_rng(0)
    volumes = np.abs(body.volumes)
    tet = random.choice(len(body.tets), n, p=volumes / volumes.sum())
    return np.einsum("qa,qad->qd", random.dirichlet(np.ones(4), n), body.points[body.tets[tet]])


def vtk_probe(volume_map: VolumeMap, points: NDArray[np.float64]) -> Callable[[], Any]:
    """VTK's probe filter with its static cell locator: images at points, and where it found a cell."""
    import pyvista
    from vtkmodules.vtkCommonDataModel import vtkStaticCellLocator
    from vtkmodules.vtkFiltersCore import vtkProbeFilter

    grid = pyvista.UnstructuredGrid({10: np.array(volume_map.mesh.tets)}, np.array(volume_map.mesh.points))
    grid.point_data["image"] = np.array(volume_map.images)
    places = pyvista.PolyData(points)

    def call() -> tuple[NDArray[np.float64], NDArray[np.bool_]]:
        probe = vtkProbeFilter()
        probe.SetCellLocator(vtkStaticCellLocator())
        probe.SetInputData(places)
        probe.SetSourceData(grid)
        probe.Update()
        found = pyvista.wrap(probe.GetOutput())
        return np.array(found["image"]), np.array(found["vtkValidPointMask"]).astype(bool)

    return call


def timed(call: Callable[[], Any], *, rounds: int = ROUNDS) -> Row:
    """Seconds on the wall and of all processors, the least of some rounds, and the last answer."""
    wall, cpu, answer = [], [], None
    for _ in range(rounds):
        answer = None
        a, b = time.perf_counter(), os.times()
        answer = call()
        c = os.times()
        wall.append(time.perf_counter() - a)
        cpu.append(c.user + c.system - b.user - b.system)
    return {"wall": min(wall), "cpu": min(cpu), "answer": answer}


def paired(*calls: Callable[[], Any]) -> list[Row]:
    """Two calls in turn, so that both meet the same load."""
    rounds = [[timed(call, rounds=1) for call in calls] for _ in range(ROUNDS)]
    return [min((r[i] for r in rounds), key=lambda row: row["cpu"]) for i in range(len(calls))]


def show(told: Row) -> None:
    """The part that was measured last."""
    name, row = list(told.items())[-1]
    print(name, *(f"{key}={value:.4g}" for key, value in row.items()), sep="\n  ", flush=True)


if __name__ == "__main__":
    main()
