"""Values between voxel centres: trilinear, or by cubic B-splines."""

from __future__ import annotations

from collections.abc import Callable
from concurrent.futures import ThreadPoolExecutor

import numba
import numpy as np
from numpy.typing import NDArray
from scipy import ndimage

from volmap.kernels.trilinear import sample

Floats = NDArray[np.float64]
Interpolator = Callable[[Floats], Floats]
IMAGE_SENTENCES = {
    "linear": "trilinear between voxel centres",
    "cubic": "cubic B-splines through the values at voxel centres, mirrored at the outermost of them; a NaN "
    "counts as the nearest value",
}
_FEWEST = 10_000  # places a thread is woken for


def interpolator(values: NDArray[np.float32], mode: str) -> Interpolator:
    """A function from places, (n, 3) continuous voxel indices, to values, (n, c).

    Both kinds are defined at the same places: where every one of the (up to eight) voxels around with a
    share in the trilinear answer exists and is not NaN.  Elsewhere NaN.

    Parameters
    ----------
    values : (I, J, K, c) float32
        NaN where not defined.
    mode : 'linear' or 'cubic'
        'cubic' is the tensor product of cubic B-splines whose coefficients are found by prefiltering (Unser,
        IEEE Signal Process. Mag. 16(6), 1999), so that they pass through the values; the volume is continued
        by mirroring at the outermost centres.  Coefficients depend on all values around, so for them NaN
        takes the value of the nearest voxel that has one.  Cubic values may overshoot at edges.
    """
    if mode == "linear":
        return lambda index: sample(values, index)
    return _cubic(values)


def _cubic(values: NDArray[np.float32]) -> Interpolator:
    coefficients = [_coefficients(values[..., c]) for c in range(values.shape[3])]

    def at(index: Floats) -> Floats:
        found = sample(values, index)
        known = np.flatnonzero(~np.isnan(found[:, 0]))
        places = np.ascontiguousarray(index[known].T)
        for c, spline in enumerate(coefficients):
            found[known, c] = _on_threads(spline, places)
        return found

    return at


def _coefficients(values: NDArray[np.float32]) -> Floats:
    filled = values.astype(np.float64)
    holes = ~np.isfinite(filled)
    if holes.all():
        return np.zeros_like(filled)
    if holes.any():
        nearest = ndimage.distance_transform_edt(holes, return_distances=False, return_indices=True)
        filled = filled[tuple(nearest)]
    return np.asarray(ndimage.spline_filter(filled, order=3, mode="mirror"))


def _on_threads(coefficients: Floats, places: Floats) -> Floats:
    """SciPy's sum of 64 products a place, shared out (it runs without Python's lock)."""
    n = places.shape[1]
    threads = max(1, min(int(numba.get_num_threads()), n // _FEWEST))
    bounds = [n * share // threads for share in range(threads + 1)]
    found = np.empty(n)

    def one(share: int) -> None:
        part = slice(bounds[share], bounds[share + 1])
        ndimage.map_coordinates(
            coefficients, places[:, part], output=found[part], order=3, mode="mirror", prefilter=False
        )

    with ThreadPoolExecutor(threads) as pool:
        list(pool.map(one, range(threads)))
    return found
