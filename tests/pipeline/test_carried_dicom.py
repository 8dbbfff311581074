"""Labels carried into DICOM, and out of it. Law: no format changes a voxel on the way."""

import numpy as np
import pydicom
import pytest
from volmap_cli.main import main

from volmap.io.dicom.uids import uids_of_scan
from volmap.io.volumes import read_labels
from volmap.mapfolder import read_map_folder


def carry(thing, small_pair, out, *options):
    return main(
        ["carry", str(thing), "--through", str(small_pair.folder), "--out", str(out), "--quiet", *options]
    )


@pytest.fixture(scope="module")
def carried(small_pair, tmp_path_factory):
    place = tmp_path_factory.mktemp("carried")
    for name in ("labels.nii.gz", "labels.dcm"):
        assert carry(small_pair.source, small_pair, place / name, "--as", "labels") == 0
    return place


def test_labels_carried_into_dicom_are_those_carried_into_nifti(carried, small_pair):
    nifti, dicom = (read_labels(carried / name) for name in ("labels.nii.gz", "labels.dcm"))
    assert dicom.sha256 == nifti.sha256
    assert {n: dicom.name_of(n) for n in dicom.present} == {1: "shell", 2: "Kern é"}
    target = read_map_folder(small_pair.folder).target
    made = pydicom.dcmread(carried / "labels.dcm")
    scan = uids_of_scan(target.sha256)
    assert (made.StudyInstanceUID, made.FrameOfReferenceUID) == (scan.study, scan.frame)
    assert (carried / "labels.dcm.json").is_file()


def test_a_segmentation_of_target_is_known_again_and_carried_back(small_pair, tmp_path):
    exported = tmp_path / "target.dcm"
    assert main(["export", str(small_pair.folder), "--as", "segmentation", "--labels", "target",
                 "--out", str(exported), "--quiet"]) == 0  # fmt: skip
    for thing, out in ((small_pair.target, "a.nii.gz"), (exported, "b.nii.gz")):
        assert carry(thing, small_pair, tmp_path / out, "--reverse", "--as", "labels") == 0
    a, b = (read_labels(tmp_path / name) for name in ("a.nii.gz", "b.nii.gz"))
    assert np.array_equal(a.labels, b.labels)
    assert carry(exported, small_pair, tmp_path / "c.nii.gz", "--as", "labels") == 1  # it is not SOURCE's


def test_the_frame_of_the_users_own_images_is_used_and_only_for_dicom(small_pair, tmp_path, capsys):
    options = ["--as", "labels", "--frame-uid", "1.2.3.4"]
    assert carry(small_pair.source, small_pair, tmp_path / "a.dcm", *options) == 0
    assert pydicom.dcmread(tmp_path / "a.dcm").FrameOfReferenceUID == "1.2.3.4"
    assert carry(small_pair.source, small_pair, tmp_path / "a.nii.gz", *options) == 2


def test_an_image_is_not_written_as_dicom(small_pair, tmp_path, capsys):
    out = tmp_path / "a.dcm"
    assert carry(small_pair.source, small_pair, out, "--as", "image") == 3
    assert "only labels are written as DICOM" in capsys.readouterr().err
    assert not list(tmp_path.iterdir())
