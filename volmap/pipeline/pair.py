"""Mapping a pair: screen, mesh, map, sample, certify."""

from __future__ import annotations

from dataclasses import asdict, dataclass, field, replace
from pathlib import Path
from typing import Any

import numpy as np

from volmap import carry as carrying
from volmap import certify as certifying
from volmap import mesh as meshing
from volmap import screen as screening
from volmap.mapfolder import MapFolder
from volmap.mapping import Bodies, Coupling, MapSettings, MirrorTrial, Solved, couple, map_mesh
from volmap.mesh import MeshLevels, MeshResult, MeshSettings
from volmap.pipeline.at_once import on_both
from volmap.pipeline.machine import Stopwatch, compile_at_first_use, peak_mb, use_threads, versions
from volmap.pipeline.mirroring import mirror_compared, mirror_document, mirror_findings
from volmap.pipeline.opinion import evidence_of
from volmap.pipeline.told import distortion_of, mesh_document, scan_document, sidecars_of
from volmap.types import (
    Certificate,
    Finding,
    GivenBoundary,
    InputError,
    LabelVolume,
    LandmarkPairs,
    Level,
    Progress,
    VolumeMap,
    silent,
)


@dataclass(frozen=True)
class MapJob:
    """Everything a user may choose about mapping a pair.

    Parameters
    ----------
    mesh : MeshSettings
    map : MapSettings
    both_orders : bool
        Solve on the other scan's mesh too, to measure how much the answer depends on whose mesh is used, and
        draw the two solves together into one map and its inverse.
    allow_topology_change : bool
        Go on when pieces or Euler numbers differ; the certificate fails the gate `labels_agree`.
    gates : Path, optional
        The user's own gate table.
    """

    mesh: MeshSettings = field(default_factory=MeshSettings)
    map: MapSettings = field(default_factory=MapSettings)
    both_orders: bool = True
    allow_topology_change: bool = False
    gates: Path | None = None


@dataclass(frozen=True, eq=False)
class _Order:
    """Which scan the pair is solved on: decided by the content of the scans, not by who asks."""

    flipped: bool

    @staticmethod
    def of(source: LabelVolume, target: LabelVolume) -> _Order:
        return _Order(target.sha256 < source.sha256)

    def turned(self, volume_map: VolumeMap) -> VolumeMap:
        return volume_map.reversed() if self.flipped else volume_map


@dataclass(frozen=True, eq=False)
class _Solutions:
    """The pair solved on the first scan's mesh and, when asked for, on the second's.

    `alone` holds both maps before they were drawn together, and is None when they were not.
    """

    main: Solved
    other: Solved | None = None
    alone: tuple[VolumeMap, VolumeMap] | None = None
    notes: tuple[str, ...] = ()
    mirror: MirrorTrial | None = None


def map_pair(
    source: LabelVolume,
    target: LabelVolume,
    job: MapJob | None = None,
    *,
    pairs: LandmarkPairs | None = None,
    pairs_name: str = "landmarks",
    given: GivenBoundary | None = None,
    notes: tuple[str, ...] = (),
    progress: Progress = silent,
) -> MapFolder:
    """Screen, mesh, map, sample and certify a pair of label volumes.

    The pair is solved in an order decided by its content, so that asking for (A, B) or for (B, A) gives one
    map and its exact inverse.

    Parameters
    ----------
    source, target : LabelVolume
    job : MapJob, optional
    pairs : LandmarkPairs, optional
        Guides and checks, from SOURCE to TARGET.
    pairs_name : str
        What to call them in messages.
    given : GivenBoundary, optional
        A boundary correspondence to keep, from SOURCE to TARGET.
    notes : tuple of str
        Sentences to keep with the certificate.
    progress : Progress

    Returns
    -------
    MapFolder
        Not written yet.

    Raises
    ------
    InputError
        What the screen refuses, what cannot be meshed, a guide outside the body, a given boundary that lies
        elsewhere.
    """
    job = job or MapJob()
    compile_at_first_use(progress, "mesh", "map")
    watch = Stopwatch()
    table = certifying.read_gate_table(job.gates)
    with watch.measuring("screen"):
        progress("screen", 0, 0)
        screened = screening.screen_pair(
            source, target, edge_mm=job.mesh.edge_mm, allow_topology_change=job.allow_topology_change
        )
        screened.require_mappable()
        placed = _placed(pairs, source, target, pairs_name)
    with watch.measuring("mesh"):
        levels = on_both(
            lambda volume, told: meshing.mesh_levels(volume, job.mesh, progress=told),
            (source, target),
            progress,
            n_threads=use_threads(None),
        )
        meshes = [side.fine for side in levels]
    _require_every_label(meshes, (source, target))
    spoken = _screened_boundary(given, meshes, _voxel_mm(source, target))
    order = _Order.of(source, target)
    solutions = _solve(levels, source, target, job, order, pairs, given, watch, progress)
    folder = _sampled(solutions, meshes, source, target, order, pairs, watch, progress, energy=job.map.energy)
    folder = replace(folder, given=given, giving_way=solutions.main.outcome.giving_way)
    with watch.measuring("certify"):
        gates, measures = certifying.certify(evidence_of(folder), table, progress=progress)
    findings = [
        *mirror_findings(solutions.mirror, source, target),
        *screened.findings,
        *placed,
        *spoken,
        *meshes[0].findings,
        *meshes[1].findings,
    ]
    certificate = replace(
        folder.certificate,
        gates=gates,
        measures=measures,
        settings=_settings_document(job, solutions, order, given),
        mesh=_mesh_document(folder, meshes),
        seconds=watch.seconds,
        peak_mb=peak_mb(),
        notes=(*notes, *solutions.main.outcome.notes, *solutions.notes, *_sentences(findings)),
    )
    return replace(folder, certificate=certificate)


