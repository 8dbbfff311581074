"""From a closed triangle surface to tets of one label."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from volmap.kernels.lattice import oriented, used_only
from volmap.kernels.strata import new_strata
from volmap.kernels.tets import signed_volumes
from volmap.mesh.improve import smoothed_inside
from volmap.mesh.labelled import Complex
from volmap.mesh.mesher import MeshResult
from volmap.mesh.pinned import freed
from volmap.mesh.quality import QualityTable, VoxelFacts, quality_table
from volmap.mesh.settings import MeshSettings
from volmap.mesh.surface_checks import REMEDY, enclosed_volume, merged, require_closed, surface_topology
from volmap.mesh.tetgen_run import Failure, Filled, fill, scale_of
from volmap.types.errors import InputError
from volmap.types.findings import Finding, Level
from volmap.types.progress import Progress, silent
from volmap.types.tetmesh import TetMesh

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

TIME_LIMIT_S = 120.0
LARGER = 1.3  # largest tet allowed, in regular tets of the wanted edge
ENCLOSED_PCT = 0.01  # by which the tets may miss the volume inside the surface
POOR_DEG = 5.0  # smallest dihedral angle worth a word


def mesh_surface(
    points: Floats,
    triangles: Ints,
    settings: MeshSettings | None = None,
    *,
    label: int = 1,
    name: str = "surface",
    time_limit_s: float = TIME_LIMIT_S,
    progress: Progress = silent,
) -> MeshResult:
    """Tets inside a closed surface, whose triangles stay as they are.

    Parameters
    ----------
    points : (n, 3) float64, mm, RAS+
    triangles : (m, 3) int64
    settings : MeshSettings, optional
        Only `edge_mm` and `wanted_tets` count.
    label : int
        Of all tets.
    name : str
        For messages.
    time_limit_s : float
        For each attempt.

    Raises
    ------
    InputError
        An open, branching, inconsistently turned or self-crossing surface; a mesher that crashed or hung.
    """
    settings = settings or MeshSettings()
    points, triangles = np.array(points, np.float64), np.array(triangles, np.int64)
    if triangles.size and (triangles.min() < 0 or triangles.max() >= len(points)):
        raise InputError("a triangle names a point that does not exist", where=name, remedy=REMEDY)
    points, triangles = merged(points, triangles)
    require_closed(points, triangles, name=name)
    volume = abs(enclosed_volume(points, triangles))
    edge_mm = settings.edge_mm or (volume / settings.wanted_tets * 6.0 * np.sqrt(2.0)) ** (1 / 3)
    filled = _fill(points, triangles, float(edge_mm), name=name, time_limit_s=time_limit_s, progress=progress)
    mesh = _one_label(filled, volume, label, name)
    facts = VoxelFacts(volume, 0.0, *surface_topology(triangles), thin=False)
    table = quality_table(mesh, {label: facts}, {label: name})
    used = replace(settings, edge_mm=float(edge_mm), refine=0)
    return MeshResult(mesh, table, _findings(table, name), used)


def switch_ladder(edge_mm: float, scale_mm: float) -> tuple[str, ...]:
    """TetGen's switches from quality to none: ratio / least angle, largest volume, surface kept."""
    largest = LARGER * (edge_mm / scale_mm) ** 3 / (6.0 * np.sqrt(2.0))
    return (f"pzYq1.3/15a{largest:.12f}Q", f"pzYq1.5/10a{largest:.12f}Q", f"pzYq2a{largest:.12f}Q", "pzYQ")


def _fill(
    points: Floats, triangles: Ints, edge_mm: float, *, name: str, time_limit_s: float, progress: Progress
) -> Filled:
    """The first mesh that the ladder gives."""
    failure = Failure.EMPTY
    ladder = switch_ladder(edge_mm, scale_of(points))
    for step, switches in enumerate(ladder, start=1):
        progress("mesh", step, len(ladder), "filling the surface")
        found = fill(points, triangles, switches=switches, time_limit_s=time_limit_s)
        if isinstance(found, Filled):
            return found
        failure = found
    raise InputError(
        "the surface could not be filled with tets",
        where=name,
        found=str(failure),
        expected="a surface that does not cross itself",
        remedy=REMEDY,
        refused=True,
    )


def _one_label(filled: Filled, volume_mm3: float, label: int, name: str) -> TetMesh:
    """Tets without pinned ones, inner points smoothed.

    Raises
    ------
    InputError
        When the tets do not fill the volume inside the surface: it crosses itself or holds a cavity.
    """
    tets = oriented(filled.points, filled.tets)
    tets = tets[signed_volumes(filled.points, tets) > 0]
    total = float(signed_volumes(filled.points, tets).sum())
    if abs(total - volume_mm3) > 0.01 * ENCLOSED_PCT * volume_mm3:
        raise InputError(
            "the surface crosses itself or holds a cavity",
            where=name,
            found=f"tets of {total:.6g} mm3 inside a surface that encloses {volume_mm3:.6g} mm3",
            expected="equal volumes",
            remedy=REMEDY,
            refused=True,
        )
    complex_ = freed(Complex(filled.points, tets, np.ones(len(tets), np.int64)))
    complex_ = smoothed_inside(complex_, new_strata(*complex_))
    points, tets, _ = used_only(complex_.points, complex_.tets)
    return TetMesh(points, tets, np.full(len(tets), label, np.int64))


def _findings(table: QualityTable, name: str) -> tuple[Finding, ...]:
    """A word about poor tets: those a kept surface of uneven triangles forces."""
    if table.min_dihedral_deg >= POOR_DEG:
        return ()
    return (
        Finding(
            Level.WARN,
            "poor-tets",
            name,
            f"the smallest dihedral angle is {table.min_dihedral_deg:.1f} degrees",
            "remesh the surface with even triangles, or mesh a label volume instead",
        ),
    )
