"""A field as Deformable Spatial Registration, read again by plain pydicom and numpy.

Truth: the affine map y = A x + b in closed form, turned into LPS by hand here; its displacement is linear, so
trilinear interpolation of what was written must give it at any point, to float32.
"""

import numpy as np
import pydicom
import pytest
from dicom_pull import pulled
from dicom_standard import REGISTRATION, faults, faults_by_hand
from pydicom import config

from volmap.io.dicom.laying import squared
from volmap.io.dicom.registration import SOP_CLASS, write_registration
from volmap.io.dicom.uids import uids_of_scan
from volmap.types import Grid, GridField, InputError

A = np.array([[1.1, 0.06, -0.02], [0.03, 0.94, 0.05], [-0.04, 0.02, 1.03]])  # RAS+, SOURCE to TARGET
B = np.array([3.0, -5.0, 11.0])
SOURCE, TARGET = uids_of_scan("a" * 64), uids_of_scan("b" * 64)


def rotation(x, y, z):
    from scipy.spatial.transform import Rotation

    return Rotation.from_euler("xyz", [x, y, z]).as_matrix()


def affine(axes, spacing, origin):
    made = np.eye(4)
    made[:3, :3] = axes * np.array(spacing)
    made[:3, 3] = origin
    return made


GRIDS = {
    "axial": affine(np.eye(3), (2.0, 2.0, 2.0), (-20, -18, -9)),
    "left-handed, anisotropic": affine(np.diag([-1.0, 1, 1]), (1.5, 2.5, 4.0), (22, -18, -9)),
    "oblique": affine(rotation(0.3, -0.2, 0.7), (1.0, 2.0, 3.0), (-5, -18, -9)),
    "oblique, left-handed, sagittal": affine(
        rotation(0.1, 0.4, -0.3)[:, [1, 2, 0]] * [1, 1, -1], (2.0, 1.0, 3.0), (-5, 8, -9)
    ),
}


def inverse(y):
    """RAS+, TARGET to SOURCE."""
    return np.linalg.solve(A, (y - B).T).T


def backward(matrix, shape=(12, 11, 9)):
    """The field on TARGET's grid, undefined in one corner of it."""
    grid = Grid(shape, matrix)
    index = np.stack(np.meshgrid(*map(np.arange, shape), indexing="ij"), -1).reshape(-1, 3)
    y = grid.to_world(index.astype(float))
    u = (inverse(y) - y).reshape(*shape, 3).astype(np.float32)
    u[0, 0, 0] = np.nan
    return GridField(grid, u, "target", "source")


@pytest.fixture(autouse=True)
def strict(monkeypatch):
    """pydicom refuses what its own validation does not like, in reading and in writing."""
    monkeypatch.setattr(config.settings, "reading_validation_mode", config.RAISE)
    monkeypatch.setattr(config.settings, "writing_validation_mode", config.RAISE)


@pytest.fixture(params=GRIDS)
def written(request, tmp_path):
    field = backward(GRIDS[request.param])
    path = tmp_path / "field.dcm"
    check = write_registration(path, field, registered=TARGET, source=SOURCE, check_voxel=(5, 6, 4))
    return path, field, check


def test_points_of_target_find_their_source(written):
    path, field, _ = written
    low = np.array([1.0, 1.0, 1.0])  # away from the undefined corner
    index = np.random.default_rng(3).uniform(low, np.array(field.grid.shape) - 1.0, (500, 3))
    y = field.grid.to_world(index)
    lps = np.array([-1.0, -1.0, 1.0])
    found = pulled(path, y * lps) * lps
    assert np.abs(found - inverse(y)).max() < 2e-5  # float32 of displacements up to 15 mm
    assert np.abs(found - y).max() > 3  # it is no field of zeros


def test_the_undefined_voxel_stays_undefined_and_is_the_only_one(written):
    path, field, _ = written
    grid = pydicom.dcmread(path).DeformableRegistrationSequence[0].DeformableRegistrationGridSequence[0]
    holes = np.isnan(np.frombuffer(grid.VectorGridData, "<f4").reshape(-1, 3))
    assert holes.all(axis=1).sum() == holes.any(axis=1).sum() == 1
    beside = field.grid.to_world(np.array([[0.5, 0.5, 0.5], [1.5, 0.5, 0.5]])) * [-1, -1, 1]
    assert np.isnan(pulled(path, beside)).all(axis=1).tolist() == [True, False]


def test_the_check_point_in_the_object_is_what_a_reader_gets(written):
    path, _, check = written
    here = np.array([check.registered_mm])
    assert np.abs(pulled(path, here) - check.source_mm).max() < 1e-9
    made = pydicom.dcmread(path)
    item = made.DeformableRegistrationSequence[0]
    comment = item.FrameOfReferenceTransformationComment
    numbers = [float(t) for t in comment.replace("(", " ").replace(")", " ").replace(",", " ").split()
               if t.lstrip("-")[0].isdigit()]  # fmt: skip
    assert np.abs(np.array(numbers) - [*check.registered_mm, *check.source_mm]).max() <= 0.00501
    told = made.ContributingEquipmentSequence[0].ContributionDescription
    assert check.sentence in told
    assert "research use only" in told
    assert told.endswith("clinical.")  # nothing was cut off


