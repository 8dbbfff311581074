"""The verbs on files: paths in, paths out."""

from __future__ import annotations

from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import numpy as np

from volmap import carry as carrying
from volmap import mesh as meshing
from volmap import screen as screening
from volmap.io.atomic import whole_file
from volmap.io.landmarks import read_landmarks, read_pairs, write_landmarks
from volmap.io.nifti import (
    read_image,
    read_image_with_findings,
    read_labels_with_findings,
    write_image,
    write_labels,
)
from volmap.io.surfaces import FORMATS, read_closed_surface
from volmap.io.vtk_xml import read_mesh, write_mesh
from volmap.mapfolder import REPORT, MapFolder, read_map_folder
from volmap.mesh import MeshResult, MeshSettings
from volmap.pipeline.machine import announce_compiling
from volmap.pipeline.pair import MapJob, map_pair
from volmap.pipeline.reporting import report_of, write_map
from volmap.screen import Mended, PairResult, ScreenResult
from volmap.types import (
    Finding,
    ImageVolume,
    InputError,
    LabelVolume,
    Landmarks,
    Level,
    Progress,
    TetMesh,
    silent,
)


@dataclass(frozen=True)
class Screened:
    """What `screen_files` found.

    Parameters
    ----------
    results : tuple of ScreenResult
        One a file; what reading it found is among its findings.
    pair : PairResult, optional
        When there were two files.
    """

    results: tuple[ScreenResult, ...]
    pair: PairResult | None

    @property
    def refused(self) -> bool:
        """True when a volume, or the pair, cannot be mapped."""
        return any(r.refused for r in self.results) or (self.pair is not None and self.pair.refused)


def screen_files(paths: list[Path], *, edge_mm: float | None = None, progress: Progress = silent) -> Screened:
    """Look at label volumes; two are compared as a pair as well.

    Raises
    ------
    InputError
        A file that cannot be read.
    """
    results = []
    for step, path in enumerate(paths):
        progress("screen", step, len(paths), path.name)
        labels, findings = read_labels_with_findings(path)
        result = screening.screen(labels, edge_mm=edge_mm)
        results.append(replace(result, findings=(*result.findings, *findings)))
    pair = screening.compare(results[0], results[1]) if len(results) == 2 else None
    return Screened(tuple(results), pair)


def mend_file(path: Path, out: Path) -> Mended:
    """Fill cavities, drop specks, pad; write a new file beside the old one and list every change.

    Raises
    ------
    InputError
        A file that cannot be read, or a place that is taken.
    """
    labels, _ = read_labels_with_findings(path)
    mended = screening.mend(labels)
    write_labels(out, mended.labels)
    return mended


def mesh_file(
    path: Path, out: Path, settings: MeshSettings, *, overwrite: bool = False, progress: Progress = silent
) -> MeshResult:
    """Mesh a label volume, or a closed surface (STL, PLY and the like).

    Raises
    ------
    InputError
        A file that cannot be read, a volume the screen refuses, a surface that is not closed.
    """
    announce_compiling(progress)
    if path.suffix.lower() in FORMATS:
        points, triangles = read_closed_surface(path)
        result = meshing.mesh_surface(points, triangles, settings, name=path.name)
    else:
        labels, _ = read_labels_with_findings(path)
        screening.screen(labels, edge_mm=settings.edge_mm).require_mappable()
        result = meshing.mesh(labels, settings, progress=progress)
    write_mesh(out, result.mesh, field_data={"source": path.name}, overwrite=overwrite)
    return result


def map_files(
    source: Path,
    target: Path,
    out: Path,
    job: MapJob,
    *,
    guides: Path | None = None,
    source_image: Path | None = None,
    target_image: Path | None = None,
    overwrite: bool = False,
    progress: Progress = silent,
) -> MapFolder:
    """Map one label file onto another and write the map folder.

    Raises
    ------
    InputError
        Whatever is wrong with an input; nothing is written then.
    """
    _require_free(out, overwrite)
    a, findings_a = read_labels_with_findings(source)
    b, findings_b = read_labels_with_findings(target)
    a, b = _told_apart(a, b)
    pairs = read_pairs(guides) if guides is not None else None
    images = [read_image(p) if p is not None else None for p in (source_image, target_image)]
    notes = tuple(f"{f.where}: {f.sentence}" for f in (*findings_a, *findings_b))
    folder = map_pair(
        a, b, job, pairs=pairs, pairs_name=guides.name if guides else "", notes=notes, progress=progress
    )
    write_map(
        out, folder, source_image=images[0], target_image=images[1], overwrite=overwrite, progress=progress
    )
    return folder


