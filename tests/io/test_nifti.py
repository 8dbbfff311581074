"""NIfTI written and read, against the official header layout and against nibabel as plain reader."""

import gzip
from pathlib import Path

import nibabel as nib
import numpy as np
import pytest
from volmap_shared import __file__ as shared_file

from volmap.io.nifti import (
    read_field,
    read_image,
    read_labels,
    read_labels_with_findings,
    write_field,
    write_image,
    write_labels,
)
from volmap.types import Grid, GridField, ImageVolume, InputError, LabelVolume, Level
from volmap.types.notice import short_caution

SUBCORTICAL = Path(shared_file).parent / "subcortical"
AFFINE = np.array([[2, 0, 0, -10], [0, 2.5, 0, -20], [0, 0, 3, -30], [0, 0, 0, 1.0]])
LPS = np.diag([-1.0, -1.0, 1.0, 1.0])
OBLIQUE = np.array(  # the rotation (0.8 0.6 0 | -0.36 0.48 0.8 | 0.48 -0.64 0.6), slices 3 mm apart
    [[0.8, -0.36, 1.44, 7.125], [0.6, 0.48, -1.92, -3.5], [0, 0.8, 1.8, 11.25], [0, 0, 0, 1]]
)


def constant_field(affine=AFFINE, shape=(4, 3, 2), u=(1.0, 2.0, 3.0)):
    return GridField(Grid(shape, affine), np.broadcast_to(np.float32(u), (*shape, 3)))


def some_labels(affine=OBLIQUE, highest=300):
    values = np.random.default_rng(7).integers(0, highest + 1, (5, 6, 7)).astype(np.uint16)
    values[0, 0, 0] = highest
    return LabelVolume(Grid(values.shape, affine), values, name="x.nii.gz")


