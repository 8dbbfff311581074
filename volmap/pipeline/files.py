"""The verbs on files: paths in, paths out."""

from __future__ import annotations

from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import numpy as np

from volmap import mesh as meshing
from volmap import screen as screening
from volmap.io.atomic import require_place, whole_file
from volmap.io.given_boundary import read_given_boundary
from volmap.io.identity import Identifying, days_apart, identifying_fields
from volmap.io.landmarks import read_pairs
from volmap.io.mesh_parts import MESH_ENDINGS
from volmap.io.nifti import write_labels
from volmap.io.reading import AS_IT_IS, Reading
from volmap.io.surfaces import read_closed_surface
from volmap.io.volumes import read_image, read_labels_with_findings
from volmap.io.vtk_xml import write_mesh
from volmap.mapfolder import CERTIFICATE, REPORT, MapFolder, read_certificate, read_map_folder
from volmap.mesh import MeshResult, MeshSettings
from volmap.pipeline.machine import compile_at_first_use
from volmap.pipeline.pair import MapJob, map_pair
from volmap.pipeline.places import NIFTI, require_name
from volmap.pipeline.reporting import report_of, write_map
from volmap.screen import Mended, PairResult, ScreenResult
from volmap.types import (
    Finding,
    GivenBoundary,
    ImageVolume,
    InputError,
    LabelVolume,
    LandmarkPairs,
    Level,
    Progress,
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
    identifying : tuple of Identifying
        One a file: names of the fields that could tell who it is of, which are among its findings too.
    days_apart : int, optional
        Whole days from the first scan to the second, when there are two that tell (DICOM).
    """

    results: tuple[ScreenResult, ...]
    pair: PairResult | None
    identifying: tuple[Identifying, ...]
    days_apart: int | None = None

    @property
    def refused(self) -> bool:
        """True when a volume, or the pair, cannot be mapped."""
        return bool(self.refusals)

    @property
    def refusals(self) -> tuple[str, ...]:
        """What cannot be mapped and the remedy, a sentence each; the pair's differences come last."""
        found = [finding for result in self.results for finding in result.findings]
        found += self.pair.comparison if self.pair is not None else ()
        return tuple(f.line.removeprefix("refuse: ") for f in found if f.level is Level.REFUSE)


def screen_files(
    paths: list[Path],
    reading: Reading = AS_IT_IS,
    *,
    edge_mm: float | None = None,
    progress: Progress = silent,
) -> Screened:
    """Look at label volumes; two are compared as a pair as well.

    Raises
    ------
    InputError
        A file that cannot be read.
    """
    loaded = []
    for step, path in enumerate(paths):
        progress("read", step, len(paths), path.name)
        loaded.append(read_labels_with_findings(path, reading))
    volumes = [labels for labels, _ in loaded]
    if len(volumes) == 2:
        volumes = list(_told_apart(*volumes))
    results, identifying = [], tuple(identifying_fields(path) for path in paths)
    for step, (labels, (_, findings)) in enumerate(zip(volumes, loaded, strict=True)):
        progress("screen", step, len(paths), labels.name)
        result = screening.screen(labels, edge_mm=edge_mm)
        told = (*result.findings, *findings, *identifying[step].findings)
        results.append(replace(result, findings=told))
    if len(results) != 2:
        return Screened(tuple(results), None, identifying)
    pair = screening.compare(results[0], results[1])
    days = days_apart(*paths)
    if days is not None:
        pair = replace(pair, comparison=(*pair.comparison, _days_told(days, volumes[1].name)))
    return Screened(tuple(results), pair, identifying, days)


def _days_told(days: int, where: str) -> Finding:
    many = "a day" if abs(days) == 1 else f"{abs(days)} days"
    when = "on the same day as" if days == 0 else f"{many} {'after' if days > 0 else 'before'}"
    return Finding(Level.NOTE, "days_apart", where, f"was made {when} the other scan, by their dates")


def mend_file(path: Path, out: Path, reading: Reading = AS_IT_IS, *, overwrite: bool = False) -> Mended:
    """Fill cavities, drop specks, pad; write a new file beside the old one and list every change.

    Raises
    ------
    InputError
        A file that cannot be read, or a place that is taken.
    """
    require_name(out, NIFTI)
    require_place(out, overwrite=overwrite, folder=False)
    labels, _ = read_labels_with_findings(path, reading)
    mended = screening.mend(labels)
    write_labels(out, mended.labels, overwrite=overwrite)
    return mended


def mesh_file(
    path: Path,
    out: Path,
    settings: MeshSettings,
    *,
    reading: Reading = AS_IT_IS,
    overwrite: bool = False,
    progress: Progress = silent,
) -> MeshResult:
    """Mesh a label volume, a closed surface (STL, PLY, VTK and the like), or a solid of tets anew.

    Raises
    ------
    InputError
        A file that cannot be read, a volume the screen refuses, a surface that is not closed.
    """
    require_name(out, (".vtu",))
    require_place(out, overwrite=overwrite, folder=False)
    compile_at_first_use(progress, "mesh")
    if path.suffix.lower() in MESH_ENDINGS:
        points, triangles = read_closed_surface(path)
        result = meshing.mesh_surface(points, triangles, settings, name=path.name)
    else:
        labels, _ = read_labels_with_findings(path, reading)
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
    source_reading: Reading = AS_IT_IS,
    target_reading: Reading = AS_IT_IS,
    guides: Path | None = None,
    pairs: LandmarkPairs | None = None,
    boundary: Path | None = None,
    boundary_tolerance_mm: float | None = None,
    source_image: Path | None = None,
    target_image: Path | None = None,
    overwrite: bool = False,
    progress: Progress = silent,
) -> MapFolder:
    """Map one label file onto another and write the map folder.

    Guides and checks come as a file or as `pairs`.  A boundary is kept within `boundary_tolerance_mm` of
    where its `image_mm` sends it (default: a quarter of a voxel, the mean of both scans).

    Raises
    ------
    InputError
        Whatever is wrong with an input; nothing is written then.
    """
    require_place(out, overwrite=overwrite, folder=True, holding=CERTIFICATE)
    progress("read", 0, 0, f"{source.name} and {target.name}")
    a, findings_a = read_labels_with_findings(source, source_reading)
    b, findings_b = read_labels_with_findings(target, target_reading)
    a, b = _told_apart(a, b)
    pairs = read_pairs(guides) if guides is not None else pairs
    given = _given_boundary(boundary, boundary_tolerance_mm, a, b)
    images = [_picture(source_image, a), _picture(target_image, b)]
    days = days_apart(source, target)
    if days is None and source_image is not None and target_image is not None:
        days = days_apart(source_image, target_image)
    notes = tuple(f"{f.where}: {f.sentence}" for f in (*findings_a, *findings_b))
    folder = map_pair(
        a,
        b,
        job,
        pairs=pairs,
        pairs_name=guides.name if guides else "landmarks",
        given=given,
        notes=notes,
        progress=progress,
    )
    folder = _with_images(folder, *images)
    if days is not None:
        folder = _with_settings(folder, {"days_apart": days})
    write_map(
        out, folder, source_image=images[0], target_image=images[1], overwrite=overwrite, progress=progress
    )
    return folder