def _placed(
    pairs: LandmarkPairs | None, source: LabelVolume, target: LabelVolume, name: str
) -> tuple[Finding, ...]:
    """Where landmarks lie outside the bodies; refused when it is a guide."""
    if pairs is None:
        return ()
    findings = screening.screen_pairs_of_landmarks(pairs, source, target, name=name)
    screening.raise_refusal(findings)
    return findings


def _voxel_mm(source: LabelVolume, target: LabelVolume) -> float:
    """ "One voxel" of a pair for the solver: the mean of both scans."""
    return 0.5 * (source.grid.voxel_mm + target.grid.voxel_mm)


def _screened_boundary(
    given: GivenBoundary | None, meshes: list[MeshResult], voxel_mm: float
) -> tuple[Finding, ...]:
    """How a given boundary lies on the bodies; refused when it lies elsewhere."""
    if given is None:
        return ()
    findings = screening.screen_given_boundary(
        given, meshes[0].mesh.interfaces, meshes[1].mesh.interfaces, voxel_mm=voxel_mm
    )
    screening.raise_refusal(findings)
    return findings


def _require_every_label(meshes: list[MeshResult], volumes: tuple[LabelVolume, LabelVolume]) -> None:
    """Refuse edges so long that a label fell through the mesh.

    Raises
    ------
    InputError
    """
    for result, volume in zip(meshes, volumes, strict=True):
        lost = sorted(set(volume.present) - set(result.mesh.present))
        if lost:
            raise InputError(
                f"{volume.name_of(lost[0])} has no tets",
                where=volume.name,
                found=f"edges of {result.settings.edge_mm:.3g} mm",
                expected="edges shorter than the label is thick",
                remedy="ask for a shorter --edge, or drop the label from both scans",
                refused=True,
            )


def _prefixed(progress: Progress, name: str) -> Progress:
    def told(stage: str, step: int, total: int, note: str = "") -> None:
        progress(f"{stage} {name}", step, total, note)

    return told


def coarser_bodies(here: MeshLevels, there: MeshLevels) -> tuple[Bodies, ...]:
    """Coarse meshes of one scan, each with surfaces of the other whose edges are most alike."""
    surfaces = [there.fine, *there.coarser]
    return tuple(
        Bodies(
            coarse.mesh,
            min(surfaces, key=lambda s, c=coarse: abs(_log_edge(s) - _log_edge(c))).mesh.interfaces,  # type: ignore[misc]
        )
        for coarse in here.coarser
    )


def _log_edge(result: MeshResult) -> float:
    assert result.settings.edge_mm is not None
    return float(np.log(result.settings.edge_mm))