def _require_free(out: Path, overwrite: bool) -> None:
    """Refuse a taken place before the work, not after it."""
    if not out.absolute().parent.is_dir():
        raise InputError(
            "the folder to write in does not exist", where=str(out), remedy="make the folder first"
        )
    if out.exists() and not overwrite:
        raise InputError(
            "stands already", where=out.name, remedy="choose another --out, or --overwrite to replace it"
        )


def _told_apart(source: LabelVolume, target: LabelVolume) -> tuple[LabelVolume, LabelVolume]:
    """Two files of one name in different folders get different names."""
    if source.name != target.name:
        return source, target
    return (
        LabelVolume(source.grid, source.labels, source.names, f"{source.name} (source)"),
        LabelVolume(target.grid, target.labels, target.names, f"{target.name} (target)"),
    )


def report_folder(
    path: Path,
    *,
    source_image: Path | None = None,
    target_image: Path | None = None,
    progress: Progress = silent,
) -> Path:
    """Write the report of a map folder again, in the folder.

    Raises
    ------
    InputError
        No map folder, or an image that cannot be read.
    """
    folder = read_map_folder(path)
    images = [read_image(p) if p is not None else None for p in (source_image, target_image)]
    html = report_of(folder, source_image=images[0], target_image=images[1], progress=progress)
    with whole_file(path / REPORT, overwrite=True) as place:
        place.write_text(html, encoding="utf-8")
    return path / REPORT


def carry_file(
    thing: Path, through: Path, out: Path, *, reverse: bool = False, overwrite: bool = False
) -> tuple[Finding, ...]:
    """Carry landmarks (csv), a label volume, an image (nii) or a mesh (vtu) through a map folder.

    Raises
    ------
    InputError
        A file that cannot be read or does not lie on the body, or a place that is taken.
    """
    _require_free(out, overwrite)
    _require_kind(thing, out)
    folder = read_map_folder(through)
    start, end = (folder.target, folder.source) if reverse else (folder.source, folder.target)
    loaded, findings = _loaded(thing)
    carried = carrying.carry(loaded, folder.map, reverse=reverse, onto=end.grid, reach_mm=start.grid.voxel_mm)
    _write_thing(out, carried.thing, overwrite)
    return (*findings, *carried.findings)


_KINDS = {".csv": "csv", ".vtu": "vtu", ".nii": "nii", ".gz": "nii"}


def _require_kind(thing: Path, out: Path) -> None:
    kind = _KINDS.get(thing.suffix.lower())
    if kind is None:
        raise InputError(
            "this kind of file cannot be carried", where=thing.name, expected=".csv, .nii, .nii.gz or .vtu"
        )
    if _KINDS.get(out.suffix.lower()) != kind:
        raise InputError(
            "is no name for what comes out", where=out.name, expected=f"the same kind as {thing.name}"
        )


def _loaded(path: Path) -> tuple[Any, tuple[Finding, ...]]:
    kind = _KINDS[path.suffix.lower()]
    if kind == "csv":
        return read_landmarks(path), ()
    if kind == "vtu":
        return read_mesh(path)[0], ()
    image, findings = read_image_with_findings(path)
    if _is_labels(image):
        return read_labels_with_findings(path)
    note = Finding(
        Level.NOTE,
        "carried_as_image",
        path.name,
        "its values are not whole numbers from 0 to 65535, so it was carried as an image (trilinear)",
    )
    return image, (*findings, note)


def _is_labels(image: ImageVolume) -> bool:
    values = image.values
    return bool(
        np.isfinite(values).all()
        and values.min() >= 0
        and values.max() <= 65535
        and (values == np.rint(values)).all()
        and len(np.unique(values)) <= 256
    )


def _write_thing(out: Path, thing: Any, overwrite: bool) -> None:
    match thing:
        case Landmarks():
            write_landmarks(out, thing, overwrite=overwrite)
        case LabelVolume():
            write_labels(out, thing, overwrite=overwrite)
        case ImageVolume():
            write_image(out, thing, overwrite=overwrite)
        case TetMesh():
            write_mesh(out, thing, overwrite=overwrite)
