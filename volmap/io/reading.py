"""What a user says about a file where the file leaves it open."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path
from typing import Literal

VolumeKind = Literal["labels", "image", "vectors", "tensors", "either"]
Axes = Literal["world", "lps", "voxels"]


@dataclass(frozen=True)
class Reading:
    """How a volume is to be read.

    Parameters
    ----------
    names : path, optional
        Table of label names (TSV or CSV with `index` and `name`); by default a table beside the volume.
    frame : int, optional
        Which volume of a file that holds several, counted from 0.
    threshold : float, optional
        A probability or a share at and above which a voxel belongs to the label, in the file's own numbers:
        of 1 in most files, of 100 or 255 in some.
    axes : 'world', 'lps' or 'voxels', optional
        What the components of vectors and tensors run along: the world's axes, RAS+ (also when nothing is
        said, which a finding then tells), those of DICOM, or the voxel axes i, j, k.
    """

    names: Path | None = None
    frame: int | None = None
    threshold: float | None = None
    axes: Axes | None = None


AS_IT_IS = Reading()
