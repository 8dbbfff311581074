"""The one place that touches TetGen (Si 2015, AGPL-3.0-or-later): always in a child process.

TetGen can end the interpreter, run for ever, print, and write files into its working directory.  So a child
with a time limit works in a directory of its own, on coordinates centred and scaled to about one.
"""

from __future__ import annotations

import subprocess
import sys
import tempfile
from enum import StrEnum
from pathlib import Path
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

CHILD = """
import numpy, tetgen
given = numpy.load("given.npz")
mesher = tetgen.TetGen(given["points"], given["triangles"].astype(numpy.int32))
found = mesher.tetrahedralize(switches=str(given["switches"]))
numpy.savez("found.npz", points=found[0], tets=found[1])
"""


class Failure(StrEnum):
    """Why TetGen gave no mesh."""

    CRASHED = "the mesher stopped with an error"
    HUNG = "the mesher ran past its time limit"
    EMPTY = "the mesher found nothing to fill"


class Filled(NamedTuple):
    """Points (n, 3), mm, and tets (m, 4)."""

    points: Floats
    tets: Ints


def fill(points: Floats, triangles: Ints, *, switches: str, time_limit_s: float) -> Filled | Failure:
    """Run TetGen once on a closed surface.

    Parameters
    ----------
    points : (n, 3) float64, mm
    triangles : (m, 3) int64
    switches : str
        TetGen's; lengths and volumes in them are for coordinates divided by `scale_of`.
    time_limit_s : float

    Returns
    -------
    Filled or Failure
    """
    centre, scale = points.mean(axis=0), scale_of(points)
    with tempfile.TemporaryDirectory() as folder:
        given, found = Path(folder) / "given.npz", Path(folder) / "found.npz"
        np.savez(given, points=(points - centre) / scale, triangles=triangles, switches=switches)
        try:
            ended = subprocess.run(
                [sys.executable, "-c", CHILD],
                cwd=folder,
                capture_output=True,
                timeout=time_limit_s,
                check=False,
            )
        except subprocess.TimeoutExpired:
            return Failure.HUNG
        if ended.returncode != 0 or not found.exists():
            return Failure.CRASHED
        with np.load(found) as result:
            new_points, tets = result["points"] * scale + centre, result["tets"][:, :4].astype(np.int64)
    return Filled(new_points, tets) if len(tets) else Failure.EMPTY


def scale_of(points: Floats) -> float:
    """Largest distance of a coordinate from the mean point, mm: what coordinates are divided by."""
    return float(np.abs(points - points.mean(axis=0)).max())
