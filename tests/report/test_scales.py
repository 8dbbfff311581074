"""Colours, words and number formats."""

from __future__ import annotations

import numpy as np
import pytest

from volmap.report import scales
from volmap.types import Verdict


def linear(rgb: np.ndarray) -> np.ndarray:
    """sRGB to linear light (IEC 61966-2-1)."""
    return np.where(rgb <= 0.04045, rgb / 12.92, ((rgb + 0.055) / 1.055) ** 2.4)


def luminance(rgb: np.ndarray) -> np.ndarray:
    """Relative luminance (Rec. 709 weights, as WCAG 2 uses them)."""
    return linear(rgb) @ [0.2126, 0.7152, 0.0722]


def lightness(rgb: np.ndarray) -> np.ndarray:
    """CIE 1976 L*, another lightness than the one the scale was made with."""
    return 116 * np.cbrt(np.maximum(luminance(rgb), 0.008856)) - 16


def as_deuteranope(rgb: np.ndarray) -> np.ndarray:
    """As seen without green cones (Machado, Oliveira & Fernandes 2009, severity 1.0, from memory)."""
    matrix = np.array(
        [
            [0.367322, 0.860646, -0.227968],
            [0.280085, 0.672501, 0.047413],
            [-0.011820, 0.042940, 0.968881],
        ]
    )
    np.testing.assert_allclose(matrix.sum(axis=1), 1.0, atol=2e-6)  # greys stay grey: a check on the memory
    return np.clip(linear(rgb) @ matrix.T, 0, 1) ** (1 / 2.2)


def test_no_change_is_neutral_and_the_lightest_colour() -> None:
    t = np.linspace(-1, 1, 81)
    rgb = scales.ratio_colours(t)
    assert np.ptp(rgb[40]) < 0.01
    assert np.argmax(lightness(rgb)) == 40


def test_loss_and_gain_are_equally_light_and_darken_steadily() -> None:
    """Truth: CIE L* of both sides within 4 units (a unit is about the least difference one sees)."""
    t = np.linspace(0, 1, 41)
    shrank, grew = lightness(scales.ratio_colours(-t)), lightness(scales.ratio_colours(t))
    assert np.abs(shrank - grew).max() < 4
    assert (np.diff(shrank) < -0.2).all()
    assert (np.diff(grew) < -0.2).all()


def test_the_sides_differ_for_a_reader_without_green_cones() -> None:
    """Truth: simulated colours; blue against yellow-brown stays, steps along the scale stay visible."""
    t = np.linspace(-1, 1, 9)
    seen = as_deuteranope(scales.ratio_colours(t))
    apart = np.linalg.norm(seen[:, None] - seen[None], axis=2) + 10 * np.eye(9)
    assert apart.min() > 0.08
    opposite = np.linalg.norm(seen - seen[::-1], axis=1)
    assert (opposite[[0, 1, 2, 3]] > [0.4, 0.4, 0.3, 0.15]).all()
    assert (seen[:4, 2] > seen[:4, 0]).all()  # shrank: blue
    assert (seen[5:, 2] < seen[5:, 0]).all()  # grew: yellow to brown
    plain = scales.ratio_colours(t)
    assert (np.diff(plain[:4], axis=1) > 0.05).all()  # blue: red < green < blue
    assert (np.diff(plain[5:], axis=1) < -0.05).all()  # orange: red > green > blue


def test_a_ratio_that_is_not_positive_has_a_colour_off_the_scale() -> None:
    colours = scales.colours_of_ratio(np.array([1.0, 0.0, -2.0, np.nan, 64.0]), 1.0)
    assert np.ptp(colours[0]) < 0.01
    assert (colours[1:4] == scales.channels(scales.INVERTED)).all()
    np.testing.assert_allclose(colours[4], scales.ratio_colours(1.0))
    whole = scales.ratio_colours(np.linspace(-1, 1, 101))
    assert np.linalg.norm(whole - colours[1], axis=1).min() > 0.25


