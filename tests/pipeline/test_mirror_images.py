"""Left and right swapped between the two scans of a pair: noticed, and said wherever a map speaks."""

import json

import numpy as np
import pytest
from volmap_cli.main import main
from volmap_phantoms.writer import save_labels

from volmap import pipeline
from volmap.mapping import MirrorTrial
from volmap.pipeline.mirroring import mirror_findings
from volmap.types import Grid, LabelVolume

LENGTHS = (13, 9, 6)


def tripod(mirrored):
    """Three bars of 13, 9 and 6 mm along x, y and z from one corner: no symmetry at all."""
    voxels = np.zeros((24, 20, 18), np.uint16)
    for axis, length in enumerate(LENGTHS):
        bar = [slice(4, 9)] * 3
        bar[axis] = slice(4, 9 + length)
        voxels[tuple(bar)] = 1
    affine = np.diag([-1.0 if mirrored else 1.0, 1.0, 1.0, 1.0])  # the header alone says which side is left
    return LabelVolume(Grid(voxels.shape, affine), voxels, {1: "bars"}, "mirrored" if mirrored else "plain")


@pytest.fixture(scope="module")
def job():
    return pipeline.MapJob(mesh=pipeline.MeshSettings(wanted_tets=1500), both_orders=False)


def test_a_scan_whose_header_lost_a_sign_is_told(tmp_path, job, capsys, monkeypatch):
    for mirrored in (False, True):
        save_labels(tripod(mirrored), tmp_path / f"{'mirrored' if mirrored else 'plain'}.nii.gz")
    places = [str(tmp_path / f"{name}.nii.gz") for name in ("plain", "mirrored")]
    monkeypatch.setattr(pipeline, "MapJob", lambda **_: job)
    main(["map", *places, "--out", str(tmp_path / "map"), "--quiet"])
    said = [line for line in capsys.readouterr().out.splitlines() if "mirror image" in line]
    assert len(said) == 1
    assert "left and right may be swapped" in said[0]
    assert "plain.nii.gz and mirrored.nii.gz" in said[0]
    certificate = json.loads((tmp_path / "map" / "certificate.json").read_text(encoding="utf-8"))
    assert any("mirror image" in note for note in certificate["notes"])
    compared = certificate["settings"]["alignment"]["mirror_image"]
    assert compared["fits_better"]
    assert compared["residual_mm"] > 1.5 * compared["mirrored_residual_mm"]
    html = (tmp_path / "map" / "report.html").read_text(encoding="utf-8")
    assert "left and right may be swapped" in html


def test_a_pair_that_is_as_it_should_be_is_compared_and_nothing_said(small_pair):
    certificate = json.loads((small_pair.folder / "certificate.json").read_text(encoding="utf-8"))
    assert certificate["settings"]["alignment"]["mirror_image"]["fits_better"] is False
    assert not any("mirror image" in note for note in certificate["notes"])


def test_nothing_is_said_where_nothing_was_compared():
    scan = tripod(False)
    assert mirror_findings(None, scan, scan) == ()
    assert mirror_findings(MirrorTrial(1.0, 0.9, 0.02), scan, scan) == ()
    assert len(mirror_findings(MirrorTrial(1.0, 0.5, 0.02), scan, scan)) == 1
