"""Polar decomposition of 3x3 matrices."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]


def rotations(gradients: Floats) -> Floats:
    """R of F = R U: the rotation nearest to each matrix.

    By singular values, F = A S B^T and R = A B^T (Higham, SIAM J. Sci. Stat. Comput. 7, 1986, section 1).

    Parameters
    ----------
    gradients : (n, 3, 3) float64

    Returns
    -------
    (n, 3, 3) float64
        NaN where det F is not above 0: such a matrix mirrors or flattens and has no rotation of that kind.
    """
    gradients = np.asarray(gradients, np.float64)
    found = np.full(gradients.shape, np.nan)
    with np.errstate(invalid="ignore"):
        whole = np.linalg.det(gradients) > 0
    left, _, right = np.linalg.svd(gradients[whole])
    found[whole] = left @ right
    return found
