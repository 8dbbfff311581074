"""Broken inputs: volumes whose voxels are not labels that can be mapped."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import nibabel
import numpy as np
from numpy.typing import NDArray
from scipy.ndimage import gaussian_filter

from .broken import Bench, BrokenInput

FILE = "scan.nii.gz"


def make(bench: Bench) -> list[BrokenInput]:
    """Write them all."""
    random = np.random.default_rng(0)
    labels = bench.source.labels
    smooth = gaussian_filter(labels.astype(np.float32), 0.8)
    with_nan = labels.astype(np.float32)
    with_nan[20, 18, 15] = np.nan
    negative = labels.astype(np.int16)
    negative[negative == 2] = -1
    too_big = labels.astype(np.int32)
    too_big[too_big == 2] = 100_000
    noisy = np.where(random.random(labels.shape) < 0.3, random.integers(0, 3, labels.shape), labels)
    gap = labels.copy()
    gap[:, :, 14:16] = 0
    image = np.where(labels > 0, random.normal(400, 60, labels.shape), random.normal(200, 40, labels.shape))
    cases: list[tuple[str, str, NDArray[Any], str]] = [
        ("interpolated-labels", "labels resampled with interpolation", smooth, "whole|fraction|interpolat"),
        ("nan-labels", "a label that is NaN", with_nan, "nan|not a number|finite"),
        ("negative-labels", "labels below 0", negative, "negative|below 0"),
        ("label-too-large", "a label of 100000", too_big, "65535|too large"),
        ("nothing-labelled", "every voxel 0", np.zeros_like(labels), "no label|empty|nothing"),
        ("image-as-labels", "an intensity image in place of labels", _whole(image), "labels|image|values"),
        (
            "salt-and-pepper",
            "labels full of noise",
            noisy.astype(np.uint8),
            "noise|speck|pepper|scatter|piece",
        ),
        ("empty-slices", "two slices inside the body left empty", gap, "slice|piece"),
    ]
    return [_saved(bench, *case) for case in cases]


def _whole(image: NDArray[np.float64]) -> NDArray[np.int16]:
    return np.asarray(np.clip(np.rint(image), 0, 1000).astype(np.int16))


def _saved(bench: Bench, name: str, fault: str, voxels: NDArray[Any], words: str) -> BrokenInput:
    file = bench.place(name, FILE)
    save_any(voxels, bench.source.grid.affine, file)
    return BrokenInput(name, fault, ("screen", str(file)), FILE, 1, (words,))


def save_any(voxels: NDArray[Any], affine: NDArray[np.float64], file: Path) -> None:
    """Write voxels of any type as NIfTI-1, mm, with an orientation, scaling none."""
    image: Any = nibabel.Nifti1Image(voxels, affine, dtype=voxels.dtype)  # type: ignore[no-untyped-call]
    image.set_sform(affine, code=1)
    image.set_qform(affine, code=1)
    image.header.set_xyzt_units("mm")
    image.header.set_slope_inter(1, 0)
    nibabel.save(image, file)
