"""Volumes through a map folder by each mode, files in and files out."""

import json

import nibabel
import numpy as np
import pytest
from volmap_cli.main import main

from volmap import pipeline
from volmap.carry import CarrySettings
from volmap.types import InputError, Rule, Rules


def save(path, voxels, affine, intent="none"):
    image = nibabel.Nifti1Image(voxels, affine)
    image.header.set_xyzt_units("mm")
    image.header.set_intent(intent)
    nibabel.save(image, path)


def load(path):
    image = nibabel.load(path)
    return image, np.asarray(image.dataobj)


def test_shares_leave_with_their_frames_told(tmp_path, small_pair):
    """Law: shares sum to at most 1; a label's sum is its volume, near that of the mesh in TARGET (label by
    label the body's volume is that of its voxels to a percent)."""
    settings = CarrySettings(labels="shares")
    pipeline.carry_file(small_pair.source, small_pair.folder, tmp_path / "there.nii.gz", settings)
    labels, winners = load(tmp_path / "there.nii.gz")
    image, shares = load(tmp_path / "there_shares.nii.gz")
    told = json.loads((tmp_path / "there_shares.nii.gz.json").read_text(encoding="utf-8"))
    assert [(f["frame"], f["label"]) for f in told["frames"]] == [(0, 1), (1, 2)]
    assert image.shape == (*labels.shape, 2)
    np.testing.assert_array_equal(image.affine, labels.affine)
    assert shares.min() >= 0
    assert shares.sum(axis=-1).max() <= 1 + 1e-6
    voxel_mm3 = abs(np.linalg.det(image.affine[:3, :3]))
    target = load(small_pair.target)[1]
    for frame in told["frames"]:
        total = shares[..., frame["frame"]].sum(dtype=float) * voxel_mm3
        assert total == pytest.approx(frame["volume_mm3"], rel=1e-6)
        assert total == pytest.approx((target == frame["label"]).sum() * voxel_mm3, rel=0.05)
    outside = 1 - shares.sum(axis=-1)
    best = np.concatenate([outside[..., None], shares], axis=-1).argmax(axis=-1)
    sure = np.abs(np.sort(np.concatenate([outside[..., None], shares], -1))[..., -2:] @ [-1, 1]) > 1e-6
    np.testing.assert_array_equal(winners[sure], best[sure])
    beside = json.loads((tmp_path / "there.nii.gz.json").read_text(encoding="utf-8"))
    assert beside["shares_file"] == "there_shares.nii.gz"
    assert "no sampling" in beside["labels"]
    assert beside["settings"]["labels"] == "shares"
    before = sorted(tmp_path.iterdir())
    (tmp_path / "there.nii.gz").unlink()
    (tmp_path / "there.nii.gz.json").unlink()
    with pytest.raises(InputError, match="exists already"):
        pipeline.carry_file(small_pair.source, small_pair.folder, tmp_path / "there.nii.gz", settings)
    assert len(list(tmp_path.iterdir())) == len(before) - 2


def test_onto_other_voxels(tmp_path, small_pair):
    """Closed form: finer voxels on the same place; where centres coincide the labels are the same."""
    scan, _ = load(small_pair.target)
    fine = scan.affine @ np.diag([0.5, 0.5, 0.5, 1])
    save(tmp_path / "fine.nii.gz", np.zeros([2 * n - 1 for n in scan.shape], np.uint8), fine)
    pipeline.carry_file(small_pair.source, small_pair.folder, tmp_path / "as_is.nii.gz")
    findings = pipeline.carry_file(
        small_pair.source, small_pair.folder, tmp_path / "finer.nii.gz", onto=tmp_path / "fine.nii.gz"
    )
    image, voxels = load(tmp_path / "finer.nii.gz")
    np.testing.assert_allclose(image.affine, fine)
    np.testing.assert_array_equal(voxels[::2, ::2, ::2], load(tmp_path / "as_is.nii.gz")[1])
    assert "not-covered" not in {f.code for f in findings}
    told = json.loads((tmp_path / "finer.nii.gz.json").read_text(encoding="utf-8"))
    assert told["voxel_grid"] == "of fine.nii.gz, as the user asked"


@pytest.mark.parametrize("reverse", [False, True])
def test_vectors_keep_their_length_when_they_turn(tmp_path, small_pair, reverse):
    scan, voxels = load(small_pair.target if reverse else small_pair.source)
    vectors = np.zeros((*scan.shape, 1, 3), np.float32)
    vectors[..., :] = [0.6, 0.0, -0.8]
    save(tmp_path / "fibres.nii.gz", vectors, scan.affine, "vector")
    out = tmp_path / "there.nii.gz"
    choice = {"reverse": reverse, "belongs_to": "target" if reverse else "source"}
    with pytest.raises(InputError, match="needs a rule"):
        pipeline.carry_file(tmp_path / "fibres.nii.gz", small_pair.folder, out, **choice)
    settings = CarrySettings(rules=Rules(Rule.TURN))
    findings = pipeline.carry_file(tmp_path / "fibres.nii.gz", small_pair.folder, out, settings, **choice)
    assert {"carried-as-vectors", "axes-of-components"} <= {f.code for f in findings}
    image, carried = load(out)
    assert image.header.get_intent()[0] == "vector"
    lengths = np.linalg.norm(carried[..., 0, :], axis=-1)
    known = np.isfinite(lengths)
    assert known.sum() > 0.8 * (voxels > 0).sum()
    np.testing.assert_allclose(lengths[known], 1, atol=1e-6)
    told = json.loads((tmp_path / "there.nii.gz.json").read_text(encoding="utf-8"))
    assert told["numbers"].startswith("turn: turned by R")
    assert "trilinear" in told["interpolation"]


def test_labels_through_there_and_back_again_as_a_chain(tmp_path, small_pair, capsys):
    """Law: through a folder and back again by its inverse is the identity inside the body."""
    out = tmp_path / "home.nii.gz"
    code = main(
        ["carry", str(small_pair.source), "--out", str(out), "--quiet", "--through"]
        + [str(small_pair.folder)] * 2
    )
    capsys.readouterr()
    assert code == 0
    before, after = load(small_pair.source)[1], load(out)[1]
    assert (before == after).mean() > 0.99
    inside = after > 0
    np.testing.assert_array_equal(before[inside], after[inside])
    assert inside.sum() > 0.95 * (before > 0).sum()
