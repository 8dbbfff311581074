"""Shared by the tests of the command line."""

from dataclasses import replace

import numpy as np
import pytest
import volmap_phantoms
from volmap_phantoms.broken import body
from volmap_phantoms.phantom import Phantom, Visit

from volmap import pipeline
from volmap.pipeline import carrying, files, reporting
from volmap.types import ImageVolume, Landmarks


@pytest.fixture
def no_report(monkeypatch):
    """Leave the page out where it is not what is tested."""
    for module in (reporting, files):
        monkeypatch.setattr(module, "report_of", lambda *_, **__: "<!DOCTYPE html>\n")


@pytest.fixture
def no_work(monkeypatch):
    """Fail when anything is read, not to speak of mapped."""

    def worked(*_, **__):
        raise AssertionError("work began before the place was looked at")

    for module, names in (
        (files, ("read_labels_with_findings", "map_pair")),
        (carrying, ("read_volume_with_findings", "read_pointwise", "read_way")),
    ):
        for name in names:
            monkeypatch.setattr(module, name, worked)


@pytest.fixture
def small_demo(monkeypatch, small_job, no_report):
    """The demo's job on the small pair of the tests."""
    volumes = [body(0), body(0), body(0), body(1)]
    beads = Landmarks(("a", "b"), np.array([[1.0, 2, 3], [-4, 2, 1]]))
    visits = tuple(Visit(v, ImageVolume(v.grid, 100.0 * v.labels), beads) for v in volumes)
    monkeypatch.setattr(
        volmap_phantoms, "make", lambda *_, **__: Phantom("small", visits, None, "two bodies")
    )
    usual, quick = pipeline.MapJob, replace(small_job, both_orders=False)
    monkeypatch.setattr(pipeline, "MapJob", lambda **options: usual(**options) if options else quick)
