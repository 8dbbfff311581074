"""Flat cuts through voxels, with the label outlines of both scans."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
from numpy.typing import NDArray
from scipy.ndimage import map_coordinates

from volmap.kernels import planecuts
from volmap.report import scales
from volmap.report.pictures import Line
from volmap.report.views import View
from volmap.types import Grid, ImageVolume, LabelVolume, Surface

Floats = NDArray[np.float64]


def plane_points(view: View, centre: Floats, *, mm_per_px: float, height: int, width: int) -> Floats:
    """(h, w, 3) world places of the pixels of a cut through `centre`, square to the line of sight."""
    columns = (np.arange(width) + 0.5 - width / 2) * mm_per_px
    rows = (height / 2 - np.arange(height) - 0.5) * mm_per_px
    right, up = np.array(view.right), np.array(view.up)
    return np.asarray(centre + columns[None, :, None] * right + rows[:, None, None] * up)


def _sample(grid: Grid, values: NDArray[np.generic], places: Floats, order: int) -> Floats:
    index = grid.to_index(places.reshape(-1, 3)).T
    found = map_coordinates(values, index, order=order, mode="constant", cval=0, prefilter=False)
    half = 0.5
    top = np.array(grid.shape)[:, None] - half
    outside = ((index < -half) | (index > top)).any(axis=0)
    return np.where(outside, np.nan, found.astype(np.float64)).reshape(places.shape[:2])


def image_ground(image: ImageVolume, places: Floats, window: tuple[float, float]) -> Floats:
    """(h, w, 3) greys of an image, linear between voxels; near-white outside the grid."""
    values = np.nan_to_num(image.values, nan=window[0], posinf=window[1], neginf=window[0])
    low, high = window
    grey = (_sample(image.grid, values, places, 1) - low) / max(high - low, 1e-30)
    return np.repeat(np.where(np.isnan(grey), 0.93, np.clip(grey, 0, 1))[..., None], 3, axis=2)


def image_window(image: ImageVolume) -> tuple[float, float]:
    """Intensities shown black and white: the 1st and 99.5th percentile of the finite voxels."""
    finite = image.values[np.isfinite(image.values)]
    if not finite.size:
        return 0.0, 1.0
    low, high = np.percentile(finite[:: max(1, finite.size // 500_000)], [1.0, 99.5])
    return float(low), float(high)


def label_ground(volume: LabelVolume, places: Floats, colours: Mapping[int, str]) -> Floats:
    """(h, w, 3) pale tints of the label voxels, each voxel as the block it is."""
    found = np.nan_to_num(_sample(volume.grid, volume.labels, places, 0), nan=0.0).astype(np.int64)
    result = np.full((*found.shape, 3), 0.955)
    for label in volume.present:
        tint = np.array(scales.channels(colours.get(label, scales.UNNAMED)))
        result[found == label] = 0.62 + 0.38 * tint
    return result


def outlines(
    surface: Surface,
    view: View,
    centre: Floats,
    *,
    mm_per_px: float,
    height: int,
    width: int,
    colours: Mapping[int, str],
    dashed: bool,
) -> list[Line]:
    """Where label surfaces cross a plane, exactly, as lines in panel pixels in the inner label's colour."""
    lines: list[Line] = []
    values = (surface.points - centre) @ view.toward
    for pair in surface.pairs:
        triangles = surface.triangles[(surface.sides == pair).all(axis=1)]
        cut = planecuts.cut_triangles(values, triangles)
        flat = (cut.at(surface.points) - centre) @ view.axes.T[:, :2] / mm_per_px
        xy = np.stack([width / 2 + flat[:, 0], height / 2 - flat[:, 1]], axis=1)
        colour = colours.get(pair[0], scales.UNNAMED)
        lines += [Line(xy[chain], colour, dashed) for chain in planecuts.chains(cut.cells)]
    return lines
