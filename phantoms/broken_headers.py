"""Broken inputs: NIfTI headers that do not describe a label volume in millimetres.

Each is a good NIfTI-1 file with a few bytes changed, at the offsets of the official nifti1.h.
"""

from __future__ import annotations

import struct
from dataclasses import dataclass

import numpy as np

from .broken import Bench, BrokenInput
from .writer import save_labels

DIM, DATATYPE, BITPIX, PIXDIM, XYZT_UNITS = 40, 70, 72, 76, 123
QFORM_CODE, SFORM_CODE, SROW = 252, 254, 280
FILE = "scan.nii"


@dataclass(frozen=True)
class _Patch:
    name: str
    fault: str
    bytes_at: dict[int, bytes]
    status: int
    words: str
    extra: bytes = b""


def make(bench: Bench) -> list[BrokenInput]:
    """Write them all."""
    good = bench.place("good-header", FILE)
    save_labels(bench.source, good)
    whole = good.read_bytes()
    good.unlink()
    good.parent.rmdir()
    entries = []
    for patch in _patches(whole):
        content = bytearray(whole + patch.extra)
        for offset, changed in patch.bytes_at.items():
            content[offset : offset + len(changed)] = changed
        file = bench.place(patch.name, FILE)
        file.write_bytes(content)
        arguments = ("screen", str(file))
        entries.append(BrokenInput(patch.name, patch.fault, arguments, FILE, patch.status, (patch.words,)))
    return entries


def _patches(whole: bytes) -> list[_Patch]:
    voxels = whole[352:]
    return [
        _Patch(
            "no-orientation",
            "sform and qform codes both 0",
            {QFORM_CODE: struct.pack("<2h", 0, 0)},
            1,
            "orientation",
        ),
        _Patch("nan-affine", "NaN in the affine", {SROW: struct.pack("<f", np.nan)}, 3, "affine|finite"),
        _Patch(
            "singular-affine",
            "two rows of the affine are the same",
            {SROW + 16: whole[SROW : SROW + 12]},
            3,
            "invertible|singular",
        ),
        _Patch(
            "zero-spacing",
            "a voxel edge of 0 mm, orientation by qform",
            {PIXDIM + 8: struct.pack("<f", 0.0), SFORM_CODE: struct.pack("<h", 0)},
            3,
            "voxel size|spacing|voxel edge|pixdim",
        ),
        _Patch("two-dimensional", "one slice of two dimensions", {DIM: _dim(2, 40, 36)}, 1, "dimension"),
        _Patch(
            "many-frames",
            "a series of three frames",
            {DIM: _dim(4, 40, 36, 30, 3)},
            1,
            "frame|volume|dimension",
            voxels * 2,
        ),
        _Patch(
            "rgb-voxels",
            "a colour picture in place of labels",
            {DATATYPE: struct.pack("<2h", 128, 24)},
            1,
            "rgb|colour|type",
            voxels * 2,
        ),
        _Patch(
            "huge-dimensions",
            "a header that claims 30000 x 30000 x 30000 voxels",
            {DIM: _dim(3, 30000, 30000, 30000)},
            3,
            "too large|cut short",
        ),
        _Patch("negative-dimension", "a negative count of voxels", {DIM: _dim(3, 40, -36, 30)}, 3, "dim"),
        _Patch("metres", "lengths stated in metres", {XYZT_UNITS: b"\x01"}, 1, "metre|unit"),
        _Patch("micron-sized", "voxels of a few micrometres", _scaled(1e-3), 1, "voxel|spacing|unit"),
        _Patch("metre-sized", "voxels of more than a metre", _scaled(1e3), 1, "voxel|spacing|unit"),
    ]


def _dim(*counts: int) -> bytes:
    return struct.pack("<8h", *counts, *[1] * (8 - len(counts)))


def _scaled(factor: float) -> dict[int, bytes]:
    edges = np.array([1.5, 1.5, 2.0]) * factor
    rows = np.zeros((3, 4), "<f4")
    rows[:, :3] = np.diag(edges)
    rows[:, 3] = np.array([-29.0, -26.0, -30.0]) * factor
    offset = {268 + 4 * i: struct.pack("<f", rows[i, 3]) for i in range(3)}
    return {PIXDIM + 4: edges.astype("<f4").tobytes(), SROW: rows.tobytes(), **offset}
