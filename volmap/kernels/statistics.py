"""Weighted means and quantiles."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray


def weighted_mean(values: NDArray[np.float64], weights: NDArray[np.float64]) -> float:
    """Mean of values that stand for `weights` (areas, volumes) each."""
    return float((values * weights).sum() / weights.sum())


def weighted_quantile(values: NDArray[np.float64], weights: NDArray[np.float64], share: float) -> float:
    """The smallest value below or at which at least `share` of the weight lies."""
    return weighted_quantiles(values, weights, (share,))[0]


def weighted_quantiles(
    values: NDArray[np.float64], weights: NDArray[np.float64], shares: Sequence[float]
) -> list[float]:
    """`weighted_quantile` for several shares, sorted once."""
    order = np.argsort(values, kind="stable")
    total = np.cumsum(weights[order])
    rows = np.searchsorted(total, np.asarray(shares) * total[-1] * (1 - 1e-12))
    return [float(values[order[min(int(row), len(order) - 1)]]) for row in rows]


def even_summary(values: NDArray[np.float64]) -> dict[str, float]:
    """`summary` of values that all weigh the same, without sorting them all."""
    n = len(values)
    middle, high = (max(int(np.ceil(share * n * (1 - 1e-12))) - 1, 0) for share in (0.5, 0.95))
    ordered = np.partition(values, (middle, high))
    return {
        "mean": float(values.mean()),
        "p50": float(ordered[middle]),
        "p95": float(ordered[high]),
        "max": float(values.max()),
    }


def summary(values: NDArray[np.float64], weights: NDArray[np.float64]) -> dict[str, float]:
    """Mean, median, 95th percentile and largest value."""
    return {
        "mean": weighted_mean(values, weights),
        "p50": weighted_quantile(values, weights, 0.5),
        "p95": weighted_quantile(values, weights, 0.95),
        "max": float(values.max()),
    }