def _with_images(folder: MapFolder, source: ImageVolume | None, target: ImageVolume | None) -> MapFolder:
    """The same folder, its certificate with the digests of the scans' images: so they are known later."""
    told = {
        side: {"name": image.name, "sha256": image.sha256}
        for side, image in (("source", source), ("target", target))
        if image is not None
    }
    return _with_settings(folder, {"images": told}) if told else folder


def _with_settings(folder: MapFolder, more: dict[str, Any]) -> MapFolder:
    settings = dict(folder.certificate.settings) | more
    return replace(folder, certificate=replace(folder.certificate, settings=settings))


TOLERANCE_VOXELS = 0.25  # a staircase of voxels lies that far from any smooth surface through it
REACH_VOXELS = 1.5  # two surfaces of one segmentation lie nearer to each other than this


def _given_boundary(
    path: Path | None, tolerance_mm: float | None, source: LabelVolume, target: LabelVolume
) -> GivenBoundary | None:
    if path is None:
        return None
    voxel_mm = 0.5 * (source.grid.voxel_mm + target.grid.voxel_mm)
    return read_given_boundary(
        path, tolerance_mm=tolerance_mm or TOLERANCE_VOXELS * voxel_mm, reach_mm=REACH_VOXELS * voxel_mm
    )


def _picture(path: Path | None, labels: LabelVolume) -> ImageVolume | None:
    """Intensities to show behind a scan's labels.

    Raises
    ------
    InputError
        Not readable, or none of the labelled voxels lies in it.
    """
    if path is None:
        return None
    image = read_image(path)
    centres = labels.grid.to_world(np.argwhere(labels.labels > 0).astype(np.float64))
    index = image.grid.to_index(centres)
    inside = ((index >= -0.5) & (index <= np.array(image.grid.shape) - 0.5)).all(axis=1)
    if not inside.any():
        raise InputError(
            f"shows no part of the body of {labels.name}",
            where=path.name,
            remedy="give the image the labels were drawn on",
            refused=True,
        )
    return image


def _told_apart(source: LabelVolume, target: LabelVolume) -> tuple[LabelVolume, LabelVolume]:
    """Two files of one name in different folders get different names."""
    if source.name != target.name:
        return source, target
    return (
        replace(source, name=f"{source.name} (source)"),
        replace(target, name=f"{target.name} (target)"),
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
    read_certificate(path)
    require_place(path / REPORT, overwrite=True, folder=False)
    progress("read", 0, 0, path.absolute().name)
    folder = read_map_folder(path)
    images = [_picture(source_image, folder.source), _picture(target_image, folder.target)]
    html = report_of(folder, source_image=images[0], target_image=images[1], progress=progress)
    with whole_file(path / REPORT, overwrite=True) as place:
        place.write_text(html, encoding="utf-8")
    return path / REPORT
