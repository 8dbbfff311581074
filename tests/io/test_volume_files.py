"""Pairs of files, frames, thresholds and tables of names, through the one place that reads volumes."""

import gzip

import nibabel as nib
import numpy as np
import pytest

from volmap.io.reading import Reading
from volmap.io.volumes import read_image, read_labels, read_labels_with_findings, read_volume_with_findings
from volmap.types import ImageVolume, InputError, LabelVolume

OBLIQUE = np.array(  # the rotation (0.8 0.6 0 | -0.36 0.48 0.8 | 0.48 -0.64 0.6), slices 3 mm apart
    [[0.8, -0.36, 1.44, 7.125], [0.6, 0.48, -1.92, -3.5], [0, 0.8, 1.8, 11.25], [0, 0, 0, 1]]
)


def some(shape=(4, 5, 6), dtype=np.uint8, seed=1):
    return np.random.default_rng(seed).integers(0, 5, shape).astype(dtype)


def save(path, values, kind=nib.Nifti1Image, affine=OBLIQUE, **header):
    image = kind(values, affine)
    image.header.set_xyzt_units("mm")
    for key, value in header.items():
        image.header[key] = value
    nib.save(image, path)
    return path


@pytest.mark.parametrize("kind", [nib.Nifti1Pair, nib.Nifti2Pair])
@pytest.mark.parametrize("named", [".hdr", ".img"])
@pytest.mark.parametrize("packed", ["", "both", "img"])
def test_a_pair_of_header_and_voxels(tmp_path, kind, named, packed):
    # Independent library: nibabel writes the pair, and says where it lies.
    values = some(dtype=np.int16)
    save(tmp_path / "x.hdr", values, kind)
    for ending in {"": (), "both": (".hdr", ".img"), "img": (".img",)}[packed]:
        file = tmp_path / f"x{ending}"
        (tmp_path / f"x{ending}.gz").write_bytes(gzip.compress(file.read_bytes()))
        file.unlink()
    file = next(p for p in (tmp_path / f"x{named}", tmp_path / f"x{named}.gz") if p.exists())
    read = read_labels(file)
    assert np.array_equal(read.labels, values)
    assert np.allclose(read.grid.affine, OBLIQUE, atol=1e-6)


def test_half_a_pair(tmp_path):
    save(tmp_path / "x.hdr", some(), nib.Nifti1Pair)
    (tmp_path / "x.img").unlink()
    with pytest.raises(InputError, match=r"other file of the pair is missing, expected x\.img"):
        read_labels(tmp_path / "x.hdr")


def test_a_pair_whose_voxels_are_cut(tmp_path):
    save(tmp_path / "x.hdr", some(), nib.Nifti1Pair)
    (tmp_path / "x.img").write_bytes((tmp_path / "x.img").read_bytes()[:-1])
    with pytest.raises(InputError, match="cut short"):
        read_labels(tmp_path / "x.hdr")


@pytest.mark.parametrize("packed", [".nii", ".nii.gz"])
@pytest.mark.parametrize("frame", [0, 1, 2])
def test_the_chosen_frame_is_read(tmp_path, packed, frame):
    # Independent library: nibabel's last axis.
    values = some((4, 5, 6, 3))
    file = save(tmp_path / f"x{packed}", values)
    read, findings = read_labels_with_findings(file, Reading(frame=frame))
    assert np.array_equal(read.labels, nib.load(file).get_fdata()[..., frame])
    assert [f.code for f in findings] == ["frame-chosen"]
    assert f"frame {frame} of 3" in findings[0].sentence
    assert np.array_equal(read_image(file, Reading(frame=frame)).values, values[..., frame])


def test_frames_along_the_fifth_axis(tmp_path):
    values = some((4, 5, 6, 1, 3))
    file = save(tmp_path / "x.nii", values)
    assert np.array_equal(read_labels(file, Reading(frame=2)).labels, values[..., 0, 2])


