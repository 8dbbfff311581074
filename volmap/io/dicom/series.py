"""DICOM images as an intensity volume: a folder of slices, or one file of one or many frames."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from volmap.io.dicom.fields import reals, text
from volmap.io.dicom.geometry import (
    FunctionalGroups,
    Planes,
    plane_of_image,
    planes_of_frames,
    stacked,
    together,
)
from volmap.io.dicom.opening import PathLike, has_preamble, odd_values, parsed
from volmap.io.dicom.pixels import pixel_layout, stored_frames
from volmap.io.dicom.rescaling import Scale, scale_of_frames, scale_of_image
from volmap.io.opening import shown_name
from volmap.types.errors import InputError
from volmap.types.findings import Finding, Level
from volmap.types.volumes import ImageVolume

_IMAGES = "DICOM images"


def read_series(path: PathLike) -> tuple[ImageVolume, tuple[Finding, ...]]:
    """Intensities of the images in a folder, or in one file; RAS+.

    Parameters
    ----------
    path : path
        A folder whose DICOM files are the slices of one series, or a file of one slice or of many frames.

    Raises
    ------
    InputError
        Not readable, more than one series, no regular volume; the sentence names the file.
    """
    where = shown_name(Path(path).absolute()) if Path(path).is_dir() else shown_name(path)
    with odd_values(where) as odd:
        if Path(path).is_dir():
            volume, findings = _unnamed(*_from_folder(Path(path), where))
        else:
            ds = parsed(path)
            volume, findings = _from_frames(ds, where) if _many(ds) else _from_slices([Path(path)], where)
    return volume, (*findings, *odd)


def _unnamed(volume: ImageVolume, findings: tuple[Finding, ...]) -> tuple[ImageVolume, tuple[Finding, ...]]:
    """Without the folder's name: it is part of a path, names a person often enough, and goes no farther."""
    told = tuple(replace(f, where=f.where.replace(volume.name, _IMAGES)) for f in findings)
    return replace(volume, name=_IMAGES), told


def _many(ds: Any) -> bool:
    return "PerFrameFunctionalGroupsSequence" in ds or "GridFrameOffsetVector" in ds or "NumberOfFrames" in ds


def image_files(folder: Path) -> tuple[list[Path], int]:
    """DICOM files directly in a folder, by name, and how many other files lie there.

    Parameters
    ----------
    folder : Path
    """
    files = [file for file in sorted(folder.iterdir()) if file.is_file()]
    dicom = [file for file in files if has_preamble(file) and file.name.upper() != "DICOMDIR"]
    return dicom, len(files) - len(dicom)


def _from_folder(folder: Path, where: str) -> tuple[ImageVolume, tuple[Finding, ...]]:
    files, others = image_files(folder)
    if not files:
        raise InputError("holds no DICOM file", where=where, remedy="name the folder that holds the slices")
    findings: tuple[Finding, ...] = ()
    if others:
        many = "one file that is" if others == 1 else f"{others} files that are"
        findings = (Finding(Level.NOTE, "other_files", where, f"{many} no DICOM image passed over"),)
    if len(files) == 1:
        ds = parsed(files[0])
        if _many(ds):
            volume, more = _from_frames(ds, where)
            return volume, (*findings, *more)
    volume, more = _from_slices(files, where)
    return volume, (*findings, *more)


@dataclass(frozen=True)
class _Slice:
    """What is kept of one file's header until its pixels are wanted."""

    file: Path
    series: str
    shape: tuple[int, int]
    scale: Scale


def _from_slices(files: list[Path], where: str) -> tuple[ImageVolume, tuple[Finding, ...]]:
    slices, planes = [], []
    for file in files:
        name = shown_name(file)
        ds = parsed(file, pixels=False)
        if _many(ds):
            raise InputError(
                "holds a file of many frames beside others", where=where, found=name,
                remedy="give that file alone",
            )  # fmt: skip
        layout = pixel_layout(ds, name)
        series = text(ds, "SeriesInstanceUID", name)
        slices.append(_Slice(file, series, layout.shape, scale_of_image(ds, name)))
        _require_alike(slices, where)
        planes.append(plane_of_image(ds, name))
    _require_one_series(slices, where)
    all_planes = together(planes, slices[0].shape, [shown_name(s.file) for s in slices], where)
    stack = stacked(all_planes, gaps=False)
    _require_no_duplicates(stack.index, all_planes)
    values = np.empty(stack.grid.shape[::-1], np.float32)
    for k, one in zip(stack.index, slices, strict=True):
        ds, name = parsed(one.file), shown_name(one.file)
        for stored in stored_frames(ds, pixel_layout(ds, name), name):
            values[k] = one.scale.applied(stored)
    unit = slices[0].scale.unit
    return ImageVolume(stack.grid, values.T, unit, where), stack.findings


