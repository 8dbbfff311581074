"""One small sound file of every format that volmap reads, as bytes: what `damages` then spoils."""

from __future__ import annotations

import gzip
import io
import json
from pathlib import Path

import meshio
import nibabel as nib
import nrrd
import numpy as np
from dicom_scene import PLACES, saved, segmentation, slices, some_labels

SHAPE = (12, 13, 14)
AFFINE = np.diag([2.0, 2.5, 3.0, 1.0])
CUBE = np.array([[i, j, k] for i in (0, 1) for j in (0, 1) for k in (0, 1)], float)
SIDES = np.array([[0, 1, 3], [0, 3, 2], [4, 6, 7], [4, 7, 5], [0, 4, 5], [0, 5, 1], [2, 3, 7], [2, 7, 6],
                  [0, 2, 6], [0, 6, 4], [1, 5, 7], [1, 7, 3]], np.int64)  # fmt: skip
TETS = np.array(
    [[0, 4, 6, 7], [0, 6, 2, 7], [0, 2, 3, 7], [0, 3, 1, 7], [0, 1, 5, 7], [0, 5, 4, 7]], np.int64
)


def labels():
    values = np.zeros(SHAPE, np.int16)
    values[3:9, 3:10, 3:11] = 1
    values[5:8, 5:8, 5:8] = 2
    return values


def nifti(kind):
    image = kind(labels(), AFFINE)
    image.header.set_xyzt_units("mm")
    image.header["scl_slope"], image.header["scl_inter"] = 1, 0
    return image


def nifti_bytes(kind):
    return nifti(kind).to_bytes()


def pair_bytes():
    image = nifti(nib.Nifti1Pair)
    files = image.make_file_map()
    for name in ("header", "image"):
        files[name].fileobj = io.BytesIO()
    image.to_file_map(files)
    return files["header"].fileobj.getvalue(), files["image"].fileobj.getvalue()


def nrrd_bytes(folder, *, encoding="gzip", detached=False):
    file = folder / ("x.nhdr" if detached else "x.nrrd")
    header = {
        "space": "left-posterior-superior",
        "space directions": AFFINE[:3, :3],
        "space origin": [1.0, 2.0, 3.0],
        "space units": ["mm"] * 3,
        "kinds": ["domain"] * 3,
        "encoding": encoding,
    }
    nrrd.write(str(file), labels(), header, detached_header=detached)
    return file.read_bytes()


def dicom_segmentation_bytes(folder, kind):
    place = PLACES["oblique"]
    made = segmentation(place, some_labels((5, 8, 9), 2, 3), kind)
    file = folder / f"{kind}.dcm"
    made.save_as(file)
    return file.read_bytes()


def dicom_series_bytes(folder):
    values = np.random.default_rng(4).integers(-100, 900, (5, 8, 9)).astype(np.int16)
    place = saved(slices(PLACES["oblique"], values), folder / "series")
    return {file.name: file.read_bytes() for file in sorted(place.iterdir())}


def mesh_bytes(folder, ending, *, tets=False, images=False, **how):
    kind, cells = ("tetra", TETS) if tets else ("triangle", SIDES)
    cells = cells.astype(np.int32) if ending == ".ply" else cells  # all that PLY can hold
    mesh = meshio.Mesh(20 * CUBE, [(kind, cells)])
    if tets:
        mesh.cell_data["label"] = [np.ones(len(cells), np.int64)]
    if images:
        mesh.point_data["image_mm"] = 20 * CUBE
    file = folder / f"x{ending}"
    mesh.write(file, **how)
    return file.read_bytes()


def map_folder_bytes(folder):
    """Every file of a map folder, by its name."""
    return {file.name: file.read_bytes() for file in sorted(Path(folder).iterdir())}


def pack(data):
    return gzip.compress(bytes(data), 4, mtime=0)


def json_bytes(document):
    return json.dumps(document).encode()
