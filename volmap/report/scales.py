"""The words, colours and number formats of everything that shows a map to a reader.

The colour of a volume ratio is found in the perceptual space OKLab (Ottosson, "A perceptual color space for
image processing", 2020): no change is a neutral near-white, loss runs to blue and gain to orange, equally
light on both sides, so that a reader with any kind of colour vision, or a grey printer, sees *how much*, and
the words say which way.
"""

from __future__ import annotations

import math
from functools import cache

import numpy as np
from numpy.typing import ArrayLike, NDArray

from volmap.types import Verdict

Floats = NDArray[np.float64]

SHRANK, GREW, SAME = "shrank", "grew", "no change"
RATIO = "volume ratio J (target / source)"
INTERIOR = "The interior of a boundary-only map is the smoothest guess, not a measurement."
INK, PAPER, QUIET, RULE = "#1c1f24", "#ffffff", "#5a6069", "#d5d8dc"
BACKDROP = "#f4f3f0"
UNNAMED = "#8a8f98"
"""Colour of a label that the mesh does not have."""
SHRANK_INK, GREW_INK = "#1b4f8f", "#8a3f00"
INVERTED = "#c3158a"
"""Colour of a tet whose J is not positive: outside the scale, so that it cannot pass for a value of it."""

_SHRANK_HUE, _GREW_HUE = 255.0, 58.0
_CENTRE_LIGHTNESS, _END_LIGHTNESS = 0.965, 0.47
_END_CHROMA = 0.135

VERDICT_WORDS = {
    Verdict.PASS: "Passed",
    Verdict.WARN: "Passed with warnings",
    Verdict.FAIL: "Failed",
    Verdict.NOT_ASSESSED: "Not assessed",
}
GATE_WORDS = (
    VERDICT_WORDS
    | {Verdict.PASS: "pass", Verdict.WARN: "warn", Verdict.FAIL: "fail"}
    | {Verdict.NOT_ASSESSED: "not assessed"}
)
VERDICT_INKS = {
    Verdict.PASS: "#1d5c3f",
    Verdict.WARN: "#7a4b00",
    Verdict.FAIL: "#9b1c1c",
    Verdict.NOT_ASSESSED: "#4b5058",
}
VERDICT_TINTS = {
    Verdict.PASS: "#e8f3ec",
    Verdict.WARN: "#fbf1dc",
    Verdict.FAIL: "#fae7e6",
    Verdict.NOT_ASSESSED: "#eeeff1",
}


def srgb_from_oklch(lightness: ArrayLike, chroma: ArrayLike, hue_deg: ArrayLike) -> Floats:
    """(..., 3) sRGB, clipped to 0..1, of OKLab in polar form (Ottosson 2020)."""
    hue = np.radians(np.asarray(hue_deg, np.float64))
    lab = np.broadcast_arrays(
        np.asarray(lightness, np.float64), np.asarray(chroma) * np.cos(hue), np.asarray(chroma) * np.sin(hue)
    )
    to_lms = np.array(
        [
            [1.0, 0.3963377774, 0.2158037573],
            [1.0, -0.1055613458, -0.0638541728],
            [1.0, -0.0894841775, -1.2914855480],
        ]
    )
    to_rgb = np.array(
        [
            [4.0767416621, -3.3077115913, 0.2309699292],
            [-1.2684380046, 2.6097574011, -0.3413193965],
            [-0.0041960863, -0.7034186147, 1.7076147010],
        ]
    )
    linear = np.clip((np.stack(lab, axis=-1) @ to_lms.T) ** 3 @ to_rgb.T, 0.0, 1.0)
    curved = np.where(linear <= 0.0031308, 12.92 * linear, 1.055 * linear ** (1 / 2.4) - 0.055)
    return np.asarray(np.clip(curved, 0.0, 1.0))


def ratio_colours(position: ArrayLike) -> Floats:
    """(..., 3) sRGB for places on the scale: -1 shrank most, 0 no change, 1 grew most; beyond as the ends."""
    t = np.clip(np.asarray(position, np.float64), -1.0, 1.0)
    size = np.abs(t)
    lightness = _CENTRE_LIGHTNESS + (_END_LIGHTNESS - _CENTRE_LIGHTNESS) * size
    chroma = _END_CHROMA * np.sin(0.5 * np.pi * np.minimum(size / 0.8, 1.0))
    return srgb_from_oklch(lightness, chroma, np.where(t < 0, _SHRANK_HUE, _GREW_HUE))


@cache
def channels(colour: str) -> tuple[float, float, float]:
    """Red, green and blue, 0 to 1, of a colour written "#rrggbb"."""
    return int(colour[1:3], 16) / 255, int(colour[3:5], 16) / 255, int(colour[5:7], 16) / 255


def colours_of_ratio(ratio: ArrayLike, limit: float) -> Floats:
    """(n, 3) sRGB of volume ratios J.

    Parameters
    ----------
    ratio : (n,) float64
        Not positive or not finite: `INVERTED`.
    limit : float
        log2 J at the end of the scale.
    """
    J = np.asarray(ratio, np.float64)
    good = np.isfinite(J) & (J > 0)
    colours = ratio_colours(np.log2(np.where(good, J, 1.0)) / limit)
    colours[~good] = channels(INVERTED)
    return colours


