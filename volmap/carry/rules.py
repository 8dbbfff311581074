"""Rules applied: the numbers of a quantity, given the gradient of the map."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from volmap.kernels.polar import rotations
from volmap.kernels.threads import on_threads
from volmap.types.quantities import Rule, require_rule

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
_BLOCK = 16384  # values whose matrices stay in the cache


class Factors(NamedTuple):
    """What a rule makes of a gradient: ``scale * M v``, or ``scale * M T M^T``.

    Attributes
    ----------
    matrices : (m, 3, 3) float64 or None
        M; None where components stay as they are (scalars).
    scales : (m,) float64 or None
        None for 1.
    """

    matrices: Floats | None
    scales: Floats | None


def rule_factors(rule: Rule, gradients: Floats) -> Factors:
    """M and scale of a rule, one for each gradient.

    Parameters
    ----------
    rule : Rule
    gradients : (m, 3, 3) float64
        F, ``dy = F dx``: of tets, or of places.

    Returns
    -------
    Factors
        NaN where det F is not above 0 (a tet turned inside out), except for `value`.
    """
    if rule is Rule.VALUE:
        return Factors(None, None)
    gradients = np.asarray(gradients, np.float64)
    with np.errstate(invalid="ignore"):
        ratio = np.linalg.det(gradients)
        ratio = np.where(ratio > 0, ratio, np.nan)
    if rule is Rule.DENSITY:
        return Factors(None, 1.0 / ratio)
    if rule is Rule.TURN:
        return Factors(rotations(gradients), None)
    whole = ~np.isnan(ratio)
    if rule is Rule.GRADIENT:
        matrices = np.full(gradients.shape, np.nan)
        matrices[whole] = np.linalg.inv(gradients[whole]).swapaxes(1, 2)
        return Factors(matrices, None)
    matrices = np.where(whole[:, None, None], gradients, np.nan)
    return Factors(matrices, 1.0 / ratio if rule is Rule.FLUX else None)


def apply_rule(rule: Rule | str, values: Floats, gradients: Floats, of_value: Ints | None = None) -> Floats:
    """Values as they are after carrying.

    Parameters
    ----------
    rule : Rule
    values : (n,), (n, 3) or (n, 3, 3) float64
        Scalars, vectors or symmetric tensors, components along x, y, z of the world.
    gradients : (n, 3, 3) or (m, 3, 3) float64
        F where each value was taken, or of every tet when `of_value` is given.
    of_value : (n,) int64, optional
        Which of the gradients belongs to each value (the tet that holds its place); -1 for none.

    Returns
    -------
    Same shape as `values`, float64
        NaN where `of_value` is -1, and where det F is not above 0 (except for `value`).

    Raises
    ------
    InputError
        A rule for quantities of another rank.
    """
    values = np.asarray(values, np.float64)
    rule = require_rule(rule, values.ndim - 1)
    factors = rule_factors(rule, gradients)
    carried = np.empty_like(values)
    on_threads(_apply, len(values), factors, values, of_value, carried, fewest=_BLOCK)
    return carried


def _apply(
    first: int, last: int, factors: Factors, values: Floats, of_value: Ints | None, carried: Floats
) -> None:
    """Some of the values, a block at a time."""
    for start in range(first, last, _BLOCK):
        part = slice(start, min(start + _BLOCK, last))
        which = np.arange(part.start, part.stop) if of_value is None else np.maximum(of_value[part], 0)
        here = values[part]
        if factors.matrices is not None:
            here = _moved(factors.matrices.take(which, axis=0), here)
        if factors.scales is not None:
            here = here * factors.scales.take(which).reshape(-1, *(1,) * (values.ndim - 1))
        carried[part] = here
        if of_value is not None:
            carried[part][np.asarray(of_value[part]) < 0] = np.nan


def _moved(matrices: Floats, values: Floats) -> Floats:
    """M v, or M T M^T made exactly symmetric."""
    if values.ndim == 2:
        return np.asarray((matrices @ values[..., None])[..., 0])
    moved = matrices @ values @ matrices.swapaxes(1, 2)
    return np.asarray(0.5 * (moved + moved.swapaxes(1, 2)))
