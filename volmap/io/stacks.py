"""Numbers on a grid as files store them, in one or several frames: which frame, and labels or intensities.

A file does not say whether its numbers are labels, intensities or probabilities, nor which of its frames is
meant.  Where it leaves that open the user says it; what was done is said in a finding.
"""

from __future__ import annotations

import os
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from volmap.io.label_names import read_label_names, sibling_names
from volmap.io.reading import Reading
from volmap.types.errors import InputError
from volmap.types.findings import Finding, Level
from volmap.types.grid import Grid
from volmap.types.volumes import ImageVolume, LabelVolume

_MOST_LABELS = 256
_MOST_FRAMES = 65535
_NO_SHARE = 2.0  # interpolated probabilities overshoot 1 a little, never to 2


@dataclass(frozen=True)
class Stack:
    """What a file stores.

    Parameters
    ----------
    name : str
        File name, no folders.
    values : (I, J, K, F) array of whole or real numbers
    affine : (4, 4) float64
        Voxel centres to RAS+ world, mm.
    findings : tuple of Finding
        What is odd about the file, and which frame was taken.
    """

    name: str
    values: NDArray[Any]
    affine: NDArray[np.float64]
    findings: tuple[Finding, ...] = ()

    @property
    def shape(self) -> tuple[int, int, int]:
        """Voxels along i, j, k."""
        i, j, k = self.values.shape[:3]
        return i, j, k


def frames_wanted(n: int, reading: Reading, where: str) -> tuple[range, tuple[Finding, ...]]:
    """Which of a file's n frames to read, and what to say about it.

    Without `reading.frame`, a threshold makes every frame one label's.

    Raises
    ------
    InputError
        Several frames and none chosen, or no such frame.
    """
    frame, threshold = reading.frame, reading.threshold
    if frame is None:
        if n > 1 and threshold is None:
            raise InputError(
                "the file holds more than one volume",
                where=where,
                found=f"{n} frames",
                expected="one, or one that is chosen",
                remedy="choose one with --frame N, counted from 0; for probabilities with one frame a label, "
                "give --threshold P",
                refused=True,
            )
        return range(n), ()
    if not 0 <= frame < n:
        raise InputError(
            "there is no such frame",
            where=where,
            found=f"{n} frames" if n > 1 else "one frame",
            expected=f"--frame from 0 to {n - 1}" if n > 1 else "--frame 0, or none",
            remedy="frames are counted from 0",
            refused=True,
        )
    said = Finding(Level.NOTE, "frame-chosen", where, f"frame {frame} of {n} was read (counted from 0)")
    return range(frame, frame + 1), (said,)


def label_volume(
    stack: Stack, path: str | os.PathLike[str], reading: Reading
) -> tuple[LabelVolume, tuple[Finding, ...]]:
    """The labels a stack holds: its own whole numbers, or what a threshold makes of probabilities.

    Parameters
    ----------
    stack : Stack
    path : path
        Of its file, to look for a table of names beside it.
    reading : Reading
        A threshold makes of one frame: label 1 where the value is at least that.  Of several: frame f is
        label f + 1's; a voxel takes the largest of the values that are at least that, the earliest of equal
        ones.

    Raises
    ------
    InputError
        Numbers that are no labels, a threshold that is no number, or a table of names that cannot be read.
    """
    if reading.threshold is None:
        labels = whole_labels(stack.values[..., 0], stack.name)
        findings = stack.findings
    else:
        labels, said = _by_threshold(stack, reading.threshold)
        findings = (*stack.findings, said)
    names = sibling_names(path) if reading.names is None else read_label_names(reading.names)
    volume = LabelVolume(Grid(stack.shape, stack.affine), labels, names, stack.name)
    return volume, findings


def image_volume(stack: Stack, *, unit: str = "") -> ImageVolume:
    """The first frame of a stack as intensities."""
    values = as_float32(stack.values[..., 0])
    return ImageVolume(Grid(stack.shape, stack.affine), values, unit, stack.name)


