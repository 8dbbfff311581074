"""How a given boundary lies on the bodies: frames, units, directions, coverage, mirrored images."""

import numpy as np
import pytest

from volmap.screen import raise_refusal, screen_given_boundary
from volmap.types import GivenBoundary, InputError, Level, Surface

CUBE = np.array([[i, j, k] for i in (0, 1) for j in (0, 1) for k in (0, 1)], float)
SIDES = np.array([[0, 1, 3], [0, 3, 2], [4, 6, 7], [4, 7, 5], [0, 4, 5], [0, 5, 1], [2, 3, 7], [2, 7, 6],
                  [0, 2, 6], [0, 6, 4], [1, 5, 7], [1, 7, 3]])  # fmt: skip
OUT = np.tile([1, 0], (12, 1))
HERE, THERE = 20 * CUBE + (30, 5, 10), 24 * CUBE + (-80, 40, 0)
SOURCE, TARGET = Surface(HERE, SIDES, OUT), Surface(THERE, SIDES, OUT)


def found(points=HERE, images=THERE, triangles=SIDES):
    given = GivenBoundary(points, triangles, images, 0.2, 1.5, "g.vtp")
    return screen_given_boundary(given, SOURCE, TARGET, voxel_mm=1.0)


def test_a_boundary_in_its_place_is_not_spoken_of():
    assert found() == ()


@pytest.mark.parametrize(
    ("points", "images", "code", "words"),
    [
        (HERE * (-1, -1, 1), THERE, "boundary_elsewhere", "LPS"),
        (HERE / 10, THERE, "boundary_elsewhere", "another unit"),
        (THERE, HERE, "boundary_elsewhere", "exchange SOURCE and TARGET"),
        (HERE + 500, THERE, "boundary_elsewhere", "RAS+, mm"),
        (HERE, THERE * (-1, -1, 1), "images_elsewhere", "LPS"),
        (HERE, THERE - HERE, "images_elsewhere", "displacements"),
        (HERE, THERE + 500, "images_elsewhere", "TARGET's world"),
    ],
)
def test_another_frame_is_refused_and_named(points, images, code, words):
    (finding,) = found(points, images)
    assert (finding.level, finding.code) == (Level.REFUSE, code)
    assert words in finding.remedy
    with pytest.raises(InputError, match=r"g\.vtp") as caught:
        raise_refusal((finding,))
    assert caught.value.refused


def test_half_a_boundary_is_told_with_its_share():
    """Counted by hand: two of twelve like triangles."""
    (finding,) = found(triangles=SIDES[:2])
    assert (finding.level, finding.code) == (Level.WARN, "boundary_covered")
    assert "covers 17 %" in finding.sentence


def test_images_off_the_target_are_told():
    (finding,) = found(images=np.add(THERE, (5, 0, 0)))
    assert (finding.level, finding.code) == (Level.WARN, "images_far")
    assert "the farthest 5 mm" in finding.sentence


def test_mirrored_images_are_told():
    mirrored = THERE.copy()
    mirrored[:, 0] = 2 * THERE[:, 0].mean() - THERE[:, 0]
    (finding,) = found(images=mirrored)
    assert (finding.level, finding.code) == (Level.WARN, "images_mirrored")
