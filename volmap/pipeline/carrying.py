"""Carrying on files: a thing and a map folder in, the thing in its new place out."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path
from typing import Any

from volmap import carry as carrying
from volmap.io.atomic import require_place, whole_file
from volmap.io.json_documents import json_text
from volmap.io.reading import AS_IT_IS, Reading, VolumeKind
from volmap.io.tables import sidecar_place
from volmap.io.volumes import read_grid, read_volume_with_findings
from volmap.pipeline.belonging import Side, grid_of_the_start, require_belonging
from volmap.pipeline.carried_sidecar import carried_sidecar
from volmap.pipeline.field_ways import FieldWay, is_field_file, read_field_way
from volmap.pipeline.personal_columns import without_personal
from volmap.pipeline.places import NIFTI, require_name, told_name
from volmap.pipeline.pointwise_files import (
    ENDINGS,
    endings_out,
    read_pointwise,
    require_holding,
    write_pointwise,
)
from volmap.pipeline.volume_files import (
    DICOM,
    facts_beside,
    holds_volume,
    how_taken,
    require_out,
    write_volume,
)
from volmap.pipeline.ways import Way, read_way
from volmap.pipeline.without_effect import require_effect
from volmap.types import (
    Finding,
    Grid,
    InputError,
    Progress,
    Rules,
    UnsaidError,
    silent,
)


def carry_file(
    thing: Path,
    through: Path | Sequence[Path],
    out: Path,
    settings: carrying.CarrySettings = carrying.AS_USUAL,
    *,
    reverse: bool = False,
    kind: VolumeKind = "either",
    belongs_to: Side | None = None,
    frame_uid: str | None = None,
    onto: Path | None = None,
    reading: Reading = AS_IT_IS,
    overwrite: bool = False,
    progress: Progress = silent,
) -> tuple[Finding, ...]:
    """Carry points, measurements, a label volume, an image or a mesh through one map or several.

    Parameters
    ----------
    thing : Path
    through : Path or sequence of Path
        A map folder, or several in the order in which the thing goes through them (see `ways.read_way`); or
        the file of one field, with its .json beside it.
    out : Path
    settings : CarrySettings
        By default with a reach of one voxel.
    reverse : bool
        From TARGET to SOURCE; through several maps, from the end of the last to the start of the first.
    kind : 'labels', 'image', 'vectors', 'tensors' or 'either'
        What a volume holds; 'either' decides by its header, or by its values.
    belongs_to : 'source' or 'target', optional
        Whose world the user says the thing lies in, where neither its digest nor its voxel grid tells.
    frame_uid : str, optional
        Frame of Reference UID of the user's images of the scan the thing arrives in, for labels that are
        written as DICOM (.dcm); a new one otherwise.
    onto : Path, optional
        A volume whose voxels a carried volume shall have, in the world of the scan it arrives in; by default
        that scan's.
    reading : Reading
        What the thing's file leaves open.
    overwrite : bool
    progress : Progress

    Raises
    ------
    InputError
        A file that cannot be read, belongs to another scan or does not lie on the body, a place that is
        taken, or something said that has no effect on this kind of thing.
    """
    require_name(out, _endings(thing))
    for place in (out, sidecar_place(out)):
        require_place(place, overwrite=overwrite, folder=False)
    progress("read", 0, 0, thing.name)
    loaded, findings = _loaded(thing, kind, reading, settings.rules)
    loaded, left_out = without_personal(loaded, told_name(thing))
    require_effect(
        loaded,
        name=told_name(thing),
        kind=kind,
        settings=settings,
        reading=reading,
        onto=onto,
        frame_uid=frame_uid,
    )
    way = _read_through(through, loaded, reverse=reverse, progress=progress)
    require_holding(out, loaded)
    require_out(out, loaded, settings, overwrite=overwrite)
    progress("carry", 0, 0, thing.name)
    belonging = require_belonging(
        loaded, *way.ends, name=told_name(thing), belongs_to=belongs_to, between=way.between
    )
    settings = settings.of_scan(way.voxel_mm)
    new_grid = None if onto is None else read_grid(onto)
    carried = way.carry(loaded, settings, onto=new_grid)
    findings = (*findings, *left_out, *way.findings, *belonging, *carried.findings)
    if onto is not None and new_grid is not None:
        findings += grid_of_the_start(new_grid, *way.ends, name=onto.name)
    facts = {**carried.facts, **facts_beside(out, carried.thing, onto)}
    told = carried_sidecar(thing, out, way.told, settings, findings, facts=facts, belongs_to=belongs_to)
    with whole_file(sidecar_place(out), overwrite=overwrite) as place:  # both stand, or neither
        place.write_text(json_text(told), encoding="utf-8")
        if not write_pointwise(out, carried.thing, overwrite=overwrite):
            write_volume(
                out, carried.thing, scan_sha256=way.end_sha256, frame_uid=frame_uid, overwrite=overwrite
            )
    return findings


def _read_through(
    through: Path | Sequence[Path], loaded: Any, *, reverse: bool, progress: Progress
) -> Way | FieldWay:
    """Map folders, or one field's file."""
    places = [through] if isinstance(through, Path) else list(through)
    fields = [place for place in places if is_field_file(place)]
    volume = isinstance(getattr(loaded, "grid", None), Grid)
    if not fields:
        return read_way(places, reverse=reverse, progress=progress)
    if len(places) > 1:
        raise InputError(
            "a field is not chained with others: what one sampled is sampled again",
            where=fields[0].name,
            remedy="name the map folders, whose maps follow one another exactly",
        )
    way = read_field_way(fields[0], pulls=volume)
    if reverse:
        start = way.ends[0]
        raise UnsaidError(
            f"a field runs one way: for this kind of thing from {start.name}",
            where=way.name,
            remedy=f"to carry it the other way {start.turn}, without --reverse",
        )
    return way


def _endings(thing: Path) -> tuple[str, ...]:
    """Endings of files of the same kind as `thing`."""
    if thing.suffix.lower() in ENDINGS:
        return endings_out(thing)
    if holds_volume(thing):
        return (*NIFTI, *DICOM)
    raise InputError(
        "this kind of file cannot be carried",
        where=thing.name,
        expected=".csv, .vtu, .vtp, .stl, .ply, .nii, .nii.gz, .nrrd, or DICOM",
        remedy="points go into a csv with name,x_mm,y_mm,z_mm; volumes into NIfTI",
    )


def _loaded(path: Path, kind: VolumeKind, reading: Reading, rules: Rules) -> tuple[Any, tuple[Finding, ...]]:
    if path.suffix.lower() in ENDINGS:
        return read_pointwise(path, rules)
    rules.require_known((), path.name)
    volume, findings = read_volume_with_findings(path, reading, kind=kind)
    if kind != "either":
        return volume, findings
    return volume, (*findings, how_taken(volume))