def _by_threshold(stack: Stack, threshold: float) -> tuple[NDArray[np.uint16], Finding]:
    if not np.isfinite(threshold):
        raise InputError("a threshold is a number", where=stack.name, found=str(threshold))
    n = stack.values.shape[3]
    if n > _MOST_FRAMES:
        raise InputError(
            "too many frames for one label each",
            where=stack.name,
            found=str(n),
            expected=f"at most {_MOST_FRAMES}",
            remedy="choose one with --frame N, counted from 0",
            refused=True,
        )
    _require_same_scale(stack, threshold)
    best = np.full(stack.shape, -np.inf)
    labels = np.zeros(stack.shape, np.uint16)
    n_nan = 0
    for frame in range(n):
        values = stack.values[..., frame]
        better = (values >= threshold) & (values > best)
        labels[better] = frame + 1
        best[better] = values[better]
        n_nan += int(np.isnan(values).sum()) if values.dtype.kind == "f" else 0
    return labels, _how_labelled(stack, threshold, n_nan)


def _require_same_scale(stack: Stack, threshold: float) -> None:
    """A share of 1 means nothing to values of 0 to 100 or 255, or to labels."""
    values = stack.values
    if values.dtype.kind == "f":
        most = float(np.max(values, initial=-np.inf, where=np.isfinite(values)))
    else:
        most = float(values.max())
    if threshold <= 1.0 and most >= _NO_SHARE:
        raise InputError(
            "a threshold of at most 1 does not fit its values",
            where=stack.name,
            found=f"values up to {most:g}",
            expected="probabilities from 0 to 1",
            remedy="give it in the file's own numbers (half of 255 is 127.5), or none if these are labels",
            refused=True,
        )


def _how_labelled(stack: Stack, threshold: float, n_nan: int) -> Finding:
    n = stack.values.shape[3]
    if n == 1:
        sentence = f"label 1 is where its value is at least {threshold:g}"
    else:
        sentence = (
            f"labels 1 to {n} are its frames 0 to {n - 1}: the largest value of those that are at least "
            f"{threshold:g}, the earliest frame of equal ones"
        )
    if n_nan:
        sentence += f"; {n_nan} values are not a number and were taken for below it"
    return Finding(Level.NOTE, "labels-by-threshold", stack.name, sentence)


def could_be_labels(values: NDArray[Any]) -> bool:
    """True for whole numbers from 0 to 65535, at most 256 different ones."""
    if values.dtype.kind == "f" and not (np.isfinite(values).all() and (values == np.rint(values)).all()):
        return False
    if not values.size or values.min() < 0 or values.max() > 65535:
        return False
    return bool(np.count_nonzero(np.bincount(values.astype(np.uint16).ravel(order="K"))) <= _MOST_LABELS)


def whole_labels(values: NDArray[Any], name: str) -> NDArray[np.uint16]:
    """Values as labels, or the reason why they are none.

    Parameters
    ----------
    values : array of whole or real numbers
    name : str
        File name for the error.

    Raises
    ------
    InputError
        NaN or infinity, fractions, below 0, above 65535.
    """
    if values.dtype.kind == "f":
        _refuse(not np.isfinite(values).all(), "label values that are not finite (NaN or infinity)", name)
        fractions = values != np.rint(values)
        if fractions.any():
            share = f"fractions in {100 * fractions.mean():.2g} % of the voxels"
            worst = values.flat[np.abs(values - np.rint(values)).argmax()]
            found = f"{share}, {worst:.6g} for one"
            _refuse(True, "label values that are not whole numbers", name, found=found)
    least, most = (int(values.min()), int(values.max())) if values.size else (0, 0)
    _refuse(least < 0, "label values below 0", name, found=str(least))
    _refuse(most > 65535, "label values above 65535", name, found=str(most))
    return values.astype(np.uint16)


def _refuse(fault: bool, what: str, name: str, *, found: str = "") -> None:
    if fault:
        raise InputError(
            f"holds {what}",
            where=name,
            found=found,
            expected="whole numbers from 0 to 65535",
            remedy="give the segmentation itself, not an image; resample labels only by nearest neighbour; "
            "probabilities need --threshold P",
            refused=True,
        )


def scaled(stored: NDArray[Any], slope: float, inter: float) -> NDArray[Any]:
    """``slope * stored + inter`` in float64; the stored numbers themselves where that changes nothing."""
    if (slope, inter) == (1.0, 0.0):
        return stored
    with np.errstate(all="ignore"):
        return np.asarray(stored.astype(np.float64) * slope + inter)


def as_float32(values: NDArray[Any]) -> NDArray[np.float32]:
    """Intensities as they are kept; what is too large for float32 becomes infinite."""
    with np.errstate(all="ignore"):
        return values.astype(np.float32)