def _solve(
    levels: list[MeshLevels],
    source: LabelVolume,
    target: LabelVolume,
    job: MapJob,
    order: _Order,
    pairs: LandmarkPairs | None,
    given: GivenBoundary | None,
    watch: Stopwatch,
    progress: Progress,
) -> _Solutions:
    first, second = (levels[1], levels[0]) if order.flipped else (levels[0], levels[1])
    guides = pairs.of_role("guide") if pairs is not None else None
    forward = guides.reversed() if guides is not None and order.flipped else guides
    boundary = given.reversed() if given is not None and order.flipped else given
    voxel_mm = _voxel_mm(source, target)
    with watch.measuring("map"):
        main = map_mesh(
            first.fine.mesh,
            second.fine.mesh.interfaces,
            job.map,
            voxel_mm=voxel_mm,
            guides=forward,
            given=boundary,
            coarser=coarser_bodies(first, second),
            progress=progress,
        )
        mirror = mirror_compared(first.fine.mesh, second.fine.mesh.interfaces, main, job.map)
    if not job.both_orders:
        return _Solutions(main, mirror=mirror)
    with watch.measuring("map the other way"):
        other = map_mesh(
            second.fine.mesh,
            first.fine.mesh.interfaces,
            job.map,
            voxel_mm=voxel_mm,
            guides=forward.reversed() if forward is not None else None,
            given=boundary.reversed() if boundary is not None else None,
            other_tolerances=False,
            coarser=coarser_bodies(second, first),
            progress=_prefixed(progress, "the other way"),
        )
    with watch.measuring("couple"):
        coupled = couple(main, other, voxel_mm=voxel_mm, progress=progress)
    if coupled.how is not Coupling.DRAWN:
        return _Solutions(main, other, notes=(coupled.how.value,), mirror=mirror)
    return _Solutions(coupled.main, coupled.other, (main.outcome.map, other.outcome.map), mirror=mirror)


def _sampled(
    solutions: _Solutions,
    meshes: list[MeshResult],
    source: LabelVolume,
    target: LabelVolume,
    order: _Order,
    pairs: LandmarkPairs | None,
    watch: Stopwatch,
    progress: Progress,
    *,
    energy: str,
) -> MapFolder:
    named = replace(order.turned(solutions.main.outcome.map), source=source.name, target=target.name)
    with watch.measuring("fields"):
        progress("fields", 0, 3)
        forward = carrying.forward_field(named, source.grid)
        backward = carrying.backward_field(named, target.grid)
        progress("fields", 1, 3)
        sidecars = sidecars_of(named, source, target, forward, backward)
        progress("fields", 2, 3)
        carried = carrying.carried_solid(named, target.grid, names=source.names, codes=source.codes)
        ratio = carrying.volume_ratio_image(named, source.grid)
    other = alone = None
    if solutions.other is not None:
        other = replace(order.turned(solutions.other.outcome.map), source=target.name, target=source.name)
    if solutions.alone is not None:
        alone = (order.turned(solutions.alone[0]), order.turned(solutions.alone[1]))
    outcome = solutions.main.outcome
    return MapFolder(
        map=named,
        solved_on="target" if order.flipped else "source",
        source=source,
        target=target,
        source_surface=meshes[0].mesh.interfaces,
        target_surface=meshes[1].mesh.interfaces,
        forward=forward,
        backward=backward,
        carried=carried,
        volume_ratio=ratio,
        sidecars=sidecars,
        certificate=Certificate(
            scan_document(source),
            scan_document(target),
            (),
            versions=versions(),
            status=outcome.status.value,
        ),
        other=other,
        alone=alone,
        pairs=pairs,
        status=outcome.status,
        history=outcome.history,
        distortion=distortion_of(named, energy),
    )


def _settings_document(
    job: MapJob, solutions: _Solutions, order: _Order, given: GivenBoundary | None
) -> dict[str, Any]:
    alignment = solutions.main.alignment
    matrix = np.linalg.inv(alignment.matrix) if order.flipped else alignment.matrix
    told = (
        {}
        if given is None
        else {
            "given_boundary": {
                "file": given.name,
                "tolerance_mm": given.tolerance_mm,
                "reach_mm": given.reach_mm,
            }
        }
    )
    return told | {
        "mesh": asdict(job.mesh),
        "map": asdict(job.map),
        "both_orders": job.both_orders,
        "allow_topology_change": job.allow_topology_change,
        "gates": job.gates.name if job.gates else "built in",
        "threads": use_threads(None),
        "solved_on": "target" if order.flipped else "source",
        "alignment": {
            "start": solutions.main.outcome.start,
            "affine": matrix.tolist(),
            "residual_mm": alignment.residual_mm,
            **mirror_document(solutions.mirror),
        },
    }


def _mesh_document(folder: MapFolder, meshes: list[MeshResult]) -> dict[str, Any]:
    own = {side: result.quality.as_dict() for side, result in zip(("source", "target"), meshes, strict=True)}
    side = folder.solved_on
    told = mesh_document(folder.own_meshes[side], getattr(folder.certificate, side), side=side)
    return told | {"edge_mm": meshes[0].settings.edge_mm, "own": own}


def _sentences(findings: list[Finding]) -> tuple[str, ...]:
    return tuple(f"{f.where}: {f.sentence}" for f in findings if f.level is not Level.NOTE)
