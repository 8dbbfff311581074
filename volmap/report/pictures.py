"""Panels side by side on one picture, and pictures as text."""

from __future__ import annotations

import base64
import io
from collections.abc import Sequence
from dataclasses import dataclass, field
from functools import cache
from typing import Any

import numpy as np
from matplotlib import font_manager
from matplotlib.axes import Axes
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.figure import Figure
from matplotlib.ft2font import FT2Font
from numpy.typing import NDArray
from PIL import Image

from volmap.report import scales
from volmap.report.views import View, round_length

Floats = NDArray[np.float64]

DPI = 144
WIDTH_IN = 10.6
FONT = "DejaVu Sans"
_GAP_IN, _HEAD_IN = 0.10, 0.27


@dataclass(frozen=True)
class Picture:
    """A finished picture.

    Parameters
    ----------
    png : bytes
    alt : str
        What it shows, for who cannot see it.
    caption : str
    width_px : int
    """

    png: bytes
    alt: str
    caption: str
    width_px: int

    @property
    def uri(self) -> str:
        """The picture as a data address."""
        return "data:image/png;base64," + base64.b64encode(self.png).decode("ascii")


@dataclass(frozen=True, eq=False)
class Line:
    """A line on a panel, in panel pixels."""

    xy: Floats
    colour: str
    dashed: bool = False


@dataclass(frozen=True, eq=False)
class Panel:
    """One view of one body.

    Parameters
    ----------
    rgb : (h, w, 3) float, 0 to 1
    heading : str
    view : View
    mm_per_px : float
    slanted : bool
        Draw the three world directions in a corner instead of letters at the sides.
    lines : sequence of Line
    """

    rgb: NDArray[np.floating[Any]]
    heading: str
    view: View
    mm_per_px: float
    slanted: bool = False
    lines: Sequence[Line] = field(default_factory=tuple)


def panel_shape(columns: int, tall: float) -> tuple[int, int]:
    """Height and width in pixels of a panel of which `columns` share a row; `tall` is height over width."""
    width = (WIDTH_IN - _GAP_IN * (columns - 1)) / columns
    return round(width * tall * DPI), round(width * DPI)


def plate(rows: Sequence[Sequence[Panel]], *, foot_in: float = 0.0) -> Figure:
    """A figure of panels; `foot_in` inches stay free underneath."""
    columns = max(len(row) for row in rows)
    height_px, width_px = rows[0][0].rgb.shape[:2]
    w, h = width_px / DPI, height_px / DPI
    total = len(rows) * (h + _HEAD_IN) + (len(rows) - 1) * _GAP_IN + foot_in
    wide = columns * w + (columns - 1) * _GAP_IN + 2 / DPI
    figure = new_figure(wide, total)
    for r, row in enumerate(rows):
        top = total - r * (h + _HEAD_IN + _GAP_IN) - _HEAD_IN
        for c, panel in enumerate(row):
            left = c * (w + _GAP_IN)
            axes = figure.add_axes((left / wide, (top - h) / total, w / wide, h / total))
            _draw_panel(axes, panel)
            write(figure, left / wide, (top + 0.075) / total, panel.heading, size=9.5, weight="bold")
    return figure


def new_figure(width_in: float, height_in: float) -> Figure:
    """An empty white figure that is drawn without any display."""
    return Figure(figsize=(width_in, height_in), dpi=DPI, facecolor=scales.PAPER)


def write(
    where: Figure | Axes,
    x: float,
    y: float,
    text: str,
    *,
    size: float = 8.5,
    colour: str = scales.INK,
    weight: str = "normal",
    align: str = "left",
    rise: str = "baseline",
    halo: bool = False,
) -> None:
    """Put words on a figure (in shares of it) or on axes (in their data)."""
    drawn = where.text(x, y, text, fontsize=size, color=colour, fontweight=weight, ha=align, va=rise)
    drawn.set_fontfamily(FONT)
    drawn.set_parse_math(False)
    if halo:
        drawn.set_bbox(
            {"boxstyle": "round,pad=0.16", "facecolor": scales.PAPER, "alpha": 0.82, "linewidth": 0}
        )


