"""Damaged inputs over all readers, made from sound ones: the same ones every time.

A case is named `format/damage`.  Nearly all must be unreadable; a bit flipped somewhere may happen to leave a
readable file, and a document that contradicts its field is read and refused.
"""

from __future__ import annotations

import nibabel as nib
import numpy as np
from damaged_case import HERE, Case, flipped, screened
from damaged_dicom import segmentation_cases, series_cases
from damaged_meshes import (
    boundary_cases,
    carried_surface_cases,
    legacy_cases,
    mesh_cases,
    surface_cases,
)
from damaged_tables import field_cases, map_folder_cases, table_cases
from damaged_volumes import component_cases, nifti_cases, nrrd_cases, pair_cases
from sound_files import dicom_segmentation_bytes, nifti_bytes, nrrd_bytes, pack

SEED = 20240229
__all__ = ["HERE", "all_cases"]


def flip_cases(folder, n):
    """Bits flipped in headers; some files stay readable."""
    rng = np.random.default_rng(SEED)
    one, two, packed = (
        nifti_bytes(nib.Nifti1Image),
        nifti_bytes(nib.Nifti2Image),
        pack(nifti_bytes(nib.Nifti1Image)),
    )
    scan, marked = nrrd_bytes(folder), dicom_segmentation_bytes(folder, "BINARY")
    pool = [
        ("x.nii", one, 352),
        ("x.nii", two, 544),
        ("x.nii.gz", packed, len(packed)),
        ("x.nrrd", scan, 200),
        ("x.dcm", marked, min(len(marked), 4000)),
    ]
    cases = []
    for k in range(n):
        file, data, end = pool[k % len(pool)]
        at, bit = int(rng.integers(end)), int(rng.integers(8))
        damaged = flipped(data, at, bit)
        cases.append(Case(f"flip/{k} {file} {at}.{bit}", {file: damaged}, screened(file), statuses=(0, 1, 3)))
    return cases


def all_cases(folder, *, source, target, through, flips=60):
    """Every case; `source` and `target` are sound label volumes, `through` their map folder (all as text)."""
    folder.mkdir(parents=True, exist_ok=True)
    cases = [
        *nifti_cases(),
        *pair_cases(),
        *component_cases(through),
        *nrrd_cases(folder),
        *segmentation_cases(folder),
        *series_cases(folder, source, target),
        *mesh_cases(folder, through),
        *surface_cases(folder),
        *carried_surface_cases(folder, through),
        *legacy_cases(),
        *boundary_cases(folder, source, target),
        *table_cases(source, target, through),
        *map_folder_cases(through),
        *field_cases(through),
        *flip_cases(folder, flips),
    ]
    names = [case.name for case in cases]
    assert len(set(names)) == len(names)
    return cases
