"""A guide pulls, a check only measures."""

from dataclasses import replace

import numpy as np
import pytest

from volmap import pipeline
from volmap.carry import move_points
from volmap.io.nifti import read_labels
from volmap.mapfolder import read_map_folder
from volmap.types import InputError, LandmarkPairs, Verdict

START = np.array([[2.0, 3.0, 2.0]])
TRUTH = 1.06 * START + np.array([1.5, 0.0, -1.0])
WANTED = TRUTH + np.array([1.5, 0.0, 0.0])
SD_MM = 0.3


@pytest.fixture(scope="module")
def mapped(small_pair, small_job):
    """The pair with one pair of points that is pulled aside on purpose, by its role."""
    job = replace(small_job, both_orders=False)
    scans = [read_labels(small_pair.source), read_labels(small_pair.target)]

    def of_role(role):
        pairs = LandmarkPairs(("bead",), START, WANTED, (role,), np.array([SD_MM]))
        return pipeline.map_pair(*scans, job, pairs=pairs)

    return {role: of_role(role) for role in ("check", "guide")}


def residual(folder):
    return float(np.linalg.norm(move_points(folder.map, START).points - WANTED))


def test_a_check_changes_nothing(mapped, small_pair):
    other_checks = read_map_folder(small_pair.folder)
    assert np.array_equal(mapped["check"].map.images, other_checks.map.images)
    gate = mapped["check"].certificate.gate("check_points_mm")
    assert gate.value["mean"] == pytest.approx(residual(mapped["check"]), abs=1e-6)
    assert residual(mapped["check"]) > 1.0


def test_a_guide_pulls_to_within_its_uncertainty(mapped):
    assert residual(mapped["guide"]) <= SD_MM
    assert mapped["guide"].map.volume_ratio.min() > 0
    # what steers cannot measure
    assert mapped["guide"].certificate.gate("check_points_mm").verdict is Verdict.NOT_ASSESSED


def test_a_guide_outside_the_body_is_refused(small_pair, small_job):
    scans = [read_labels(small_pair.source), read_labels(small_pair.target)]
    pairs = LandmarkPairs(("far bead",), START + 90, WANTED, ("guide",), np.ones(1))
    with pytest.raises(InputError, match="far bead") as caught:
        pipeline.map_pair(*scans, small_job, pairs=pairs, pairs_name="beads.csv")
    assert caught.value.refused
    assert "beads.csv" in caught.value.sentence
