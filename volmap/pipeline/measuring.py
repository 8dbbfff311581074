"""Tables of measures from a map folder."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any, Literal

from volmap import measure as measuring
from volmap.io.atomic import require_place
from volmap.io.nifti import write_labels
from volmap.io.reading import AS_IT_IS, Reading
from volmap.io.tables import require_table_name, sidecar_place, write_table
from volmap.io.volumes import read_labels_with_findings
from volmap.mapfolder import MapFolder, read_map_folder
from volmap.measure import ChangeUncertainty, Region, Reliability, Residual
from volmap.pipeline.belonging import Side, digests_of
from volmap.types import (
    Finding,
    InputError,
    LabelVolume,
    Level,
    Progress,
    Table,
    Verdict,
    VolumeMap,
    silent,
)

Each = Literal["region", "tet", "point"]
SCHEMA = "volmap-measures/1"


@dataclass(frozen=True)
class Measured:
    """What `measure_folder` found.

    Parameters
    ----------
    table : Table
    reliable : LabelVolume
        1 where the map can be trusted, on SOURCE's grid.
    verdict : Verdict
        Of the stored certificate.
    findings : tuple of Finding
    """

    table: Table
    reliable: LabelVolume
    verdict: Verdict
    findings: tuple[Finding, ...]


def measure_folder(
    path: Path,
    *,
    regions: Path | None = None,
    belongs_to: Side | None = None,
    reading: Reading = AS_IT_IS,
    each: Each = "region",
    long: bool = False,
    progress: Progress = silent,
) -> Measured:
    """Measure the labels of a map, or regions drawn in one of its scans.

    Parameters
    ----------
    path : Path
        Map folder.
    regions : Path, optional
        Label volume; the labels of the map when None.
    belongs_to : str, optional
        The scan it was drawn in; None where its grid tells.
    reading : Reading
        What the file of regions leaves open.
    each : str
        A row a region, a tet or a mesh point.
    long : bool
        A row a region and measure.

    Raises
    ------
    InputError
        No map folder, regions that cannot be read, that lie on neither scan's grid, or on both, or that are
        the labels of the scan they were not said to belong to.
    """
    progress("read", 0, 0, path.absolute().name)
    folder = read_map_folder(path)
    drawn, side, findings = _drawn(folder, regions, belongs_to, reading)
    measured = measure_map(folder, drawn=drawn, side=side, each=each, long=long, progress=progress)
    return replace(measured, findings=(*findings, *measured.findings))


def measure_map(
    folder: MapFolder,
    *,
    drawn: LabelVolume | None = None,
    side: Side = "source",
    each: Each = "region",
    long: bool = False,
    progress: Progress = silent,
) -> Measured:
    """As `measure_folder`, of a map folder in memory, just made or read back.

    Parameters
    ----------
    folder : MapFolder
    drawn : LabelVolume, optional
        Regions, on any grid in the world of `side`; the labels of the map when None.
    side : 'source' or 'target'
    each, long, progress
        As in `measure_folder`.

    Raises
    ------
    InputError
        No region in `drawn`.
    """
    progress("measure", 0, 3, "reliability")
    residuals = _residuals(folder)
    reliable = _reliability(folder, residuals)
    about = _about(folder, reliable, drawn, side) | {"each": each}
    progress("measure", 1, 3, each)
    names = dict(folder.target.names) | dict(folder.source.names)
    verdict = folder.certificate.verdict
    told: dict[str, Any] = {"verdict": verdict.value, "about": about}
    if each == "tet":
        table = measuring.tet_table(folder.map, reliable, names=names, **told)
    elif each == "point":
        table = measuring.point_table(folder.map, reliable, names=names, **told)
    else:
        table = _regions(folder, drawn, side, reliable=reliable, residuals=residuals, told=told)
        table = measuring.long_form(table) if long else table
    progress("measure", 2, 3, "mask")
    mask = reliable.on_grid(folder.map.mesh, folder.source.grid)
    return Measured(table, mask, verdict, tuple(_warnings(reliable, verdict)))


def measure_files(
    path: Path,
    out: Path,
    *,
    regions: Path | None = None,
    belongs_to: Side | None = None,
    reading: Reading = AS_IT_IS,
    each: Each = "region",
    long: bool = False,
    mask: Path | None = None,
    overwrite: bool = False,
    progress: Progress = silent,
) -> Measured:
    """As `measure_folder`, written to a table with its JSON, and the mask when it is asked for.

    Raises
    ------
    InputError
        As `measure_folder`, or a place that is taken.
    """
    require_table_name(out)
    for place in (out, sidecar_place(out), *(() if mask is None else (mask,))):
        require_place(place, overwrite=overwrite, folder=False)
    measured = measure_folder(
        path, regions=regions, belongs_to=belongs_to, reading=reading, each=each, long=long, progress=progress
    )
    write_table(out, measured.table, overwrite=overwrite)
    if mask is not None:
        write_labels(mask, measured.reliable, overwrite=overwrite)
    return measured


def _drawn(
    folder: MapFolder, path: Path | None, belongs_to: Side | None, reading: Reading
) -> tuple[LabelVolume | None, Side, tuple[Finding, ...]]:
    if path is None:
        return None, "source", ()
    volume, findings = read_labels_with_findings(path, reading)
    if belongs_to is None:
        return volume, _side_of(folder, volume), findings
    return volume, belongs_to, (*findings, *_against(folder, volume, belongs_to))


def _against(folder: MapFolder, volume: LabelVolume, said: Side) -> tuple[Finding, ...]:
    """What speaks against the word of the user: voxels of the other scan; its digest is refused.

    Raises
    ------
    InputError
    """
    own, other = (folder.source, folder.target) if said == "source" else (folder.target, folder.source)
    found = set(digests_of(volume))
    if other.sha256 in found and own.sha256 not in found:
        raise InputError(
            f"is the volume of {other.name} (its digest says so), and was said to belong to {own.name}",
            where=volume.name,
            remedy="leave out --belongs-to",
            refused=True,
        )
    if own.sha256 in found or own.grid.same_place(volume.grid) or not other.grid.same_place(volume.grid):
        return ()
    sentence = (
        f"has the voxel grid of {other.name}, and was measured in {own.name} because --belongs-to says so"
    )
    return (Finding(Level.WARN, "vouched-for", volume.name, sentence),)


def _side_of(folder: MapFolder, volume: LabelVolume) -> Side:
    """The scan a volume was drawn in, by its digest or else its grid.

    Raises
    ------
    InputError
        On neither's, or on both: then only the user knows.
    """
    sides: tuple[Side, Side] = ("source", "target")
    scans = {side: getattr(folder, side) for side in sides}
    found = [side for side in sides if scans[side].sha256 in digests_of(volume)]
    if not found:
        found = [side for side in sides if volume.grid.same_place(scans[side].grid)]
    if len(found) == 1:
        return found[0]
    lies = "both scans have its grid" if found else "it lies on neither scan's grid"
    raise InputError(
        f"it is not clear in which scan these regions were drawn: {lies}",
        where=volume.name,
        remedy=f"say --belongs-to source or target (source is {folder.source.name})",
        refused=True,
    )


def _residuals(folder: MapFolder) -> dict[str, dict[int, Residual]]:
    """Of each label, in both worlds."""
    worlds = {
        "source": (folder.map.mesh.interfaces, folder.source_surface),
        "target": (folder.map.image_mesh.interfaces, folder.target_surface),
    }
    found: dict[str, dict[int, Residual]] = {}
    for side, (own, scan) in worlds.items():
        rows = {
            label: measuring.boundary_residual(own.of_label(label), scan.of_label(label))
            for label in folder.map.mesh.present
        }
        found[side] = {label: row for label, row in rows.items() if row is not None}
    return found


def _reliability(folder: MapFolder, residuals: dict[str, dict[int, Residual]]) -> Reliability:
    return measuring.reliability(
        folder.map,
        folder.certificate.gates,
        residuals={side: tuple(rows.values()) for side, rows in residuals.items()},
        fields={"source": folder.forward, "target": folder.backward},
        alone=_on_their_own(folder),
        voxel_mm=_voxel_mm(folder),
    )


def _on_their_own(folder: MapFolder) -> tuple[VolumeMap, VolumeMap] | None:
    """The two solves before they were drawn together; as they are when they never were."""
    if folder.alone is not None:
        return folder.alone
    return None if folder.other is None else (folder.map, folder.other)


def _voxel_mm(folder: MapFolder) -> float:
    return max(folder.source.grid.voxel_mm, folder.target.grid.voxel_mm)


def _regions(
    folder: MapFolder,
    drawn: LabelVolume | None,
    side: Side,
    *,
    reliable: Reliability,
    residuals: dict[str, dict[int, Residual]],
    told: dict[str, Any],
) -> Table:
    if drawn is None:
        regions = measuring.label_regions(folder.map, folder.source, folder.target)
        uncertainties = [_of_label(region, residuals, _voxel_mm(folder)) for region in regions]
    else:
        regions = measuring.drawn_regions(folder.map, drawn, side=side)
        uncertainties = _of_drawn(folder, drawn, side, regions=regions, residuals=residuals)
    if not regions:
        raise InputError(
            "holds no region",
            where=drawn.name if drawn is not None else "",
            expected="voxels above 0",
            remedy="draw one, or leave out --regions to measure the labels",
            refused=True,
        )
    return measuring.region_table(folder.map, regions, reliable=reliable, uncertainties=uncertainties, **told)


def _of_label(
    region: Region, residuals: dict[str, dict[int, Residual]], voxel_mm: float
) -> ChangeUncertainty:
    known = [residuals[side].get(region.number) for side in ("source", "target")]
    found = [
        None if residual is None else measuring.volume_uncertainty(residual, voxel_mm=voxel_mm)
        for residual in known
    ]
    return ChangeUncertainty(source=found[0], target=found[1])


def _of_drawn(
    folder: MapFolder,
    drawn: LabelVolume,
    side: Side,
    *,
    regions: Sequence[Region],
    residuals: dict[str, dict[int, Residual]],
) -> list[ChangeUncertainty]:
    """What mended boundaries would do to each region's change, and how far the two solves differ in it."""
    nothing = [float("nan")] * len(regions)
    orders, boundary = nothing, nothing
    both = _on_their_own(folder)
    if both is not None:
        first, second = (
            [measuring.change_mm3(m, region) for region in measuring.drawn_regions(m, drawn, side=side)]
            for m in (both[0], both[1].reversed())
        )
        orders = [a - b for a, b in zip(first, second, strict=True)]
    bodies = {"source": folder.map.mesh, "target": folder.map.image_mesh}
    here, there = (measuring.mending_divergence(bodies[s], residuals[s]) for s in ("source", "target"))
    if here is not None and there is not None:
        boundary = [measuring.mended_mm3(folder.map, region, here, there) for region in regions]
    return [ChangeUncertainty(boundary_mm3=a, orders_mm3=b) for a, b in zip(boundary, orders, strict=True)]


