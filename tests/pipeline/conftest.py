"""Shared by the tests of the pipeline."""

from dataclasses import dataclass, replace
from pathlib import Path

import nibabel
import numpy as np
import pytest
from volmap_phantoms.broken import body
from volmap_phantoms.writer import save_labels

from volmap import pipeline
from volmap.pipeline import reporting


@pytest.fixture(scope="session")
def without_report():
    """Leave the page out where it is not what is tested: drawing takes longer than mapping a small pair."""

    def call(function, *arguments, **options):
        with pytest.MonkeyPatch.context() as patch:
            patch.setattr(reporting, "report_of", lambda *_, **__: "<!DOCTYPE html>\n")
            return function(*arguments, **options)

    return call


@dataclass(frozen=True)
class ThirdVisit:
    """A third scan of the small pair's body, and its maps.

    `known` is an image of the small pair's source with voxels of its own, named when `across` was made;
    `other` is one that was not.
    """

    labels: Path
    back: Path
    across: Path
    known: Path
    other: Path


@pytest.fixture(scope="session")
def third_visit(small_pair, small_job, without_report, tmp_path_factory):
    """Maps from the third scan back to the second (`back`), and from the first to the third (`across`)."""
    root = tmp_path_factory.mktemp("third visit")
    visit = ThirdVisit(
        root / "third.nii.gz",
        root / "karte 2 zurück",
        root / "map 0 2",
        root / "known.nii.gz",
        root / "other.nii.gz",
    )
    save_labels(body(-1), visit.labels)
    for seed, path in enumerate((visit.known, visit.other)):
        values = np.random.default_rng(seed).normal(size=(70, 70, 70)).astype(np.float32)
        affine = np.diag([0.8, 0.8, 0.8, 1.0])
        affine[:3, 3] = -28
        picture = nibabel.Nifti1Image(values, affine)
        picture.header.set_xyzt_units("mm")
        nibabel.save(picture, path)
    job = replace(small_job, both_orders=False)
    without_report(pipeline.map_files, visit.labels, small_pair.target, visit.back, job)
    without_report(
        pipeline.map_files, small_pair.source, visit.labels, visit.across, job, source_image=visit.known
    )
    return visit
