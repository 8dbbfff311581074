"""Places a reader should look at."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
from numpy.typing import NDArray

MOST = 10
_LOOKED_AT = 2000


def place(point: NDArray[np.float64], space: str, note: str) -> dict[str, Any]:
    """One place, as plain values; `space` is 'source' or 'target'."""
    return {"point_mm": [round(float(c), 3) for c in point], "space": space, "note": note}


def largest(values: NDArray[np.float64]) -> NDArray[np.int64]:
    """Rows of the largest values, largest first, ties in order; a few thousand at most."""
    if len(values) > _LOOKED_AT:
        rows = np.sort(np.argpartition(-values, _LOOKED_AT)[:_LOOKED_AT])
    else:
        rows = np.arange(len(values))
    return np.asarray(rows[np.argsort(-values[rows], kind="stable")])


def worst_places(
    points: NDArray[np.float64],
    values: NDArray[np.float64],
    *,
    space: str,
    note: Callable[[int], str],
    apart_mm: float,
) -> list[tuple[float, dict[str, Any]]]:
    """The largest values that are not neighbours of each other, worst first.

    Parameters
    ----------
    points : (n, 3) float64, mm
    values : (n,) float64
        Larger is worse.
    space : str
    note : callable
        Says what is wrong at row i.
    apart_mm : float
        Places closer than this to a worse one are left out.

    Returns
    -------
    list of (value, place)
        At most MOST.
    """
    order = largest(values)
    kept: list[int] = []
    for row in order:
        if len(kept) == MOST:
            break
        if all(np.linalg.norm(points[row] - points[k]) >= apart_mm for k in kept):
            kept.append(int(row))
    return [(float(values[k]), place(points[k], space, note(k))) for k in kept]


def ranked(found: list[tuple[float, dict[str, Any]]]) -> list[dict[str, Any]]:
    """The worst places of several lists together."""
    return [p for _, p in sorted(found, key=lambda item: -item[0])[:MOST]]