def scale_limit(ratio: ArrayLike, weights: ArrayLike) -> float:
    """End of the colour scale, log2 J: a round ratio, 1.25 to 8, that holds 98 % of the volume."""
    J = np.asarray(ratio, np.float64)
    good = np.isfinite(J) & (J > 0)
    if not good.any():
        return 1.0
    reach = weighted_quantile(np.abs(np.log2(J[good])), np.asarray(weights, np.float64)[good], [0.98])[0]
    ends = [1.25, 1.5, 2.0, 3.0, 4.0, 6.0, 8.0]
    return math.log2(next((e for e in ends if math.log2(e) >= reach), ends[-1]))


def ratio_ticks(limit: float) -> list[tuple[float, str]]:
    """Ticks (log2 J, words) of a scale that ends at `limit`; symmetric, never crowded."""
    steps = {1.25: [1.1, 1.25], 1.5: [1.2, 1.5], 2.0: [1.4, 2.0], 3.0: [1.5, 2.0, 3.0], 4.0: [2.0, 4.0]}
    nearest = min([*steps, 6.0, 8.0], key=lambda e: abs(math.log2(e) - limit))
    above = steps.get(nearest, [2.0, 4.0, nearest])
    values = [1 / v for v in reversed(above)] + [1.0] + above
    return [(math.log2(v), number(v, 2)) for v in values]


def label_colours(labels: tuple[int, ...]) -> dict[int, str]:
    """A colour for each label: hues far apart, lightness alternating, none from the ratio scale's ends."""
    hues = [165.0, 330.0, 95.0, 290.0, 195.0, 15.0, 130.0, 230.0]
    found = {}
    for k, label in enumerate(labels):
        lightness = (0.60, 0.52, 0.74, 0.60)[k % 4]
        rgb = srgb_from_oklch(lightness, 0.13, hues[k % 8] + 11.0 * (k // 8))
        found[label] = "#" + "".join(f"{round(255 * v):02x}" for v in rgb)
    return found


def weighted_quantile(values: ArrayLike, weights: ArrayLike, shares: ArrayLike) -> Floats:
    """Quantiles of values that each stand for a weight (a volume): the middle of each weight is its place."""
    v, w = np.asarray(values, np.float64), np.abs(np.asarray(weights, np.float64))
    at = np.asarray(shares, np.float64)
    order = np.argsort(v, kind="stable")
    total = w.sum()
    if total <= 0:
        return np.asarray(np.quantile(v, at))
    place = (np.cumsum(w[order]) - 0.5 * w[order]) / total
    return np.asarray(np.interp(at, place, v[order]))


def number(value: object, digits: int = 3) -> str:
    """A number for reading: `digits` significant, a true minus, thin spaces in thousands; a dash for none."""
    if value is None:
        return "–"
    if isinstance(value, bool):
        return "yes" if value else "no"
    if not isinstance(value, int | float | np.integer | np.floating):
        return plain_text(str(value))
    x = float(value)
    if math.isnan(x):
        return "undefined"
    if math.isinf(x):
        return "infinite" if x > 0 else "−infinite"
    if x != 0 and not 1e-4 <= abs(x) < 1e9:
        mantissa, exponent = f"{x:.{digits - 1}e}".split("e")
        return f"{mantissa}×10^{int(exponent)}".replace("-", "−")
    if isinstance(value, int | np.integer):
        return f"{int(value):,}".replace(",", "\u202f").replace("-", "−")
    decimals = max(0, digits - 1 - (math.floor(math.log10(abs(x))) if x else 0))
    text = f"{x:,.{decimals}f}"
    text = text.rstrip("0").rstrip(".") if "." in text else text
    return text.replace(",", "\u202f").replace("-", "−")


def fixed(value: object, decimals: int) -> str:
    """A number with a fixed count of decimals, for columns that are read downward."""
    if value is None:
        return "–"
    x = float(value)  # type: ignore[arg-type]
    if not math.isfinite(x):
        return number(x)
    return f"{round(x, decimals) + 0.0:,.{decimals}f}".replace(",", "\u202f").replace("-", "−")


def mm(value: object) -> str:
    """A length with its unit."""
    return "–" if value is None else f"{fixed(value, 2)} mm"


def place(point: ArrayLike | None) -> str:
    """A place: x, y, z in world mm, one decimal."""
    if point is None:
        return "–"
    return "(" + ", ".join(fixed(v, 1) for v in np.asarray(point, np.float64).ravel()) + ")"


def plain_text(text: str, longest: int = 200) -> str:
    """Text of a user or a file, without control characters and not longer than `longest`."""
    clean = "".join(c if c.isprintable() or c in "\u00a0\u202f" else " " for c in text)
    return clean if len(clean) <= longest else clean[: longest - 1] + "…"


def axis_letters(affine: ArrayLike) -> str:
    """Anatomical letters the voxel indices i, j, k rise toward ("LIP")."""
    axes = np.array(affine, np.float64)[:3, :3]
    size, sign = np.abs(axes / np.linalg.norm(axes, axis=0)), np.sign(axes)
    letters = ["", "", ""]
    for _ in range(3):
        world, voxel = np.unravel_index(int(np.argmax(size)), (3, 3))
        letters[voxel] = ("RAS" if sign[world, voxel] > 0 else "LPI")[world]
        size[world, :], size[:, voxel] = -1.0, -1.0
    return "".join(letters)