def _draw_panel(axes: Axes, panel: Panel) -> None:
    height, width = panel.rgb.shape[:2]
    axes.imshow(
        np.clip(panel.rgb, 0, 1), interpolation="nearest", extent=(0, width, height, 0), aspect="auto"
    )
    for line in panel.lines:
        _draw_line(axes, line)
    axes.set_xlim(0, width)
    axes.set_ylim(height, 0)
    axes.set_xticks([])
    axes.set_yticks([])
    for side in axes.spines.values():
        side.set_color(scales.RULE)
        side.set_linewidth(0.7)
    if panel.slanted:
        _draw_directions(axes, panel)
    else:
        _draw_letters(axes, panel)
    _draw_length(axes, panel)


def _draw_line(axes: Axes, line: Line) -> None:
    x, y = line.xy.T
    if line.dashed:
        axes.plot(x, y, color="white", lw=1.9, alpha=0.9, solid_capstyle="butt")
        axes.plot(x, y, color="black", lw=1.0, dashes=(4.2, 3.0), dash_capstyle="butt")
    else:
        axes.plot(x, y, color="black", lw=3.4, alpha=0.55, solid_joinstyle="round")
        axes.plot(x, y, color=line.colour, lw=2.4, solid_joinstyle="round")


def _draw_letters(axes: Axes, panel: Panel) -> None:
    height, width = panel.rgb.shape[:2]
    left, right, top, bottom = panel.view.letters
    inset = 13
    for x, y, letter in (
        (inset, height / 2, left),
        (width - inset, height / 2, right),
        (width / 2, inset, top),
        (width / 2, height - inset, bottom),
    ):
        write(axes, x, y, letter, size=10, weight="bold", align="center", rise="center_baseline", halo=True)


def _draw_directions(axes: Axes, panel: Panel) -> None:
    """Three short arrows toward R, A and S."""
    height, _ = panel.rgb.shape[:2]
    origin = np.array([52.0, height - 52.0])
    for letter, direction in zip("RAS", np.eye(3), strict=True):
        x, y, _ = panel.view.axes @ direction
        tip = origin + 30.0 * np.array([x, -y])
        axes.plot(*np.array([origin, tip]).T, color=scales.INK, lw=1.3, solid_capstyle="round")
        at = origin + 41.0 * np.array([x, -y])
        write(
            axes,
            float(at[0]),
            float(at[1]),
            letter,
            size=9,
            weight="bold",
            align="center",
            rise="center_baseline",
            halo=True,
        )


def _draw_length(axes: Axes, panel: Panel) -> None:
    height, width = panel.rgb.shape[:2]
    length = round_length(0.3 * width * panel.mm_per_px)
    x1, y = width - 14.0, height - 12.0
    x0 = x1 - length / panel.mm_per_px
    axes.plot([x0, x1], [y, y], color=scales.PAPER, lw=4.2, solid_capstyle="butt")
    axes.plot([x0, x1], [y, y], color=scales.INK, lw=2.0, solid_capstyle="butt")
    write(axes, x1, y - 9, f"{scales.number(length)} mm", size=8, align="right", halo=True)


def finish(figure: Figure, *, alt: str, caption: str) -> Picture:
    """The figure as a picture; the same figure gives the same bytes."""
    canvas = FigureCanvasAgg(figure)
    canvas.draw()  # type: ignore[no-untyped-call]
    drawn = np.asarray(canvas.buffer_rgba())[..., :3]  # type: ignore[no-untyped-call]
    buffer = io.BytesIO()
    Image.fromarray(np.ascontiguousarray(drawn)).save(buffer, format="png", compress_level=4)
    return Picture(buffer.getvalue(), alt, caption, drawn.shape[1])


def drawable(name: str, otherwise: str) -> str:
    """The name, when the font of the pictures has every character of it; `otherwise` when not."""
    fits = name and all(ord(c) in _characters() and c.isprintable() for c in name)
    return (name if len(name) <= 28 else name[:27] + "…") if fits else otherwise


@cache
def _characters() -> frozenset[int]:
    return frozenset(FT2Font(font_manager.findfont(FONT)).get_charmap())
