"""Things of which nothing lies in the body are refused, not carried to empty files.

Truth: the rule for volumes (a volume that holds no part of the body is refused) holds for points and lines.
"""

import numpy as np
import pytest

from volmap.carry import carry
from volmap.types import InputError, Landmarks, Measurements, Polylines, Quantity, Rule

FAR = np.array([[50.0, 0.0, 0.0], [90.0, 1.0, 0.0]])
NEAR = np.array([[0.1, 0.2, -0.1], [0.2, 0.1, 0.3]])


def things(points):
    dose = Quantity("dose", "mg", np.array([1.0, 2.0]), Rule.VALUE)
    return {
        "landmarks": Landmarks(("a", "b"), points),
        "measurements": Measurements(("a", "b"), points, (dose,)),
        "lines": Polylines(("a",), points, np.array([0, 2])),
    }


@pytest.mark.parametrize("kind", things(FAR))
@pytest.mark.parametrize("reverse", [False, True])
def test_nothing_in_the_body_is_refused(known, kind, reverse):
    volume_map = known.mapped(known.box(3, -1, 1), known.shears)
    with pytest.raises(InputError, match="nothing of it lies in the body") as refused:
        carry(things(FAR)[kind], volume_map, reverse=reverse)
    assert refused.value.refused
    half = np.array([NEAR[0], FAR[1]])
    if kind == "lines":  # a line with one point outside is left out, and was the only one
        with pytest.raises(InputError, match="in all 1 lines"):
            carry(things(half)[kind], volume_map, reverse=reverse)
    else:
        assert len(carry(things(half)[kind], volume_map, reverse=reverse).thing.points) == 1
    assert len(carry(things(NEAR)[kind], volume_map, reverse=reverse).thing.points) >= 2


def test_an_empty_table_of_points_stays_one(known):
    volume_map = known.mapped(known.box(3, -1, 1), known.shears)
    assert len(carry(Landmarks((), np.empty((0, 3))), volume_map).thing.names) == 0