def _require_alike(slices: list[_Slice], where: str) -> None:
    first, last = slices[0], slices[-1]
    name = shown_name(last.file)
    if last.shape != first.shape:
        raise InputError(
            "holds slices of different sizes", where=where,
            found=f"{name} of {last.shape[1]} x {last.shape[0]} pixels",
            expected=f"{first.shape[1]} x {first.shape[0]} as in {shown_name(first.file)}",
            remedy="give the slices of one series alone",
        )  # fmt: skip
    if last.scale.unit != first.scale.unit:
        raise InputError(
            "holds slices in different units", where=where, found=f"{name} in {last.scale.unit or 'no unit'}",
            expected=first.scale.unit or "no unit",
        )  # fmt: skip


def _require_one_series(slices: list[_Slice], where: str) -> None:
    series = [one.series for one in slices]
    kinds = sorted(set(series), key=series.count, reverse=True)
    if len(kinds) > 1:
        other = next(one for one in slices if one.series != kinds[0])
        counts = " and ".join(str(series.count(kind)) for kind in kinds[:4])
        raise InputError(
            "holds more than one series", where=where,
            found=f"{len(kinds)} of them, of {counts} files; {shown_name(other.file)} for one is of another",
            remedy="put the slices of one series in a folder of their own",
        )  # fmt: skip


def _require_no_duplicates(index: NDArray[np.int64], planes: Planes) -> None:
    order = np.argsort(index, kind="stable")
    same = np.flatnonzero(np.diff(index[order]) == 0)
    if len(same):
        a, b = planes.names[order[same[0]]], planes.names[order[same[0] + 1]]
        raise InputError(
            "holds more than one image at one place", where=planes.where,
            found=f"{len(same)} too many, such as {b} at the place of {a}",
            expected="one image a place", remedy="give one time, echo or copy of the series alone",
        )  # fmt: skip


def _from_frames(ds: Any, where: str) -> tuple[ImageVolume, tuple[Finding, ...]]:
    layout = pixel_layout(ds, where)
    names = [f"frame {n + 1}" for n in range(layout.n_frames)]
    findings: tuple[Finding, ...] = ()
    if "PerFrameFunctionalGroupsSequence" in ds:
        groups = FunctionalGroups(ds, where)
        planes = together(planes_of_frames(groups), layout.shape, names, where)
        scales, findings = scale_of_frames(ds, groups), groups.findings
    elif "GridFrameOffsetVector" in ds:
        planes = _dose_planes(ds, layout.n_frames, layout.shape, where)
        scales = [scale_of_image(ds, where)] * layout.n_frames
    elif layout.n_frames == 1:
        planes = together([plane_of_image(ds, where)], layout.shape, names, where)
        scales = [scale_of_image(ds, where)]
    else:
        raise InputError(
            "does not say where its frames lie", where=where, found=f"{layout.n_frames} frames",
            expected="a position for each", remedy="export it as an enhanced image or as single slices",
        )  # fmt: skip
    stack = stacked(planes, gaps=False)
    _require_no_duplicates(stack.index, planes)
    values = np.empty(stack.grid.shape[::-1], np.float32)
    for k, scale, stored in zip(stack.index, scales, stored_frames(ds, layout, where), strict=True):
        values[k] = scale.applied(stored)
    return ImageVolume(stack.grid, values.T, scales[0].unit, where), (*findings, *stack.findings)


def _dose_planes(ds: Any, n: int, shape: tuple[int, int], where: str) -> Planes:
    """Planes of an RT Dose: Grid Frame Offset Vector (3004,000C), PS3.3 C.8.8.3.2, the relative kind."""
    offsets = reals(ds, "GridFrameOffsetVector", n, where)
    assert offsets is not None
    if offsets[0] != 0:
        raise InputError(
            "gives the places of its frames as absolute offsets", where=where,
            expected="offsets that begin with 0", remedy="export it with relative offsets",
        )  # fmt: skip
    first = plane_of_image(ds, where)
    normal = np.cross(first.orientation[:3], first.orientation[3:])
    positions = first.position + offsets[:, None] * normal
    names = [f"frame {k + 1}" for k in range(n)]
    spacing = first.spacing_mm
    return Planes(positions, first.orientation, spacing, shape, None, first.thickness_mm, names, where)


def headers(path: Path) -> Iterator[tuple[str, Any]]:
    """Name and data set, without pixels, of a DICOM file or of every one in a folder.

    Raises
    ------
    InputError
        As `parsed`.
    """
    for file in image_files(path)[0] if path.is_dir() else [path]:
        yield shown_name(file), parsed(file, pixels=False)