@pytest.mark.parametrize("verdict", list(Verdict))
def test_words_and_inks_of_verdicts_are_complete_and_legible(verdict: Verdict) -> None:
    """Truth: WCAG 2 contrast, 4.5 to 1 for text (1.4.3)."""

    def contrast(ink: str, ground: str) -> float:
        one, other = (luminance(np.array(scales.channels(c))) for c in (ink, ground))
        return float((max(one, other) + 0.05) / (min(one, other) + 0.05))

    assert scales.VERDICT_WORDS[verdict]
    assert scales.GATE_WORDS[verdict]
    assert contrast(scales.VERDICT_INKS[verdict], scales.VERDICT_TINTS[verdict]) >= 4.5
    assert contrast(scales.QUIET, scales.PAPER) >= 4.5
    assert contrast(scales.SHRANK_INK, scales.PAPER) >= 4.5
    assert contrast(scales.GREW_INK, scales.PAPER) >= 4.5


def test_words_of_verdicts_differ() -> None:
    assert len(set(scales.VERDICT_WORDS.values())) == len(Verdict)
    assert len(set(scales.GATE_WORDS.values())) == len(Verdict)


def test_the_scale_ends_at_a_round_ratio_that_holds_the_volume() -> None:
    """Truth: 98 % of the volume lies within a factor 1.7, the rest at 5: the next round end is 2."""
    ratio = np.r_[np.full(50, 1 / 1.7), np.full(49, 1.7), 5.0]
    assert scales.scale_limit(ratio, np.ones(100)) == pytest.approx(1.0)
    assert scales.scale_limit(np.ones(4), np.ones(4)) == pytest.approx(np.log2(1.25))
    assert scales.scale_limit(np.array([-1.0, np.nan]), np.ones(2)) == 1.0
    for limit in np.log2([1.25, 1.5, 2, 3, 4, 6, 8]):
        ticks = np.array([t for t, _ in scales.ratio_ticks(float(limit))])
        np.testing.assert_allclose(ticks, -ticks[::-1], atol=1e-12)
        assert ticks[-1] == pytest.approx(limit)


def test_weighted_quantiles() -> None:
    """Truth: whole weights are repeats; with equal weights numpy's Hazen definition."""
    values = np.array([3.0, 1.0, 2.0, 7.0])
    shares = [0.1, 0.5, 0.9]
    expected = np.quantile(values, shares, method="hazen")
    np.testing.assert_allclose(scales.weighted_quantile(values, np.ones(4), shares), expected)
    heavy = scales.weighted_quantile(np.array([1.0, 9.0]), np.array([99.0, 1.0]), [0.4])
    assert heavy[0] == pytest.approx(1.0)


@pytest.mark.parametrize(
    ("value", "words"),
    [
        (None, "–"),
        (0, "0"),
        (0.0, "0"),
        (-3.14159, "−3.14"),
        (1234567, "1\u202f234\u202f567"),
        (0.0123456, "0.0123"),
        (250.0, "250"),
        (1e-9, "1.00×10^−9"),
        (float("nan"), "undefined"),
        (float("-inf"), "−infinite"),
        (True, "yes"),
    ],
)
def test_numbers(value: object, words: str) -> None:
    assert scales.number(value) == words


def test_lengths_and_places() -> None:
    assert scales.fixed(-0.0001, 2) == "0.00"
    assert scales.mm(1.005e3) == "1\u202f005.00 mm"
    assert scales.place([1.0, -2.25, 0.04]) == "(1.0, −2.2, 0.0)"
    assert scales.place(None) == "–"


@pytest.mark.parametrize(
    ("affine", "letters"),
    [
        (np.eye(4), "RAS"),
        (np.array([[-1, 0, 0, 0], [0, 0, -1, 0], [0, -1, 0, 0], [0, 0, 0, 1.0]]), "LIP"),
        (np.array([[0.0, 0.3, 2, 0], [0.9, 0.1, 0, 0], [0, -0.8, 0.2, 0], [0, 0, 0, 1]]), "AIR"),
    ],
)
def test_orientation_letters(affine: np.ndarray, letters: str) -> None:
    """Truth: read off the columns of the affine by hand."""
    assert scales.axis_letters(affine) == letters


def test_text_of_a_file_loses_control_characters() -> None:
    assert scales.plain_text("a\x00b\nc\u202ed") == "a b c d"
    assert len(scales.plain_text("x" * 999)) == 200