def _about(folder: MapFolder, reliable: Reliability, drawn: LabelVolume | None, side: Side) -> dict[str, Any]:
    certificate = folder.certificate
    scans = {
        name: {"name": scan.name, "sha256": scan.sha256}
        for name, scan in (("source", folder.source), ("target", folder.target))
    }
    regions: dict[str, Any] = {"of": "labels of the map"}
    if drawn is not None:
        regions = {"of": drawn.name, "sha256": drawn.sha256, "drawn_in": side}
    return {
        "schema": SCHEMA,
        **scans,
        "direction": "changes are from SOURCE to TARGET: above 0, or a ratio above 1, is growth",
        "verdict": certificate.verdict.value,
        "failed_gates": list(reliable.failed_gates),
        "regions": regions,
        "frame": "NIfTI world, RAS+, mm",
        "weights": "volume in SOURCE",
        "reliable": {
            "means": "none of these speaks against the map",
            "reasons": dict(measuring.REASONS),
            "not_assessed": list(reliable.not_assessed),
        },
    }


def _warnings(reliable: Reliability, verdict: Verdict) -> Sequence[Finding]:
    found = []
    if verdict is Verdict.FAIL:
        sentence = f"the map's certificate says fail ({', '.join(reliable.failed_gates)}); each row says so"
        remedy = "leave it out of statistics, or use the columns of reliable parts only"
        found.append(Finding(Level.WARN, "failed-map", "the map", sentence, remedy))
    if not reliable.tets.all():
        sentence = f"{int((~reliable.tets).sum())} of {len(reliable.tets)} tets are not reliable"
        found.append(Finding(Level.NOTE, "not-reliable", "the map", sentence, "see volmap guide measures"))
    return found
