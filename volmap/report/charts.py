"""The colour bar, the histogram of volume ratios and the course of the solve."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.ticker import FixedLocator, MaxNLocator, NullFormatter, NullLocator
from numpy.typing import NDArray

from volmap.report import scales
from volmap.report.pictures import FONT, WIDTH_IN, new_figure, write
from volmap.types import IterationRecord

Floats = NDArray[np.float64]

BAR_IN = 0.78
_ROW_IN = 1.05


def colour_bar(figure: Figure, limit: float, *, inverted: bool = False) -> None:
    """Draw the scale of volume ratios along the foot of a figure that keeps `BAR_IN` inches free.

    Parameters
    ----------
    limit : float
        log2 J at its ends.
    inverted : bool
        Also explain the colour of tets whose J is not positive.
    """
    tall = figure.get_figheight()
    axes = figure.add_axes((0.26, 0.36 / tall, 0.48, 0.15 / tall))
    strip = scales.ratio_colours(np.linspace(-1, 1, 401))[None]
    axes.imshow(strip, extent=(-limit, limit, 0, 1), aspect="auto", interpolation="nearest")
    _ratio_axis(axes, limit)
    axes.set_yticks([])
    _ways(figure, (0.36 + 0.045) / tall, (0.25, "right"), (0.75, "left"))
    words = scales.RATIO
    if inverted:
        words += ";  ■ not positive: inverted"
    write(
        figure, 0.5, 0.03 / tall, words, align="center", colour=scales.INVERTED if inverted else scales.QUIET
    )


def _ways(figure: Figure, y: float, shrank: tuple[float, str], grew: tuple[float, str]) -> None:
    """The words at the two ends of a scale: (x, alignment) each, in shares of the figure."""
    for (x, align), words, ink in (
        (shrank, f"◀ {scales.SHRANK}", scales.SHRANK_INK),
        (grew, f"{scales.GREW} ▶", scales.GREW_INK),
    ):
        write(figure, x, y, words, size=9.5, weight="bold", align=align, colour=ink)


def _ratio_axis(axes: Axes, limit: float) -> None:
    ticks = scales.ratio_ticks(limit)
    axes.xaxis.set_major_locator(FixedLocator([t for t, _ in ticks]))
    axes.set_xticks([t for t, _ in ticks], [w for _, w in ticks])
    _style(axes)


def _style(axes: Axes) -> None:
    axes.tick_params(labelsize=8.5, length=3, color=scales.QUIET, labelcolor=scales.INK, labelfontfamily=FONT)
    for name, spine in axes.spines.items():
        spine.set_color(scales.QUIET)
        spine.set_linewidth(0.7)
        spine.set_visible(name in ("left", "bottom"))


def histogram(
    ratios: Sequence[Floats],
    volumes: Sequence[Floats],
    names: Sequence[str],
    voxel_ratios: Sequence[float],
    limit: float,
) -> Figure:
    """Share of a label's volume by log2 of its volume ratio: a row a label, bars in the pictures' colours.

    Parameters
    ----------
    ratios, volumes : sequence of (k,) float64
        J and source volume of each tet, a label an entry.
    names : sequence of str
    voxel_ratios : sequence of float
        Target over source volume of the voxels, marked in each row.
    limit : float
        log2 J at the ends of the colour scale; what lies beyond is gathered in the outermost bars.
    """
    tall = _ROW_IN * len(names) + 0.62
    figure = new_figure(WIDTH_IN, tall)
    reach = 1.25 * limit
    edges = np.linspace(-reach, reach, 51)
    for row, name in enumerate(names):
        bottom = tall - (row + 1) * _ROW_IN + 0.02
        axes = figure.add_axes((0.20, bottom / tall, 0.74, (_ROW_IN - 0.16) / tall))
        _bars(axes, ratios[row], volumes[row], edges, limit)
        _mark_voxel_ratio(axes, voxel_ratios[row], reach)
        _ratio_axis(axes, limit)
        axes.set_xlim(-reach, reach)
        if row < len(names) - 1:
            axes.xaxis.set_major_formatter(NullFormatter())
        write(figure, 0.005, (bottom + 0.5) / tall, name, size=9.5, weight="bold")
        total = f"{scales.number(float(volumes[row].sum()))} mm³"
        write(figure, 0.005, (bottom + 0.32) / tall, total, size=8.5, colour=scales.QUIET)
    write(
        figure,
        0.57,
        0.10 / tall,
        scales.RATIO + ", logarithmic",
        size=8.5,
        align="center",
        colour=scales.QUIET,
    )
    write(figure, 0.20, 0.10 / tall, f"◀ {scales.SHRANK}", size=9, weight="bold", colour="#1b4f8f")
    write(
        figure, 0.94, 0.10 / tall, f"{scales.GREW} ▶", size=9, weight="bold", align="right", colour="#8a3f00"
    )
    return figure


def _bars(axes: Axes, ratio: Floats, volume: Floats, edges: Floats, limit: float) -> None:
    good = np.isfinite(ratio) & (ratio > 0)
    inside = np.clip(np.log2(ratio[good]), edges[0] + 1e-9, edges[-1] - 1e-9)
    share, _ = np.histogram(inside, edges, weights=volume[good])
    share = 100 * share / max(float(volume.sum()), 1e-300)
    middle = 0.5 * (edges[1:] + edges[:-1])
    colours = scales.ratio_colours(middle / limit)
    axes.bar(middle, share, np.diff(edges), color=colours, edgecolor="#6d737c", linewidth=0.5)
    axes.axvline(0.0, color=scales.INK, lw=0.8)
    axes.yaxis.set_major_locator(MaxNLocator(2, integer=True))
    axes.yaxis.set_major_formatter(lambda v, _: f"{v:g} %")
    axes.set_ylim(0, max(float(share.max()), 1e-3) * 1.18)


def _mark_voxel_ratio(axes: Axes, ratio: float, reach: float) -> None:
    if not (np.isfinite(ratio) and ratio > 0):
        return
    at = float(np.clip(np.log2(ratio), -reach, reach))
    axes.axvline(at, color=scales.INK, lw=1.3, dashes=(3, 2))
    top = axes.get_ylim()[1]
    write(axes, at, top, f" voxels {scales.number(ratio, 3)}", size=8, rise="top", halo=True)


def solve_course(history: Sequence[IterationRecord]) -> Figure:
    """Boundary residual, boundary weight and smallest volume ratio by Newton step."""
    figure = new_figure(WIDTH_IN, 2.25)
    rows = (
        ("boundary residual, mm (RMS)", [h.residual_mm for h in history]),
        ("boundary weight, 1/mm²", [h.boundary_weight for h in history]),
        ("smallest volume ratio J", [h.smallest_ratio for h in history]),
    )
    steps = [h.step for h in history]
    for k, (words, values) in enumerate(rows):
        left = 0.055 + 0.335 * k
        axes = figure.add_axes((left, 0.20, 0.265, 0.64))
        _course(axes, steps, np.array(values, np.float64), words == rows[1][0])
        write(figure, left, 0.90, words, size=9, weight="bold")
        write(figure, left + 0.1325, 0.025, "Newton step", align="center", colour=scales.QUIET)
    return figure


def _course(axes: Axes, steps: list[int], values: Floats, stairs: bool) -> None:
    axes.plot(steps, values, color="#2b5f8c", lw=1.6, drawstyle="steps-mid" if stairs else "default")
    if not stairs:
        axes.plot(steps, values, "o", color="#2b5f8c", ms=2.6)
    finite = values[np.isfinite(values)]
    if finite.size and finite.min() > 0:
        axes.set_yscale("log")
        low, high = finite.min() / 1.5, finite.max() * 1.5
        axes.set_ylim(low, high)
        axes.yaxis.set_major_locator(FixedLocator(_log_ticks(low, high)))
        axes.yaxis.set_major_formatter(lambda v, _: scales.number(float(v), 2))
        axes.yaxis.set_minor_locator(NullLocator())
    axes.xaxis.set_major_locator(MaxNLocator(6, integer=True))
    axes.grid(axis="y", color=scales.RULE, lw=0.6)
    _style(axes)


def _log_ticks(low: float, high: float) -> list[float]:
    """Round values between two ends: 1, 2 and 5 when those are few, else powers of ten."""
    powers = range(int(np.floor(np.log10(low))), int(np.ceil(np.log10(high))) + 1)
    close = [k * 10.0**p for p in powers for k in (1, 2, 5) if low <= k * 10.0**p <= high]
    return close if len(close) <= 6 else [10.0**p for p in powers if low <= 10.0**p <= high]
