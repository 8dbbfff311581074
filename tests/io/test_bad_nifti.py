"""Everything that can be wrong with a volume gives one sentence, never a traceback or a word on stderr."""

import contextlib
import gzip
import os
import struct

import nibabel as nib
import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from volmap.io import opening
from volmap.io.nifti import read_field, read_image, read_labels, write_field, write_labels
from volmap.types import Grid, GridField, InputError, LabelVolume


def good(values=None, affine=None, kind=nib.Nifti1Image):
    values = np.ones((4, 5, 6), np.uint8) if values is None else values
    image = kind(values, np.eye(4) if affine is None else affine)
    image.header.set_xyzt_units("mm")
    return bytearray(image.to_bytes())


def changed(first, form, *values):
    data = good()
    struct.pack_into("<" + form, data, first, *values)
    return data


def with_values(values):
    return good(np.broadcast_to(np.asarray(values), (4, 5, 6)))


def one_odd(value, dtype):
    values = np.ones((4, 5, 6), dtype)
    values[1, 2, 3] = value
    return good(values)


RGB = np.dtype([("R", "u1"), ("G", "u1"), ("B", "u1")])
# Truth: each fault by the field offsets of the official nifti1.h; (bytes, exit is "refused", words).
FAULTS = {
    "text": (b"hello, this is no scan at all" * 30, False, "not a NIfTI"),
    "short text": (b"hi", False, "not a NIfTI"),
    "header only half": (good()[:200], False, "cut short"),
    "voxels cut": (good()[:-7], False, "cut short"),
    "no voxels": (good()[:352], False, "cut short"),
    "packed cut": (gzip.compress(bytes(good()))[:-15], False, "cut short"),
    "packed cut in the header": (gzip.compress(os.urandom(300))[:20], False, "cut short|not a NIfTI"),
    "packed damaged": (gzip.compress(bytes(good()))[:40] + b"\xff" * 40, False, "damaged|cut short"),
    "checksum wrong": (gzip.compress(bytes(good()))[:-8] + b"\0" * 8, False, "damaged"),
    "magic odd": (changed(344, "4s", b"nii\0"), False, "not a NIfTI"),
    "pair of files": (changed(344, "4s", b"ni1\0"), False, r"\.hdr"),
    "two dimensions": (good(np.ones((4, 5), np.uint8)), True, "dimensions"),
    "four frames": (good(np.ones((4, 5, 6, 4), np.uint8)), True, "more than one volume"),
    "RGB": (good(np.zeros((4, 5, 6), RGB)), True, "RGB"),
    "complex": (good(np.zeros((4, 5, 6), np.complex64)), True, "complex"),
    "type unknown": (changed(70, "h", 77), False, "type"),
    "bits contradict": (changed(72, "h", 16), False, "size of a voxel"),
    "fractions": (one_odd(1.5, np.float32), True, "not whole"),
    "NaN": (one_odd(np.nan, np.float32), True, "not finite"),
    "infinite": (one_odd(np.inf, np.float64), True, "not finite"),
    "negative": (one_odd(-3, np.int16), True, "below 0"),
    "too large": (one_odd(70000, np.int32), True, "above 65535"),
    "scaled to fractions": (changed(112, "ff", 0.3, 0.0), True, "not whole"),
    "scaling infinite": (changed(112, "ff", np.inf, 0.0), False, "scaling"),
    "no orientation": (changed(252, "hh", 0, 0), True, "no orientation"),
    "affine NaN": (changed(280, "f", np.nan), False, "finite"),
    "affine singular": (changed(280, "f", 0.0), False, "invertible"),
    "voxel size 0": (changed(80, "f", 0.0), False, "voxel size"),
    "voxel size negative": (changed(84, "f", -1.0), False, "voxel size"),
    "voxel size NaN": (changed(88, "f", np.nan), False, "voxel size"),
    "dimension 0": (changed(42, "h", 0), False, "dimensions"),
    "dimension negative": (changed(44, "h", -4), False, "dimensions"),
    "nine dimensions": (changed(40, "h", 9), False, "dimensions|NIfTI"),
    "huge claim": (changed(42, "hhh", 32767, 32767, 32767), False, "claims"),
    "huge claim packed": (gzip.compress(bytes(changed(42, "hhh", 32767, 32767, 32767))), False, "claims"),
    "offset in the header": (changed(108, "f", 100.0), False, "begin"),
    "offset NaN": (changed(108, "f", np.nan), False, "begin"),
    "metres": (changed(123, "B", 1), True, "metres"),
    "micrometres": (changed(123, "B", 3), True, "micrometres"),
}  # fmt: skip


def test_the_unchanged_file_is_read(tmp_path):
    (tmp_path / "x.nii").write_bytes(good())
    assert read_labels(tmp_path / "x.nii").present == (1,)


@pytest.mark.parametrize("fault", FAULTS)
def test_a_fault_is_one_sentence(tmp_path, capfd, fault):
    data, refused, words = FAULTS[fault]
    path = tmp_path / "visit.nii.gz"
    path.write_bytes(data)
    with pytest.raises(InputError, match=words) as caught:
        read_labels(path)
    assert caught.value.refused is refused
    assert caught.value.sentence.startswith("visit.nii.gz: ")
    assert "\n" not in caught.value.sentence
    assert str(tmp_path) not in caught.value.sentence
    assert capfd.readouterr() == ("", "")


