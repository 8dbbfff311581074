"""Numbers on a grid as files store them, in one or several frames: which frame, and labels or intensities.

A file does not say whether its numbers are labels, intensities or probabilities, nor which of its frames is
meant.  Where it leaves that open the user says it; what was done is said in a finding.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from volmap.types.errors import InputError
from volmap.types.findings import Finding, Level

_MOST_LABELS = 256


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


def frames_wanted(
    n: int, *, frame: int | None, threshold: float | None, where: str
) -> tuple[range, tuple[Finding, ...]]:
    """Which of a file's frames to read, and what to say about it.

    Parameters
    ----------
    n : int
        Frames in the file.
    frame : int, optional
        The one that is wanted, counted from 0.
    threshold : float, optional
        Given for probabilities; without `frame`, every frame is then one label's.
    where : str
        File name for the error.

    Raises
    ------
    InputError
        Several frames and none chosen, or no such frame.
    """
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


def labels_of(
    stack: Stack, *, threshold: float | None = None
) -> tuple[NDArray[np.uint16], tuple[Finding, ...]]:
    """The labels a stack holds: its own whole numbers, or what a threshold makes of probabilities.

    Parameters
    ----------
    stack : Stack
    threshold : float, optional
        One frame: label 1 where the value is at least this.  Several frames: frame f is label f + 1's; a
        voxel takes the largest of the values that are at least this, the earliest of equal ones.

    Returns
    -------
    labels : (I, J, K) uint16
    findings : tuple of Finding
        How labels came about, when by a threshold.

    Raises
    ------
    InputError
        Numbers that are no labels, or a threshold that is no number.
    """
    if threshold is None:
        return whole_labels(stack.values[..., 0], stack.name), ()
    if not np.isfinite(threshold):
        raise InputError("a threshold is a number", where=stack.name, found=str(threshold))
    best = np.full(stack.shape, -np.inf)
    labels = np.zeros(stack.shape, np.uint16)
    n_nan = 0
    for frame in range(stack.values.shape[3]):
        values = stack.values[..., frame]
        better = (values >= threshold) & (values > best)
        labels[better] = frame + 1
        best[better] = values[better]
        n_nan += int(np.isnan(values).sum()) if values.dtype.kind == "f" else 0
    return labels, _how_labelled(stack, threshold, n_nan)


def _how_labelled(stack: Stack, threshold: float, n_nan: int) -> tuple[Finding, ...]:
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
    return (Finding(Level.NOTE, "labels-by-threshold", stack.name, sentence),)


def could_be_labels(values: NDArray[Any]) -> bool:
    """True for whole numbers from 0 to 65535, at most 256 different ones."""
    if values.dtype.kind == "f" and not (np.isfinite(values).all() and (values == np.rint(values)).all()):
        return False
    if not values.size or values.min() < 0 or values.max() > 65535:
        return False
    return bool(np.count_nonzero(np.bincount(values.astype(np.uint16).ravel())) <= _MOST_LABELS)


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