@pytest.mark.parametrize(
    ("shape", "frame", "words"),
    [
        ((4, 5, 6, 3), None, "3 frames.*--frame N, counted from 0"),
        ((4, 5, 6, 3), 3, "no such frame, found 3 frames, expected --frame from 0 to 2"),
        ((4, 5, 6), 1, "no such frame"),
        ((4, 5, 6, 2, 2), 1, "several axes"),
    ],
)
def test_frames_that_cannot_be_read(tmp_path, shape, frame, words):
    file = save(tmp_path / "x.nii", some(shape))
    with pytest.raises(InputError, match=words) as caught:
        read_labels(file, Reading(frame=frame))
    assert caught.value.refused


@pytest.mark.parametrize("intent", [1004, 1005, 1006, 1007, 2003])
def test_a_component_of_a_vector_is_no_frame(tmp_path, intent):
    # Truth: intent codes of the official nifti1.h.
    file = save(tmp_path / "x.nii", some((4, 5, 6, 1, 3)), intent_code=intent)
    with pytest.raises(InputError, match="not one number a voxel"):
        read_image(file, Reading(frame=0))


def test_more_voxels_than_the_header_claims(tmp_path):
    # a header of another file, or one with smaller dimensions, would put every voxel elsewhere
    values = some((4, 5, 6))
    file = save(tmp_path / "x.nii", values)
    data = bytearray(file.read_bytes())
    data[42:44] = (3).to_bytes(2, "little")
    file.write_bytes(data)
    with pytest.raises(InputError, match="more than its header claims"):
        read_labels(file)


def test_one_probability_map_by_a_threshold(tmp_path):
    # By hand: at least 0.5; NaN is below.
    values = np.zeros((2, 2, 2), np.float32)
    values.flat[:4] = [0.49, 0.5, 1.0, np.nan]
    file = save(tmp_path / "x.nii.gz", values)
    volume, findings = read_labels_with_findings(file, Reading(threshold=0.5))
    assert volume.labels.ravel().tolist() == [0, 1, 1, 0, 0, 0, 0, 0]
    assert "at least 0.5; 1 values are not a number" in findings[-1].sentence
    again, _ = read_volume_with_findings(file, Reading(threshold=0.5))
    assert isinstance(again, LabelVolume)


def test_a_threshold_is_met_in_the_file_s_own_precision(tmp_path):
    # 0.7 as float32 is less than 0.7 as float64; a user who reads 0.7 in the file means that number
    file = save(tmp_path / "x.nii.gz", np.full((2, 2, 2), 0.7, np.float32))
    assert read_labels(file, Reading(threshold=0.7)).present == (1,)


def test_probabilities_one_frame_a_label(tmp_path):
    # By hand: the largest of at least 0.4; the earlier of two equal ones; none below 0.4.
    frames = np.array([[0.9, 0.1, 0.45, 0.3], [0.1, 0.8, 0.45, 0.3], [0.0, 0.1, 0.1, 0.4]])
    values = frames.T.reshape(4, 1, 1, 3).astype(np.float32)
    file = save(tmp_path / "x.nii.gz", values)
    (tmp_path / "names.tsv").write_text("index\tname\n1\tstem\n2\tleaf\n3\troot\n")
    volume, findings = read_labels_with_findings(file, Reading(tmp_path / "names.tsv", threshold=0.4))
    assert volume.labels.ravel().tolist() == [1, 2, 1, 3]
    assert volume.name_of(3) == "root"
    assert findings[-1].code == "labels-by-threshold"
    alone = read_labels(file, Reading(frame=1, threshold=0.4))
    assert alone.labels.ravel().tolist() == [0, 1, 1, 0]


def test_a_slope_scales_before_the_threshold(tmp_path):
    # Truth: nifti1.h, scl_slope; 128 / 255 = 0.502
    image = nib.Nifti1Image(np.full((2, 2, 2), 128, np.uint8), OBLIQUE)
    image.header.set_slope_inter(1 / 255, 0)
    image.header.set_xyzt_units("mm")
    nib.save(image, tmp_path / "x.nii")
    assert read_labels(tmp_path / "x.nii", Reading(threshold=0.5)).present == (1,)
    assert read_labels(tmp_path / "x.nii", Reading(threshold=0.51)).present == ()


