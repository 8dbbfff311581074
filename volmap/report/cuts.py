"""Flat cuts through voxels, with the label outlines of both scans."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.ndimage import map_coordinates

from volmap.kernels import planecuts
from volmap.report import scales
from volmap.report.pictures import Line
from volmap.report.views import View
from volmap.types import Grid, ImageVolume, LabelVolume, Surface

Floats = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class Plane:
    """A flat cut as a picture: square to the line of sight, `centre` in its middle.

    Parameters
    ----------
    view : View
    centre : (3,) float64, mm
    mm_per_px : float
    height, width : int
        Pixels.
    """

    view: View
    centre: Floats
    mm_per_px: float
    height: int
    width: int

    def indices(self, grid: Grid) -> Floats:
        """(3, h, w) continuous voxel indices of the pixels."""
        right, down = np.array(self.view.right), -np.array(self.view.up)
        corner = self.centre + self.mm_per_px * (
            right * (0.5 - self.width / 2) + down * (0.5 - self.height / 2)
        )
        steps = self.mm_per_px * np.array([right, down])
        start, across, along = grid.to_index(np.array([corner, corner + steps[0], corner + steps[1]]))
        columns, rows = np.arange(self.width), np.arange(self.height)[:, None]
        return np.stack(
            [start[d] + (across - start)[d] * columns + (along - start)[d] * rows for d in range(3)]
        )

    def pixels(self, points: Floats) -> Floats:
        """(k, 2) places of world points on the picture, x to the right and y downward."""
        flat = (points - self.centre) @ self.view.axes.T[:, :2] / self.mm_per_px
        return np.stack([self.width / 2 + flat[:, 0], self.height / 2 - flat[:, 1]], axis=1)


def _sample(grid: Grid, values: NDArray[np.generic], plane: Plane, order: int) -> Floats:
    index = plane.indices(grid)
    found = map_coordinates(values, index, order=order, mode="nearest", prefilter=False)
    last = np.array(grid.shape)[:, None, None] - 0.5
    outside = ((index < -0.5) | (index > last)).any(axis=0)
    return np.where(outside, np.nan, found.astype(np.float64))


def image_ground(image: ImageVolume, plane: Plane, window: tuple[float, float]) -> Floats:
    """(h, w, 3) greys of an image, linear between voxels; near-white outside the grid."""
    values = np.nan_to_num(image.values, nan=window[0], posinf=window[1], neginf=window[0])
    low, high = window
    grey = (_sample(image.grid, values, plane, 1) - low) / max(high - low, 1e-30)
    return np.repeat(np.where(np.isnan(grey), 0.93, np.clip(grey, 0, 1))[..., None], 3, axis=2)


def image_window(image: ImageVolume) -> tuple[float, float]:
    """Intensities shown black and white: the 1st and 99.9th percentile of the finite voxels."""
    finite = image.values[np.isfinite(image.values)]
    if not finite.size:
        return 0.0, 1.0
    low, high = np.percentile(finite[:: max(1, finite.size // 500_000)], [1.0, 99.9])
    return float(low), float(high)


def label_ground(volume: LabelVolume, plane: Plane, colours: Mapping[int, str]) -> Floats:
    """(h, w, 3) pale tints of the label voxels, each voxel as the block it is."""
    found = np.nan_to_num(_sample(volume.grid, volume.labels, plane, 0), nan=0.0).astype(np.int64)
    result = np.full((*found.shape, 3), 0.955)
    for label in volume.present:
        tint = np.array(scales.channels(colours.get(label, scales.UNNAMED)))
        result[found == label] = 0.62 + 0.38 * tint
    return result


def outlines(surface: Surface, plane: Plane, colours: Mapping[int, str], *, dashed: bool) -> list[Line]:
    """Where label surfaces cross a plane, exactly, as lines in panel pixels in the inner label's colour."""
    lines: list[Line] = []
    values = (surface.points - plane.centre) @ plane.view.toward
    for pair in surface.pairs:
        triangles = surface.triangles[(surface.sides == pair).all(axis=1)]
        cut = planecuts.cut_triangles(values, triangles)
        xy = plane.pixels(cut.at(surface.points))
        colour = colours.get(pair[0], scales.UNNAMED)
        lines += [Line(xy[chain], colour, dashed) for chain in planecuts.chains(cut.cells)]
    return lines
