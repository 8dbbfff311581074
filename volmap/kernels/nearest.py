"""Labels at places between voxel centres."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from volmap.kernels.barycentric import plain
from volmap.kernels.compiled import kernel
from volmap.kernels.threads import on_threads

# A place half-way between two voxels belongs to the lower one, however its last bits were rounded.
_HALF_WAY = 1e-6

# Shares that differ by less differ by rounding.
_TIE = 1e-9


def nearest_labels(labels: NDArray[np.uint16], index: NDArray[np.float64]) -> NDArray[np.uint16]:
    """The label of the voxel that holds each place.

    Parameters
    ----------
    labels : (I, J, K) uint16
    index : (..., 3) float64
        Continuous voxel indices; NaN allowed.

    Returns
    -------
    (...) uint16
        0 where no voxel holds the place.
    """
    return _at_places(_look_up, labels, index)


def likeliest_labels(labels: NDArray[np.uint16], index: NDArray[np.float64]) -> NDArray[np.uint16]:
    """The label whose indicator (1 where it is, 0 elsewhere), interpolated trilinearly, is largest.

    No volume of indicators is made: the weights of the eight voxels around a place are added label by label.
    0 takes part like any label.  A tie goes to the label `nearest_labels` would give, if it is among the
    tied, else to the smallest number.  In the outer half of the outermost voxels their labels hold.

    Parameters
    ----------
    labels : (I, J, K) uint16
    index : (..., 3) float64
        Continuous voxel indices; NaN allowed.

    Returns
    -------
    (...) uint16
        0 where no voxel holds the place.
    """
    return _at_places(_vote, labels, index)


def _at_places(look: Any, labels: NDArray[np.uint16], index: NDArray[np.float64]) -> NDArray[np.uint16]:
    locked = np.ascontiguousarray(labels, np.uint16).view()
    locked.setflags(write=False)
    found = np.empty(index.shape[:-1], np.uint16)
    places = plain(index, np.float64).reshape(-1, 3)
    on_threads(look, len(places), locked, places, found.reshape(-1), fewest=1000)
    return found


@kernel
def _look_up(first, last, labels, index, found):  # type: ignore[no-untyped-def]
    """Round each index, half-way down."""
    for n in range(first, last):
        i = np.ceil(index[n, 0] - 0.5 - _HALF_WAY)
        j = np.ceil(index[n, 1] - 0.5 - _HALF_WAY)
        k = np.ceil(index[n, 2] - 0.5 - _HALF_WAY)
        found[n] = 0
        if 0 <= i < labels.shape[0] and 0 <= j < labels.shape[1] and 0 <= k < labels.shape[2]:
            found[n] = labels[int(i), int(j), int(k)]


@kernel
def _vote(first, last, labels, index, found):  # type: ignore[no-untyped-def]
    """The voxel that holds the place votes first; another label needs more votes, or a smaller number."""
    low, high, share = np.empty(3, np.int64), np.empty(3, np.int64), np.empty(3)
    seen, votes = np.empty(8, np.uint16), np.empty(8)
    for n in range(first, last):
        found[n] = 0
        held = True
        for d in range(3):
            x = index[n, d]
            held &= 0 <= np.ceil(x - 0.5 - _HALF_WAY) < labels.shape[d]
        if not held:
            continue
        for d in range(3):
            x = min(max(index[n, d], 0.0), labels.shape[d] - 1.0)
            low[d] = int(np.floor(x))
            share[d] = x - low[d]
            high[d] = min(low[d] + 1, labels.shape[d] - 1)
        alike = True
        for c in range(8):
            i = high[0] if c & 4 else low[0]
            j = high[1] if c & 2 else low[1]
            k = high[2] if c & 1 else low[2]
            seen[c] = labels[i, j, k]
            alike &= seen[c] == seen[0]
        if alike:
            found[n] = seen[0]
            continue
        for c in range(8):
            weight = share[0] if c & 4 else 1.0 - share[0]
            weight *= share[1] if c & 2 else 1.0 - share[1]
            weight *= share[2] if c & 1 else 1.0 - share[2]
            votes[c] = weight
        holder = 0
        for d in range(3):
            holder += (4 >> d) if share[d] > 0.5 + _HALF_WAY else 0
        winner, most = seen[holder], -1.0
        for c in range(-1, 8):
            label = seen[holder if c < 0 else c]
            total = 0.0
            for o in range(8):
                total += votes[o] if seen[o] == label else 0.0
            tied = abs(total - most) <= _TIE and winner != seen[holder] and label < winner
            if total > most + _TIE or tied:
                winner, most = label, total
        found[n] = winner
