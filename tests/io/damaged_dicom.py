"""Damaged DICOM segmentation objects and folders of slices."""

from __future__ import annotations

import io
import struct
import warnings

import pydicom
from damaged_case import HERE, Case, cut, screened
from sound_files import dicom_segmentation_bytes, dicom_series_bytes

NEEDED = (
    "Rows",
    "Columns",
    "BitsAllocated",
    "PixelData",
    "SegmentSequence",
    "SegmentationType",
    "SharedFunctionalGroupsSequence",
    "PerFrameFunctionalGroupsSequence",
)


def dicom_changed(data, change):
    """The data set after a change, written again without checks."""

    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        ds = pydicom.dcmread(io.BytesIO(data))
        change(ds)
        out = io.BytesIO()
        pydicom.dcmwrite(out, ds)
    return out.getvalue()


def element(data, group, number):
    """Where the element of a tag begins in an explicit little-endian file."""
    return data.index(struct.pack("<HH", group, number), 132)


def without(*keywords):
    def change(ds):
        for keyword in keywords:
            delattr(ds, keyword)

    return change


def setting(**values):
    def change(ds):
        for keyword, value in values.items():
            setattr(ds, keyword, value)

    return change


def shared(ds):
    return ds.SharedFunctionalGroupsSequence[0]