@pytest.mark.parametrize(
    ("first", "expected"),
    [(0, "5c010000"), (40, "05000400030002000100030001000100"), (68, "ee0310002000"), (108, "0000b043"),
     (112, "0000803f00000000"), (123, "02"), (252, "01000100"), (344, "6e2b3100")],
)  # fmt: skip
def test_header_bytes_of_the_worked_field(tmp_path, first, expected):
    # Truth: official nifti1.h (2003-2019), offsets and codes; values recomputed byte by byte.
    write_field(tmp_path / "u.nii", constant_field())
    data = (tmp_path / "u.nii").read_bytes()
    assert data[first : first + len(expected) // 2].hex() == expected


def test_length_srow_voxels_and_descrip_of_the_worked_field(tmp_path):
    # Truth: nifti1.h; 352 + 4*3*2*3*4 bytes; the component is slowest on disk.
    write_field(tmp_path / "u.nii", constant_field())
    data = (tmp_path / "u.nii").read_bytes()
    assert len(data) == 640
    assert np.frombuffer(data[280:328], "<f4").tolist() == [2, 0, 0, -10, 0, 2.5, 0, -20, 0, 0, 3, -30]
    assert np.frombuffer(data[352:], "<f4").tolist() == [1] * 24 + [2] * 24 + [3] * 24
    assert data[148:228].rstrip(b"\0").decode() == short_caution()


def test_left_handed_storage_has_negative_qfac(tmp_path):
    # Truth: nifti1.h METHOD 2; LAS is pixdim[0] = -1 with quaternion (b, c, d) = (0, 1, 0).
    write_field(tmp_path / "u.nii", constant_field(np.diag([-2, 2.5, 3, 1.0])))
    data = (tmp_path / "u.nii").read_bytes()
    assert np.frombuffer(data[76:80], "<f4")[0] == -1
    assert np.frombuffer(data[256:268], "<f4").tolist() == [0, 1, 0]
    plain = nib.load(tmp_path / "u.nii")
    assert np.allclose(plain.get_qform(), np.diag([-2, 2.5, 3, 1]), atol=1e-6)


def test_world_vectors_do_not_depend_on_storage_order(tmp_path):
    # Law: storing the first axis backwards moves voxels, not world vectors.
    rng = np.random.default_rng(3)
    u = rng.normal(size=(4, 3, 2, 3)).astype(np.float32)
    flip = np.diag([-1.0, 1, 1, 1])
    flip[0, 3] = 3
    write_field(tmp_path / "a.nii.gz", GridField(Grid((4, 3, 2), AFFINE), u))
    write_field(tmp_path / "b.nii.gz", GridField(Grid((4, 3, 2), AFFINE @ flip), u[::-1]))
    a, b = read_field(tmp_path / "a.nii.gz"), read_field(tmp_path / "b.nii.gz")
    at = np.array([[1.0, 2, 1], [0, 0, 0]])
    for point in a.grid.to_world(at):
        i, j = (np.rint(f.grid.to_index(point[None])[0]).astype(int) for f in (a, b))
        assert np.array_equal(a.displacement[tuple(i)], b.displacement[tuple(j)])


def test_lps_negates_x_and_y_of_positions_and_vectors():
    # Truth: DICOM PS3.3 patient axes; worked example: diag(2,2.5,3)/(-10,-20,-30) and (1,2,3) in RAS+.
    lps = LPS @ AFFINE
    assert np.array_equal(np.diag(lps)[:3], [-2, -2.5, 3])
    assert np.array_equal(lps[:3, 3], [10, 20, -30])
    assert np.array_equal(LPS[:3, :3] @ [1, 2, 3], [-1, -2, 3])
    assert Grid((4, 3, 2), AFFINE).orientation == "RAS"
    assert Grid((4, 3, 2), lps).orientation == "LPS"


def test_field_read_by_plain_nibabel(tmp_path):
    # Independent library: nibabel without any of our code.
    u = np.random.default_rng(5).normal(size=(4, 5, 6, 3)).astype(np.float32)
    u[0] = np.nan
    write_field(tmp_path / "u.nii.gz", GridField(Grid((4, 5, 6), OBLIQUE), u))
    plain = nib.load(tmp_path / "u.nii.gz")
    assert plain.shape == (4, 5, 6, 1, 3)
    assert plain.header.get_intent()[0] == "displacement vector"
    assert np.array_equal(plain.get_fdata()[:, :, :, 0].astype(np.float32), u, equal_nan=True)
    assert np.allclose(plain.affine, OBLIQUE, atol=1e-6)
    assert np.allclose(plain.get_qform(), OBLIQUE, atol=1e-5)


def test_sheared_grid_has_an_sform_only(tmp_path):
    # Truth: a quaternion cannot say a shear (nifti1.h METHOD 2).
    sheared = np.array(AFFINE)
    sheared[0, 1] = 0.7
    write_labels(tmp_path / "s.nii", some_labels(sheared))
    header = nib.load(tmp_path / "s.nii").header
    assert (int(header["sform_code"]), int(header["qform_code"])) == (1, 0)
    volume, findings = read_labels_with_findings(tmp_path / "s.nii")
    assert np.allclose(volume.grid.affine, sheared, atol=1e-6)
    assert findings == ()


def test_a_tenth_of_a_degree_of_shear_far_out_is_not_hidden_in_a_qform(tmp_path):
    # Law: what the program writes, it reads back without a warning about two orientations.
    slight = np.eye(4)
    slight[0, 2] = 0.0017
    grid = Grid((2, 2, 400), slight)
    write_labels(tmp_path / "s.nii", LabelVolume(grid, np.ones(grid.shape, np.uint16)))
    assert read_labels_with_findings(tmp_path / "s.nii")[1] == ()


@pytest.mark.parametrize("suffix", [".nii", ".nii.gz"])
@pytest.mark.parametrize("highest", [3, 300])
def test_labels_come_back(tmp_path, suffix, highest):
    volume = some_labels(highest=highest)
    write_labels(tmp_path / f"x{suffix}", volume)
    back = read_labels(tmp_path / f"x{suffix}")
    assert np.array_equal(back.labels, volume.labels)
    assert back.name == f"x{suffix}"
    assert nib.load(tmp_path / f"x{suffix}").get_data_dtype() == (np.uint8 if highest < 256 else np.uint16)


def test_image_comes_back_with_its_nan(tmp_path):
    values = np.random.default_rng(1).normal(size=(3, 4, 5)).astype(np.float32)
    values[1, 1, 1] = np.nan
    write_image(tmp_path / "i.nii.gz", ImageVolume(Grid((3, 4, 5), OBLIQUE), values))
    assert np.array_equal(read_image(tmp_path / "i.nii.gz").values, values, equal_nan=True)


def test_same_volume_same_bytes_without_name_or_time(tmp_path):
    write_labels(tmp_path / "a.nii.gz", some_labels())
    write_labels(tmp_path / "b.nii.gz", some_labels())
    data = (tmp_path / "a.nii.gz").read_bytes()
    assert data == (tmp_path / "b.nii.gz").read_bytes()
    assert data[3] == 0  # RFC 1952: no flags, so no file name
    assert data[4:8] == b"\0\0\0\0"  # RFC 1952: MTIME


def test_digest_does_not_depend_on_how_a_file_stores_it(tmp_path):
    # Law: type, byte order, packing, scaling and NIfTI version are storage.
    volume = some_labels(highest=200)
    digests = set()
    for k, (kind, dtype) in enumerate(
        [
            (nib.Nifti1Image, "<u2"),
            (nib.Nifti1Image, ">i4"),
            (nib.Nifti2Image, "<f4"),
            (nib.Nifti1Image, "<u1"),
        ]
    ):
        header = kind.header_class(endianness=dtype[0])
        header.set_data_dtype(dtype)
        image = kind(volume.labels.astype(dtype), OBLIQUE, header)
        path = tmp_path / (f"{k}.nii" if k % 2 else f"{k}.nii.gz")
        nib.save(image, path)
        digests.add(read_labels(path).sha256)
    half = nib.Nifti1Image(volume.labels.astype(np.int16) * 2, OBLIQUE)
    half.header.set_slope_inter(1, 0)
    data = bytearray(half.to_bytes())
    data[112:116] = np.float32(0.5).tobytes()
    (tmp_path / "half.nii").write_bytes(data)
    digests.add(read_labels(tmp_path / "half.nii").sha256)
    assert len(digests) == 1
    other = np.array(volume.labels)
    other[2, 2, 2] += 1
    write_labels(tmp_path / "other.nii", LabelVolume(volume.grid, other))
    assert read_labels(tmp_path / "other.nii").sha256 not in digests


@pytest.mark.parametrize("flip", [1, -1])
def test_qform_alone_agrees_with_nibabel(tmp_path, flip):
    # Independent library: nibabel's quaternion code; both handednesses.
    image = nib.Nifti1Image(np.ones((4, 4, 4), np.uint8), None)
    image.set_qform(OBLIQUE @ np.diag([flip, 1, 1, 1]), code=1)
    image.set_sform(None, code=0)
    nib.save(image, tmp_path / "q.nii")
    read = read_labels(tmp_path / "q.nii").grid.affine
    assert np.allclose(read, image.get_qform(), atol=1e-6)
    assert np.sign(np.linalg.det(read)) == flip


def test_two_orientations_that_differ_are_warned_of_and_the_sform_wins(tmp_path):
    image = nib.Nifti1Image(np.ones((4, 4, 4), np.uint8), AFFINE)
    image.set_sform(AFFINE, code=1)
    moved = np.array(AFFINE)
    moved[0, 3] += 5
    image.set_qform(moved, code=1)
    nib.save(image, tmp_path / "two.nii")
    volume, findings = read_labels_with_findings(tmp_path / "two.nii")
    assert np.allclose(volume.grid.affine, AFFINE)
    assert [(f.level, f.code) for f in findings] == [
        (Level.NOTE, "unit_not_stated"),
        (Level.WARN, "orientations_differ"),
    ]
    assert "5 mm" in findings[1].sentence


@pytest.mark.parametrize(
    ("name", "counts"),
    [
        ("donor-10021", [5935, 1337, 1489]),
        ("donor-12876", [7673, 1210, 2189]),
        ("donor-15697", [5963, 1291, 2243]),
    ],
)
def test_published_subcortical_voxel_counts(name, counts):
    # Truth: published with the data (NOTICE beside them): stored L-I-P, 1 mm.
    volume = read_labels(SUBCORTICAL / f"{name}.nii.gz")
    assert np.bincount(volume.labels.ravel())[1:].tolist() == counts
    assert volume.grid.orientation == "LIP"
    assert volume.grid.orientation == "".join(nib.aff2axcodes(volume.grid.affine))


def test_one_frame_and_packed_content_are_taken_as_they_are(tmp_path):
    image = nib.Nifti1Image(np.ones((4, 4, 4, 1, 1), np.uint8), AFFINE)
    (tmp_path / "odd.nii").write_bytes(gzip.compress(image.to_bytes()))
    assert read_labels(tmp_path / "odd.nii").grid.shape == (4, 4, 4)


def test_very_long_grid_is_nifti_2(tmp_path):
    # Truth: nifti1.h dim is int16; nifti2.h: header 540 bytes, intent_code at byte 504.
    write_field(tmp_path / "l.nii", constant_field(shape=(40000, 1, 1)))
    data = (tmp_path / "l.nii").read_bytes()
    assert int.from_bytes(data[:4], "little") == 540
    assert int.from_bytes(data[504:508], "little") == 1006
    assert read_field(tmp_path / "l.nii").grid.shape == (40000, 1, 1)


def test_names_from_a_table_beside_the_volume_or_another(tmp_path):
    write_labels(tmp_path / "x.nii.gz", some_labels())
    assert dict(read_labels(tmp_path / "x.nii.gz").names) == {}
    (tmp_path / "x.csv").write_text("name,x_mm,y_mm,z_mm\na,1,2,3\n")  # landmarks: passed over
    assert dict(read_labels(tmp_path / "x.nii.gz").names) == {}
    (tmp_path / "x.tsv").write_text("\ufeffindex\tname\tcolour\n1\tbody, left\tred\n2\tcœur\tblue\n", "utf-8")
    assert dict(read_labels(tmp_path / "x.nii.gz").names) == {1: "body, left", 2: "cœur"}
    (tmp_path / "n.csv").write_text('index,name\n7,"a, b"\n')
    assert dict(read_labels(tmp_path / "x.nii.gz", names=tmp_path / "n.csv").names) == {7: "a, b"}


@pytest.mark.parametrize(
    ("text", "word"),
    [
        ("index\tlabel\n", "columns"),
        ("index,name\n1,a\n1,b\n", "twice"),
        ("index,name\n1.5,a\n", "label value"),
        ("index,name\n70000,a\n", "label value"),
        ("index,name\n1,\n", "no name"),
        ("index,name\n1\n", "too few"),
    ],
)
def test_a_bad_table_of_names_is_told_with_its_line(tmp_path, text, word):
    write_labels(tmp_path / "x.nii.gz", some_labels())
    (tmp_path / "n.csv").write_text(text)
    with pytest.raises(InputError, match=word) as caught:
        read_labels(tmp_path / "x.nii.gz", names=tmp_path / "n.csv")
    assert caught.value.sentence.startswith("n.csv")


def test_writers_refuse_a_name_that_is_not_nifti_and_a_place_that_is_taken(tmp_path):
    with pytest.raises(InputError, match=r"\.nii"):
        write_labels(tmp_path / "x.png", some_labels())
    write_labels(tmp_path / "x.nii", some_labels())
    with pytest.raises(InputError, match="exists"):
        write_labels(tmp_path / "x.nii", some_labels())
    write_labels(tmp_path / "x.nii", some_labels(highest=9), overwrite=True)
    assert [p.name for p in tmp_path.iterdir()] == ["x.nii"]