def test_a_share_of_one_does_not_fit_values_of_255(tmp_path):
    # half of certainty is 127.5 there; 0.5 would take every voxel that is not 0
    file = save(tmp_path / "x.nii", np.full((2, 2, 2), 200, np.uint8))
    with pytest.raises(InputError, match=r"values up to 200.*half of 255 is 127\.5"):
        read_labels(file, Reading(threshold=0.5))
    assert read_labels(file, Reading(threshold=127.5)).present == (1,)


def test_an_image_takes_no_threshold(tmp_path):
    file = save(tmp_path / "x.nii", np.full((2, 2, 2), 0.7, np.float32))
    volume, _ = read_volume_with_findings(file, Reading(threshold=0.5), kind="image")
    assert isinstance(volume, ImageVolume)


BIDS = [  # (table, where it lies above or beside the volume, whether it applies)
    ("sub-01_space-scan_desc-organs_dseg.tsv", "sub-01/anat", True),
    ("sub-01_dseg.tsv", "sub-01/anat", True),
    ("desc-organs_dseg.tsv", "", True),
    ("dseg.tsv", "", True),
    ("dseg.tsv", "..", False),
    ("desc-other_dseg.tsv", "", False),
    ("desc-organs_probseg.tsv", "", False),
    ("sub-02_dseg.tsv", "sub-01", False),
]


@pytest.mark.parametrize(("table", "folder", "applies"), BIDS)
def test_bids_names_are_inherited(tmp_path, table, folder, applies):
    # Truth: BIDS specification 1.10, "The Inheritance Principle" and "Segmentations" (index, name required).
    place = tmp_path / "top" / "derivatives"
    (place / "sub-01" / "anat").mkdir(parents=True)
    (place / "dataset_description.json").write_text("{}")
    file = save(place / "sub-01/anat/sub-01_space-scan_desc-organs_dseg.nii.gz", some())
    (place / folder / table).write_text(
        "index\tname\tabbreviation\tcolor\n1\tliver\tLI\t#ff0000\n2\tn/a\t\t\n"
    )
    assert dict(read_labels(file).names) == ({1: "liver"} if applies else {})


def test_the_nearest_bids_table_counts_and_two_alike_are_refused(tmp_path):
    file = save(tmp_path / "sub-01_desc-a_space-b_dseg.nii.gz", some())
    (tmp_path / "dseg.tsv").write_text("Index\tName\n1\tleast\n")
    (tmp_path / "sub-01_dseg.tsv").write_text("index\tname\n1\tmore\n")
    assert read_labels(file).name_of(1) == "more"
    (tmp_path / "desc-a_dseg.tsv").write_text("index\tname\n1\tother\n")
    with pytest.raises(InputError, match=r"two tables of names apply alike.*--names"):
        read_labels(file)
    assert read_labels(file, Reading(tmp_path / "dseg.tsv")).name_of(1) == "least"


def test_nothing_of_the_header_s_free_text_goes_on(tmp_path):
    # descrip, aux_file, db_name, intent_name and header extensions can hold names and dates (nifti1.h)
    from volmap.io.nifti import write_image, write_labels

    image = nib.Nifti1Image(some(), OBLIQUE)
    secret = b"Doe^Jane 19700101"
    for key in ("descrip", "aux_file", "db_name", "intent_name"):
        image.header[key] = secret[:10] if key == "db_name" else secret[:16]
    image.header.extensions.append(nib.nifti1.Nifti1Extension("comment", secret))
    image.header.set_xyzt_units("mm")
    nib.save(image, tmp_path / "x.nii")
    assert b"Doe^Jane" in (tmp_path / "x.nii").read_bytes()
    write_labels(tmp_path / "labels.nii", read_labels(tmp_path / "x.nii"))
    write_image(tmp_path / "image.nii", read_image(tmp_path / "x.nii"))
    for name in ("labels.nii", "image.nii"):
        data = (tmp_path / name).read_bytes()
        assert b"Doe" not in data
        assert b"1970" not in data
        assert data[348:352] == bytes(4)
