"""Maps between several visits, sent round: how well they agree."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np

from volmap import carry as carrying
from volmap.io.atomic import require_place
from volmap.io.tables import require_table_name, sidecar_place, write_table
from volmap.pipeline.ways import Way, read_way
from volmap.types import Column, Finding, Level, MapChain, Progress, Table, silent
from volmap.types.notice import caution

MEANING = (
    "A large loop error proves that at least one of the maps is wrong there. A small one proves no map "
    "right: maps that share a mistake, or of which one undoes what another did, close the loop all the same, "
    "and agreement cannot tell an accurate map from a wrong one (Rohlfing, IEEE Trans. Med. Imaging 31, "
    "2012). Check with landmarks."
)


@dataclass(frozen=True, eq=False)
class Loop:
    """A way that leads back to where it starts, and how far from it things arrive.

    Parameters
    ----------
    way : Way
    error : LoopError
    voxel_mm : float
        One voxel of the scan in which it starts and ends.
    findings : tuple of Finding
    """

    way: Way
    error: carrying.LoopError
    voxel_mm: float
    findings: tuple[Finding, ...]

    @property
    def sentence(self) -> str:
        """The result in one line."""
        e = self.error
        if not e.returned.any():
            return "nothing of the body came home: the maps have no part of it in common"
        x, y, z = e.worst_mm
        return (
            f"loop error {e.mean_mm:.3g} mm mean, {e.p95_mm:.3g} mm p95, {e.max_mm:.3g} mm max "
            f"({e.mean_mm / self.voxel_mm:.2g}, {e.p95_mm / self.voxel_mm:.2g} and "
            f"{e.max_mm / self.voxel_mm:.2g} voxels), the largest at ({x:.1f}, {y:.1f}, {z:.1f}) mm; "
            f"the way round is defined for {100 * (e.defined + e.continued):.1f} % of the body"
        )

    @property
    def as_dict(self) -> dict[str, Any]:
        """Plain values, for JSON."""
        e, names = self.error, [leg.start.name for leg in self.way.legs]
        values = {"mean": e.mean_mm, "p95": e.p95_mm, "max": e.max_mm}
        return {
            "schema": "volmap-loop/1",
            "scans": [*names, self.way.end.name],
            "through": [{"map": leg.name, "turned": leg.turned} for leg in self.way.legs],
            "loop_error_mm": values,
            "loop_error_voxels": {name: mm / self.voxel_mm for name, mm in values.items()},
            "worst_mm": list(e.worst_mm),
            "part_of_body_defined": e.defined,
            "part_of_body_continued": e.continued,
            "places": len(e.places),
            "how": "mean and p95 over places spread evenly by volume, max over the points and centroids of "
            "the first mesh too; 'continued' is the part that was up to a voxel outside a body on its way",
            "meaning": MEANING,
            "findings": [f.as_dict() for f in self.findings],
            "notice": caution(),
        }


def loop_folders(
    through: Sequence[Path],
    *,
    out: Path | None = None,
    seed: int = 0,
    overwrite: bool = False,
    progress: Progress = silent,
) -> Loop:
    """Send the body of the first scan round a loop of map folders.

    Parameters
    ----------
    through : sequence of Path
        Map folders in order; each is turned where it runs the other way.
    out : Path, optional
        A table (.csv or .parquet) of all places, with a document beside it.
    seed : int
        Of the places spread by volume.
    overwrite : bool
    progress : Progress

    Raises
    ------
    InputError
        A folder that is none, folders that do not join or do not lead back, a place that is taken.
    """
    if out is not None:
        require_table_name(out)
        for place in (out, sidecar_place(out)):
            require_place(place, overwrite=overwrite, folder=False)
    way = read_way(through, progress=progress)
    progress("loop", 0, 0, f"{way.start.name}, round and home")
    voxel_mm = way.start.grid.voxel_mm
    error = carrying.loop_error(MapChain(way.map.maps), reach_mm=voxel_mm, seed=seed)
    loop = Loop(way, error, voxel_mm, (*way.findings, *_one_pair_only(way)))
    if out is not None:
        write_table(out, loop_table(loop), overwrite=overwrite)
    return loop


def _one_pair_only(way: Way) -> tuple[Finding, ...]:
    """A pair of scans gives one map, whichever is named first: there and back by it is nothing."""
    pairs = {frozenset((leg.start.sha256, leg.end.sha256)) for leg in way.legs}
    if len(pairs) > 1:
        return ()
    sentence = (
        "all maps join the same two scans; `volmap map` makes one map and its exact inverse of a pair, so "
        "that this loop only tells maps made with different settings apart"
    )
    return (Finding(Level.WARN, "one-pair-only", "loop", sentence, "add the maps to and from a third scan"),)


def loop_table(loop: Loop) -> Table:
    """A row a place: where it started, where it came home, how far apart."""
    e = loop.error
    n_inner = len(e.places) - e.n_even
    n_points = len(loop.way.map.mesh.points)
    kinds = ["mesh point"] * n_points + ["tet centroid"] * (n_inner - n_points) + ["by volume"] * e.n_even
    columns = [Column("kind", tuple(kinds), meaning="how the place was chosen")]
    for word, places in (("", e.places), ("home_", e.homes)):
        for d, axis in enumerate("xyz"):
            meaning = f"{axis} in the world of {loop.way.start.name}, RAS+"
            columns.append(Column(f"{word}{axis}", np.array(places[:, d]), "mm", meaning))
    columns.append(Column("loop_error", e.distance_mm, "mm", "distance between a place and its home"))
    columns.append(
        Column("outside", np.array(e.outside_mm), "mm", "the farthest it was outside a body on its way")
    )
    return Table(tuple(columns), {k: v for k, v in loop.as_dict.items() if k != "notice"})
