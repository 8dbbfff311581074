"""A pair whose pieces or Euler numbers differ: refused before solving; when forced, the certificate fails."""

import numpy as np
import pytest
from volmap_cli.main import main
from volmap_phantoms.broken import body
from volmap_phantoms.writer import save_labels

from volmap import pipeline
from volmap.mapfolder import read_certificate
from volmap.types import LabelVolume, Verdict


@pytest.fixture(scope="module")
def torn(tmp_path_factory):
    """A body around a core, and the same one grown, with a tunnel of four voxels through its outer label."""
    root = tmp_path_factory.mktemp("torn")
    whole, other = body(0), body(1)
    labels = other.labels.copy()
    across = np.stack(np.meshgrid(*map(np.arange, labels.shape), indexing="ij"), axis=-1)
    off = other.grid.to_world(across.reshape(-1, 3).astype(float)).reshape(across.shape) - [0, -9, -1]
    labels[(np.abs(off[..., 1:]) < 3).all(axis=-1)] = 0
    assert (labels == 2).sum() == (other.labels == 2).sum()
    files = root / "a.nii.gz", root / "b.nii.gz"
    save_labels(whole, files[0])
    save_labels(LabelVolume(other.grid, labels, other.names), files[1])
    return files


def test_refused_before_anything_is_solved(torn, tmp_path, monkeypatch, capsys):
    def solved(*_, **__):
        raise AssertionError("solved a pair that is to be refused")

    monkeypatch.setattr(pipeline.pair, "map_mesh", solved)
    assert main(["map", *map(str, torn), "--out", str(tmp_path / "m")]) == 1
    told = capsys.readouterr().err
    assert "1 enclosed voids against 0" in told
    assert not (tmp_path / "m").exists()


def test_forced_it_is_mapped_and_fails_the_gate(torn, tmp_path, without_report):
    place = tmp_path / "m"
    arguments = ["map", *map(str, torn), "--out", str(place), "--edge", "4", "--one-order"]
    assert without_report(main, [*arguments, "--allow-topology-change"]) == 1
    for certificate in (read_certificate(place), pipeline.certify_folder(place).certificate):
        gate = certificate.gate("labels_agree")
        assert gate.verdict is Verdict.FAIL
        assert gate.value["topology"] == 1
        assert certificate.gate("inverted_tets").verdict is Verdict.PASS
        assert certificate.gate("boundary_crossings").value["one_to_one"]
