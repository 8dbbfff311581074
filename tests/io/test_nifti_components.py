"""Vectors and tensors in NIfTI: bytes by nifti1.h, an independent reader (nibabel), axes."""

import struct

import nibabel
import numpy as np
import pytest

from volmap.io.nifti import read_field
from volmap.io.nifti_components import read_components, write_shares, write_tensors, write_vectors
from volmap.io.reading import Reading
from volmap.io.volumes import read_grid, read_volume_with_findings
from volmap.types import Grid, InputError, LabelShares, TensorVolume, VectorVolume

AFFINE = np.array([[2.0, 0, 0, -10], [0, 2.5, 0, -20], [0, 0, 3, -30], [0, 0, 0, 1]])
GRID = Grid((4, 3, 2), AFFINE)
LOWER = ([0, 1, 1, 2, 2, 2], [0, 0, 1, 0, 1, 2])


def test_vectors_are_stored_as_the_standard_says(tmp_path):
    """Truth: nifti1.h byte by byte (dim at 40, intent_code at 68, datatype at 70, vox_offset at 108)."""
    values = np.arange(72, dtype=np.float32).reshape(4, 3, 2, 3)
    write_vectors(tmp_path / "v.nii", VectorVolume(GRID, values))
    raw = (tmp_path / "v.nii").read_bytes()
    assert len(raw) == 352 + 72 * 4
    assert struct.unpack_from("<8h", raw, 40) == (5, 4, 3, 2, 1, 3, 1, 1)
    assert struct.unpack_from("<hhh", raw, 68) == (1007, 16, 32)
    assert struct.unpack_from("<f", raw, 108) == (352.0,)
    assert raw[344:348] == b"n+1\0"
    stored = np.frombuffer(raw, "<f4", offset=352)
    np.testing.assert_array_equal(stored[:24], values[..., 0].ravel(order="F"))  # all x, then all y, all z
    np.testing.assert_array_equal(stored[24:48], values[..., 1].ravel(order="F"))


def test_tensors_are_stored_as_the_standard_says(tmp_path):
    """Truth: nifti1.h (SYMMATRIX: dim[5] = N (N + 1) / 2, intent_p1 = N at 56, lower triangle row by row)."""
    matrix = np.array([[11, 21, 31], [21, 22, 32], [31, 32, 33.0]])
    values = np.broadcast_to(matrix[LOWER], (4, 3, 2, 6))
    write_tensors(tmp_path / "t.nii.gz", TensorVolume(GRID, values))
    image = nibabel.load(tmp_path / "t.nii.gz")
    assert image.shape == (4, 3, 2, 1, 6)
    assert image.header.get_intent() == ("symmetric matrix", (3.0,), "")
    np.testing.assert_array_equal(np.asarray(image.dataobj)[1, 2, 1, 0], [11, 21, 22, 31, 32, 33])


@pytest.mark.parametrize("kind", ["vectors", "tensors"])
def test_what_is_written_is_read(tmp_path, kind):
    n, noun = (3, VectorVolume) if kind == "vectors" else (6, TensorVolume)
    values = np.random.default_rng(0).normal(size=(4, 3, 2, n)).astype(np.float32)
    values[1, 1] = np.nan
    write = write_vectors if kind == "vectors" else write_tensors
    write(tmp_path / "x.nii.gz", noun(GRID, values))
    again, findings = read_volume_with_findings(tmp_path / "x.nii.gz")
    assert type(again) is noun
    np.testing.assert_array_equal(again.values, values)
    np.testing.assert_array_equal(again.grid.affine, AFFINE)
    assert [f.code for f in findings] == ["axes-of-components"]
    assert "RAS+" in findings[0].sentence
    assert read_grid(tmp_path / "x.nii.gz").same_place(GRID)


def save(path, values, affine=AFFINE, intent="none"):
    image = nibabel.Nifti1Image(values.astype(np.float32), affine)
    image.header.set_intent(intent)
    image.header.set_xyzt_units("mm")
    nibabel.save(image, path)


@pytest.mark.parametrize("shape", [(4, 3, 2, 3), (4, 3, 2, 1, 3)])
def test_without_intent_the_user_must_say_so(tmp_path, shape):
    values = np.random.default_rng(1).normal(size=shape)
    save(tmp_path / "x.nii.gz", values)
    with pytest.raises(InputError, match="more than one volume"):
        read_volume_with_findings(tmp_path / "x.nii.gz")
    volume = read_volume_with_findings(tmp_path / "x.nii.gz", kind="vectors")[0]
    np.testing.assert_array_equal(volume.values, values.reshape(4, 3, 2, 3).astype(np.float32))
    with pytest.raises(InputError, match="does not hold tensors"):
        read_volume_with_findings(tmp_path / "x.nii.gz", kind="tensors")