def segmentation_cases(folder):
    sound = dicom_segmentation_bytes(folder, "BINARY")
    maps = dicom_segmentation_bytes(folder, "LABELMAP")

    def measures(**values):
        return lambda ds: [setattr(shared(ds).PixelMeasuresSequence[0], k, v) for k, v in values.items()]

    def turned(values):
        return lambda ds: setattr(shared(ds).PlaneOrientationSequence[0], "ImageOrientationPatient", values)

    def moved(frame, position):
        def change(ds):
            place = ds.PerFrameFunctionalGroupsSequence[frame].PlanePositionSequence[0]
            place.ImagePositionPatient = position

        return change

    def fewer_descriptions(ds):
        del ds.PerFrameFunctionalGroupsSequence[-1]

    def no_positions(ds):
        for group in ds.PerFrameFunctionalGroupsSequence:
            del group.PlanePositionSequence

    def fewer_frames(ds):
        n = int(ds.NumberOfFrames)
        ds.PixelData = ds.PixelData[: len(ds.PixelData) // n]

    rows, frames = element(sound, 0x28, 0x10), element(sound, 0x28, 0x08)
    changes = {
        **{f"no {keyword}": without(keyword) for keyword in NEEDED},
        "rows too many": setting(Rows=800),
        "rows 0": setting(Rows=0),
        "columns huge": setting(Columns=65535, Rows=65535),
        "frames too many": setting(NumberOfFrames=99),
        "frames huge": setting(NumberOfFrames=2**31 - 1),
        "frames negative": setting(NumberOfFrames=-4),
        "bits odd": setting(BitsAllocated=12),
        "bits of eight": setting(BitsAllocated=8),
        "type odd": setting(SegmentationType="LIKELY"),
        "missing frames": fewer_frames,
        "missing descriptions": fewer_descriptions,
        "no positions": no_positions,
        "no measures": lambda ds: delattr(shared(ds), "PixelMeasuresSequence"),
        "no orientation": lambda ds: delattr(shared(ds), "PlaneOrientationSequence"),
        "spacing 0": measures(PixelSpacing=[0.0, 0.0]),
        "spacing of one": measures(PixelSpacing=[1.0]),
        "spacing negative": measures(PixelSpacing=[-1.0, 1.0]),
        "orientation zero": turned([0.0] * 6),
        "orientation of three": turned([1.0, 0, 0]),
        "orientation parallel": turned([1.0, 0, 0, 1, 0, 0]),
        "mixed spacing": moved(1, [5.5, -60.25, 11.3]),
        "a frame far away": moved(0, [900.0, 0.0, 0.0]),
        "position of two": moved(0, [1.0, 2.0]),
        "segments not described": lambda ds: [setattr(s, "SegmentNumber", s.SegmentNumber + 7)
                                              for s in ds.SegmentSequence],
    }  # fmt: skip
    made = {name: dicom_changed(sound, change) for name, change in changes.items()}
    made |= {
        "position NaN": sound.replace(b"5.5\\-60.25\\", b"nan\\-60.25\\"),
        "position of words": sound.replace(b"5.5\\-60.25\\", b"ab5\\-60.25\\"),
        "rows as text": sound[: rows + 4] + b"LO" + sound[rows + 6 :],
        "rows as a sequence": sound[: rows + 4] + b"SQ" + sound[rows + 6 :],
        "rows of no length": sound[: rows + 6] + b"\0\0" + sound[rows + 8 :],
        "frames as a number": sound[: frames + 4] + b"FD" + sound[frames + 6 :],
        "VR unknown": sound[: rows + 4] + b"??" + sound[rows + 6 :],
        "bytes after the pixels": sound + b"\xff" * 40,
        **{
            f"cut at {share}": cut(sound, share)
            for share in (0.01, 0.02, 0.05, 0.1, 0.2, 0.4, 0.6, 0.8, 0.95, 0.999)
        },
        **{f"labelmap cut at {share}": cut(maps, share) for share in (0.1, 0.5, 0.9, 0.99)},
        "labelmap, rows too many": dicom_changed(maps, setting(Rows=800)),
        "labelmap, missing frames": dicom_changed(maps, fewer_frames),
    }
    return [Case(f"segmentation/{name}", {"x.dcm": data}, screened("x.dcm")) for name, data in made.items()]


def series_cases(folder, source, target):
    files = dicom_series_bytes(folder)
    names = sorted(files)
    middle = names[2]

    def all_changed(change):
        return {name: dicom_changed(data, change) for name, data in files.items()}

    def one_changed(change, name=middle):
        return files | {name: dicom_changed(files[name], change)}

    made = {
        "a slice missing": {k: v for k, v in files.items() if k != middle},
        "a slice twice": files | {"again": files[middle]},
        "mixed spacing": one_changed(setting(PixelSpacing=[0.5, 0.5])),
        "a slice moved": one_changed(setting(ImagePositionPatient=[0.0, 0.0, 0.0])),
        "a slice turned": one_changed(setting(ImageOrientationPatient=[1, 0, 0, 0, 1, 0])),
        "a slice of another size": one_changed(setting(Rows=9)),
        "a slice of another series": one_changed(setting(SeriesInstanceUID="1.2.3")),
        "a slice without a place": one_changed(without("ImagePositionPatient")),
        "a slice cut": files | {middle: cut(files[middle], 0.9)},
        "a slice cut early": files | {middle: cut(files[middle], 0.4)},
        "no spacing": all_changed(without("PixelSpacing")),
        "no orientation": all_changed(without("ImageOrientationPatient")),
        "spacing 0": all_changed(setting(PixelSpacing=[0, 0])),
        "orientation zero": all_changed(setting(ImageOrientationPatient=[0] * 6)),
        "no rows": all_changed(without("Rows")),
        "no pixels": all_changed(without("PixelData")),
        "rows too many": all_changed(setting(Rows=4000)),
        "bits odd": all_changed(setting(BitsAllocated=11)),
        "slope 0": all_changed(setting(RescaleSlope=0)),
        "packed in an unknown way": {
            name: data.replace(b"1.2.840.10008.1.2.1\0", b"1.2.840.10008.1.2.9\0")
            for name, data in files.items()
        },
        "one slice": {middle: dicom_changed(files[middle], without("SliceThickness"))},
        "empty folder": {},
        "text": {"notes.txt": b"nothing here"},
    }
    return [
        Case(
            f"series/{name}",
            {f"series/{file}": data for file, data in held.items()},
            ["map", source, target, "--source-image", f"{HERE}/series", "--out", f"{HERE}/out", "--quiet"],
            folders=["series"],
        )
        for name, held in made.items()
    ]