def test_more_voxels_than_the_limit_are_refused_before_they_are_read(tmp_path):
    # A sparse file that truly holds what it claims (2^31 + 2^16 bytes), but no memory is taken.
    data = good()
    struct.pack_into("<hhh", data, 42, 32767, 32767, 3)
    path = tmp_path / "vast.nii"
    with path.open("wb") as file:
        file.write(data[:352])
        file.truncate(352 + 32767 * 32767 * 3)
    with pytest.raises(InputError, match="too large") as caught:
        read_labels(path)
    assert caught.value.refused


def test_bad_quaternion_alone(tmp_path):
    data = changed(252, "hhfff", 1, 0, 0.9, 0.9, 0.9)
    (tmp_path / "q.nii").write_bytes(data)
    with pytest.raises(InputError, match="quaternion"):
        read_labels(tmp_path / "q.nii")


@pytest.mark.parametrize("make", ["missing", "folder", "empty", "beyond a file", "nul"])
def test_no_file_to_read(tmp_path, make):
    path = tmp_path / "x.nii.gz"
    if make == "folder":
        path.mkdir()
    if make == "empty":
        path.touch()
    if make == "beyond a file":
        path.write_bytes(good())
        path = path / "y.nii"
    if make == "nul":
        path = tmp_path / "a\0b.nii"
    words = {"folder": "folder", "empty": "empty", "nul": "cannot be opened"}.get(make, "no such file")
    with pytest.raises(InputError, match=words) as caught:
        read_labels(path)
    assert not caught.value.refused


def test_a_file_that_may_not_be_read(tmp_path, monkeypatch):
    # The superuser may read anything, so the system's answer is put in its place.
    path = tmp_path / "x.nii"
    path.write_bytes(good())

    def forbidden(*_args, **_kwargs):
        raise PermissionError(13, "Permission denied")

    monkeypatch.setattr(opening.Path, "open", forbidden)
    with pytest.raises(InputError, match="may not be read"):
        read_labels(path)


def test_an_image_is_no_field_and_a_field_is_no_label_volume(tmp_path):
    (tmp_path / "x.nii").write_bytes(good())
    with pytest.raises(InputError, match="not a displacement field"):
        read_field(tmp_path / "x.nii")
    u = np.zeros((3, 3, 3, 3), np.float32)
    write_field(tmp_path / "u.nii", GridField(Grid((3, 3, 3), np.eye(4)), u))
    with pytest.raises(InputError, match="displacement vectors"):
        read_labels(tmp_path / "u.nii")
    data = bytearray((tmp_path / "u.nii").read_bytes())
    data[352:356] = np.float32(np.nan).tobytes()
    (tmp_path / "u.nii").write_bytes(data)
    with pytest.raises(InputError, match="whole vector"):
        read_field(tmp_path / "u.nii")
    data[352:356] = np.float32(np.inf).tobytes()
    (tmp_path / "u.nii").write_bytes(data)
    with pytest.raises(InputError, match="infinite"):
        read_field(tmp_path / "u.nii")


READERS = (read_labels, read_image, read_field)
FUZZ = settings(max_examples=60, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])


def answer(path, data):
    """Reading either works or raises InputError; anything else fails the test."""
    path.write_bytes(data)
    for reader in READERS:
        with contextlib.suppress(InputError):
            reader(path)


@FUZZ
@given(data=st.binary(max_size=700))
def test_random_bytes(tmp_path, data):
    answer(tmp_path / "x.nii", data)


@FUZZ
@given(at=st.integers(0, 351), byte=st.integers(0, 255), pack=st.booleans())
def test_one_byte_of_the_header_changed(tmp_path, at, byte, pack):
    data = good()
    data[at] = byte
    answer(tmp_path / "x.nii", gzip.compress(bytes(data)) if pack else data)


@FUZZ
@given(length=st.integers(0, 471), pack=st.booleans())
def test_cut_anywhere(tmp_path, length, pack):
    data = gzip.compress(bytes(good())) if pack else good()
    data = data[: len(data) * length // 472]
    path = tmp_path / "x.nii"
    path.write_bytes(data)
    with pytest.raises(InputError):
        read_labels(path)


@FUZZ
@given(seed=st.integers(0, 2**32 - 1))
def test_any_labels_come_back(tmp_path, seed):
    # Law: writing and reading is the identity.
    rng = np.random.default_rng(seed)
    shape = tuple(rng.integers(1, 6, 3))
    affine = np.eye(4)
    affine[:3] = rng.normal(size=(3, 4)).astype(np.float32)
    if abs(np.linalg.det(affine[:3, :3])) < 0.05:
        affine[:3, :3] = np.eye(3)
    volume = LabelVolume(Grid(shape, affine), rng.integers(0, 65536, shape).astype(np.uint16))
    write_labels(tmp_path / "r.nii.gz", volume, overwrite=True)
    assert read_labels(tmp_path / "r.nii.gz").sha256 == volume.sha256