def test_fields_and_other_kinds_are_refused(tmp_path):
    save(tmp_path / "field.nii.gz", np.zeros((4, 3, 2, 1, 3)), intent="displacement vector")
    assert read_field(tmp_path / "field.nii.gz").grid.shape == (4, 3, 2)
    for kind in ("either", "vectors"):
        with pytest.raises(InputError, match="displacement field, which says where things go"):
            read_volume_with_findings(tmp_path / "field.nii.gz", kind=kind)
    save(tmp_path / "t.nii.gz", np.zeros((4, 3, 2, 1, 6)), intent="symmetric matrix")
    with pytest.raises(InputError, match="does not hold vectors"):
        read_volume_with_findings(tmp_path / "t.nii.gz", kind="vectors")
    save(tmp_path / "four.nii.gz", np.zeros((4, 3, 2, 1, 4)), intent="vector")
    with pytest.raises(InputError, match="does not hold vectors"):
        read_volume_with_findings(tmp_path / "four.nii.gz")
    for bad in (np.inf, np.nan):
        values = np.zeros((4, 3, 2, 1, 3))
        values[1, 1, 1, 0, 2] = bad
        save(tmp_path / "bad.nii.gz", values, intent="vector")
        with pytest.raises(InputError, match=r"bad\.nii\.gz: holds"):
            read_volume_with_findings(tmp_path / "bad.nii.gz")


def test_axes_are_turned_into_the_worlds(tmp_path):
    """Closed form: LPS has x and y turned round; voxel axes are the columns of the grid's affine."""
    turn = np.linalg.qr(np.random.default_rng(3).normal(size=(3, 3)))[0]
    turn *= -np.sign(np.linalg.det(turn))
    affine = np.eye(4)
    affine[:3, :3] = turn * [1.0, 2.0, 0.5]
    vector, tensor = np.array([1.0, 2, 3]), np.array([[5, 1, 2], [1, 6, 3], [2, 3, 7.0]])
    save(tmp_path / "v.nii.gz", np.broadcast_to(vector, (4, 3, 2, 1, 3)), affine, "vector")
    save(tmp_path / "t.nii.gz", np.broadcast_to(tensor[LOWER], (4, 3, 2, 1, 6)), affine, "symmetric matrix")
    signs = np.diag([-1.0, -1, 1])
    for axes, basis in (("world", np.eye(3)), ("lps", signs), ("voxels", turn)):
        found = read_components(tmp_path / "v.nii.gz", "vectors", Reading(axes=axes))[0].values
        np.testing.assert_allclose(found[3, 1, 1], basis @ vector, rtol=1e-6)
        found = read_components(tmp_path / "t.nii.gz", "tensors", Reading(axes=axes))[0].values
        np.testing.assert_allclose(found[3, 1, 1], (basis @ tensor @ basis.T)[LOWER], rtol=2e-6)
    sheared = affine @ [[1, 0.2, 0, 0], [0, 1, 0, 0], [0, 0, 1, 0], [0, 0, 0, 1]]
    save(tmp_path / "s.nii.gz", np.ones((4, 3, 2, 1, 3)), sheared, "vector")
    with pytest.raises(InputError, match="right angles"):
        read_components(tmp_path / "s.nii.gz", "vectors", Reading(axes="voxels"))


def test_shares_are_one_frame_a_label(tmp_path):
    whole = np.zeros((4, 3, 2), np.uint16)
    whole[2] = 7
    shares = LabelShares(GRID, (3, 7, 9), whole, [0, 0, 5], [3, 7, 7], [0.25, 0.5, 1 / 3])
    write_shares(tmp_path / "s.nii.gz", shares)
    image = nibabel.load(tmp_path / "s.nii.gz")
    voxels = np.asarray(image.dataobj)
    assert image.shape == (4, 3, 2, 3)
    assert image.get_data_dtype() == np.float32
    np.testing.assert_array_equal(voxels[0, 0, 0], [0.25, 0.5, 0])
    np.testing.assert_array_equal(voxels[2, ..., 1], 1)
    np.testing.assert_allclose(voxels.sum(axis=(0, 1, 2)), [0.25, 6 + 0.5 + 1 / 3, 0], rtol=1e-6)
