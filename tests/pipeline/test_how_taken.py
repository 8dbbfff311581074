"""What a volume was taken for where nobody said: loudly where it may well be wrong."""

import numpy as np
import pytest

from volmap.pipeline.volume_files import how_taken
from volmap.types import Grid, LabelVolume, Level


@pytest.mark.parametrize(
    ("n", "names", "level"),
    [
        (5, {}, Level.NOTE),
        (64, {}, Level.NOTE),
        (65, {}, Level.WARN),
        (255, {}, Level.WARN),
        (255, {1: "a"}, Level.NOTE),
    ],
)
def test_grey_values_of_8_bits_are_not_taken_for_labels_in_silence(n, names, level):
    # common practice, no source: hundreds of whole numbers without a name are rather an image of 8 bits
    voxels = np.arange(7**3).reshape(7, 7, 7) % (n + 1)
    told = how_taken(LabelVolume(Grid((7, 7, 7), np.eye(4)), voxels.astype(np.uint16), names))
    assert (told.level, told.code) == (level, "carried-as-labels")
    assert "say --as image" in told.line
    assert ("grey values" in told.sentence) == (level is Level.WARN)