def test_it_is_as_the_standard_has_it(written):
    path, _, _ = written
    made = pydicom.dcmread(path)
    assert made.SOPClassUID == SOP_CLASS
    assert made.Modality == "REG"  # C.20.1
    assert made.file_meta.MediaStorageSOPInstanceUID == made.SOPInstanceUID
    assert faults_by_hand(made, REGISTRATION) == []
    assert faults(made) == []
    grid = made.DeformableRegistrationSequence[0].DeformableRegistrationGridSequence[0]
    x, y = np.array(grid.ImageOrientationPatient, float).reshape(2, 3)
    assert abs(x @ y) < 1e-12
    assert abs(np.linalg.norm(x) - 1) + abs(np.linalg.norm(y) - 1) < 1e-12


def test_the_table_of_the_standard_can_fail(written):
    made = pydicom.dcmread(written[0])
    del made.StudyDate
    made.DeformableRegistrationSequence[0].SourceFrameOfReferenceUID = ""
    made.Rows = 3
    lines = " ".join(faults(made)), " ".join(faults_by_hand(made, REGISTRATION))
    assert all(
        "StudyDate is missing" in line and "SourceFrameOfReferenceUID is empty" in line for line in lines
    )
    assert "not in the IOD: Rows" in lines[0]


def test_frames_and_studies_belong_together_and_bytes_are_the_same(written, tmp_path):
    path, field, _ = written
    made = pydicom.dcmread(path)
    assert (made.FrameOfReferenceUID, made.StudyInstanceUID) == (TARGET.frame, TARGET.study)
    assert made.DeformableRegistrationSequence[0].SourceFrameOfReferenceUID == SOURCE.frame
    again = tmp_path / "again.dcm"
    write_registration(again, field, registered=TARGET, source=SOURCE, check_voxel=(5, 6, 4))
    assert again.read_bytes() == path.read_bytes()
    other = tmp_path / "other.dcm"
    write_registration(other, field, registered=TARGET, source=SOURCE, check_voxel=(5, 6, 5))
    assert pydicom.dcmread(other).SOPInstanceUID != made.SOPInstanceUID


def test_a_stated_frame_is_used_and_said(tmp_path):
    stated = uids_of_scan("b" * 64, frame_uid="1.2.840.99999.7")
    path = tmp_path / "field.dcm"
    write_registration(
        path, backward(GRIDS["axial"]), registered=stated, source=SOURCE, check_voxel=(5, 5, 5)
    )
    made = pydicom.dcmread(path)
    assert made.FrameOfReferenceUID == "1.2.840.99999.7"
    assert made.StudyInstanceUID == TARGET.study
    told = made.ContributingEquipmentSequence[0].ContributionDescription
    assert "Frame of reference of SOURCE: new; of TARGET: as the user stated it." in told


def test_one_frame_for_both_scans_is_refused(tmp_path):
    same = [uids_of_scan(sha * 64, frame_uid="1.2.840.99999.7") for sha in "ab"]
    with pytest.raises(InputError, match="one frame of reference"):
        write_registration(tmp_path / "x.dcm", backward(GRIDS["axial"]), registered=same[0], source=same[1],
                           check_voxel=(5, 5, 5))  # fmt: skip
    assert not list(tmp_path.iterdir())


@pytest.mark.parametrize("bad", ["", "1", "1..2", "1.02", "1.2.a", "1." * 40 + "1", " 1.2"])
def test_what_is_no_uid_is_refused(bad):
    with pytest.raises(InputError, match="is not a UID"):
        uids_of_scan("b" * 64, frame_uid=bad)


def test_a_sheared_grid_is_refused_and_can_be_squared(tmp_path):
    matrix = GRIDS["oblique"].copy()
    matrix[:3, 2] += 0.2 * matrix[:3, 0]
    field = backward(matrix)
    with pytest.raises(InputError, match="not orthogonal"):
        write_registration(tmp_path / "x.dcm", field, registered=TARGET, source=SOURCE, check_voxel=(5, 5, 5))
    assert not list(tmp_path.iterdir())
    square = squared(field.grid)
    assert square.shear < 1e-12
    corners = np.array([[i, j, k] for i in (0, 1) for j in (0, 1) for k in (0, 1)], float)
    index = square.to_index(field.grid.to_world(corners * (np.array(field.grid.shape) - 1)))
    assert index.min() > -1e-6
    assert (index.max(axis=0) - (np.array(square.shape) - 1)).max() < 1e-6
    assert np.allclose(square.spacing, field.grid.spacing)
