"""Label volumes as DICOM Segmentation, read again by highdicom and by plain pydicom.

Truth: the label volume itself, voxel for voxel in world space, as an independent library (highdicom) and a
reading of the bits by hand (PS3.5, 8.2) place them; PS3.3's tables for what must be in the object.
"""

from tempfile import TemporaryDirectory

import numpy as np
import pydicom
import pytest
from dicom_standard import BY_HAND, faults, faults_by_hand
from hypothesis import HealthCheck, Phase, given, settings
from hypothesis import strategies as st
from pydicom import config
from scipy.spatial.transform import Rotation

from volmap.io.dicom.own_labels import label_in
from volmap.io.dicom.segmentation_reading import read_segmentation
from volmap.io.dicom.segmentation_writing import write_segmentation
from volmap.io.dicom.uids import uids_of_scan
from volmap.types import Code, Grid, InputError, LabelCodes, LabelVolume

SCAN = uids_of_scan("c" * 64)
TABLE = BY_HAND | {
    "C.8.20.1 Segmentation Series": "Modality 1, SeriesNumber 1",
    "C.7.6.16 Multi-frame Functional Groups": "ContentDate 1, ContentTime 1, InstanceNumber 1, "
    "NumberOfFrames 1, SharedFunctionalGroupsSequence 1, PerFrameFunctionalGroupsSequence 1",
    "C.7.6.16.2.1 Pixel Measures": "SharedFunctionalGroupsSequence/PixelMeasuresSequence 1, "
    "SharedFunctionalGroupsSequence/PixelMeasuresSequence/PixelSpacing 1, "
    "SharedFunctionalGroupsSequence/PixelMeasuresSequence/SliceThickness 1",
    "C.7.6.16.2.2 Frame Content": "PerFrameFunctionalGroupsSequence/FrameContentSequence 1, "
    "PerFrameFunctionalGroupsSequence/FrameContentSequence/DimensionIndexValues 1",
    "C.7.6.16.2.3 Plane Position": "PerFrameFunctionalGroupsSequence/PlanePositionSequence 1, "
    "PerFrameFunctionalGroupsSequence/PlanePositionSequence/ImagePositionPatient 1",
    "C.7.6.16.2.4 Plane Orientation": "SharedFunctionalGroupsSequence/PlaneOrientationSequence 1, "
    "SharedFunctionalGroupsSequence/PlaneOrientationSequence/ImageOrientationPatient 1",
    "C.7.6.17 Multi-frame Dimension": "DimensionOrganizationSequence 1, DimensionIndexSequence 1, "
    "DimensionOrganizationSequence/DimensionOrganizationUID 1, "
    "DimensionIndexSequence/DimensionOrganizationUID 1, "
    "DimensionIndexSequence/DimensionIndexPointer 1, DimensionIndexSequence/FunctionalGroupPointer 1",
    "C.7.6.3 Image Pixel": "Rows 1, Columns 1, PixelData 1",
    "C.8.20.2 Segmentation Image": "ImageType 1, ContentLabel 1, ContentDescription 2, SamplesPerPixel 1, "
    "PhotometricInterpretation 1, PixelRepresentation 1, BitsAllocated 1, BitsStored 1, HighBit 1, "
    "LossyImageCompression 1, SegmentationType 1, SegmentSequence 1",
    "C.8.20.2 a segment": "SegmentSequence/SegmentNumber 1, SegmentSequence/SegmentLabel 1, "
    "SegmentSequence/SegmentAlgorithmType 1, SegmentSequence/SegmentAlgorithmName 1, "
    "SegmentSequence/SegmentedPropertyCategoryCodeSequence 1, "
    "SegmentSequence/SegmentedPropertyTypeCodeSequence 1",
}
BINARY_ONLY = {
    "C.8.20.3.1 Segmentation macro": "PerFrameFunctionalGroupsSequence/SegmentIdentificationSequence 1, "
    "PerFrameFunctionalGroupsSequence/SegmentIdentificationSequence/ReferencedSegmentNumber 1"
}
OBLIQUE = Rotation.from_euler("xyz", [0.3, -0.2, 0.7]).as_matrix()
PLACES = {
    "axial": (np.eye(3), (2.0, 2.0, 2.0)),
    "left-handed, anisotropic": (np.diag([-1.0, 1, 1]), (0.7, 1.3, 4.0)),
    "sagittal": (np.eye(3)[:, [1, 2, 0]], (1.0, 2.0, 3.0)),
    "oblique": (OBLIQUE, (1.0, 2.0, 3.0)),
    "oblique, coronal, left-handed": (OBLIQUE[:, [0, 2, 1]], (0.9, 1.1, 2.5)),
}
LEFT = Code("7771000", "SCT", "Left")
LIVER = LabelCodes(
    Code("91723000", "SCT", "Anatomical Structure"),
    Code("10200004", "SCT", "Liver"),
    Code("113345001", "SCT", "Abdomen"),
    LEFT,
    LEFT,
)


def volume(place="axial", values=(3, 7, 12), shape=(11, 7, 6)):
    axes, spacing = PLACES[place]
    matrix = np.eye(4)
    matrix[:3, :3] = axes * np.array(spacing)
    matrix[:3, 3] = 4.5, -30.25, 12.125
    matrix = matrix.astype(np.float32).astype(float)  # as a NIfTI file would have it
    rng = np.random.default_rng(5)
    labels = rng.choice([0, *values], size=shape).astype(np.uint16)
    labels[:, :, [0, 3]] = 0  # planes without any label, one at the end
    labels[labels == values[-1]] = 0
    labels[4:6, 2, 4] = values[-1]  # a label on one plane alone
    names = {values[0]: "kidney, outer part", values[1]: "Leber ü"}
    return LabelVolume(Grid(shape, matrix), labels, names, "made.nii", {values[1]: LIVER})


@pytest.fixture(autouse=True)
def strict(monkeypatch):
    """pydicom refuses what its own validation does not like, in reading and in writing."""
    monkeypatch.setattr(config.settings, "reading_validation_mode", config.RAISE)
    monkeypatch.setattr(config.settings, "writing_validation_mode", config.RAISE)


@pytest.fixture(params=["binary", "labelmap"])
def coding(request):
    return request.param


@pytest.fixture(params=PLACES)
def made(request, coding, tmp_path):
    labels = volume(request.param)
    path = tmp_path / "labels.dcm"
    write_segmentation(path, labels, scan=SCAN, coding=coding, made_by="Made for a test.")
    return path, labels, coding


def label_of_segment(ds):
    return {int(s.SegmentNumber): label_in(s.SegmentDescription) or 0 for s in ds.SegmentSequence}


def require_same_voxels(labels, array, affine_lps):
    """Every voxel of a whole volume (array[k, row, column]) is the label there, in world space."""
    assert array.size == labels.labels.size
    index = np.argwhere(np.ones(array.shape, bool))
    lps = index @ affine_lps[:3, :3].T + affine_lps[:3, 3]
    where = labels.grid.to_index(lps * [-1, -1, 1])
    nearest = np.rint(where).astype(int)
    assert np.abs(where - nearest).max() < 1e-6
    assert np.array_equal(array.ravel(), labels.labels[tuple(nearest.T)])


def test_highdicom_finds_every_voxel_at_its_place(made):
    import highdicom

    path, labels, _ = made
    seg = highdicom.seg.segread(path)
    found = seg.get_volume(combine_segments=True)
    table = np.zeros(65536, np.uint16)
    for number, label in label_of_segment(seg).items():
        table[number] = label
    require_same_voxels(labels, table[found.array], found.affine)


def test_frames_read_by_hand_are_the_labels(made):
    path, labels, coding = made
    ds = pydicom.dcmread(path)
    shape = ds.NumberOfFrames, ds.Rows, ds.Columns
    n = int(np.prod(shape))
    if coding == "binary":  # PS3.5, 8.2: from the least significant bit on, no gaps between frames
        frames = np.unpackbits(np.frombuffer(ds.PixelData, np.uint8), bitorder="little")[:n].reshape(shape)
    else:
        frames = np.frombuffer(ds.PixelData, f"<u{ds.BitsAllocated // 8}")[:n].reshape(shape)
    shared, label_of = ds.SharedFunctionalGroupsSequence[0], label_of_segment(ds)
    right, down = np.array(shared.PlaneOrientationSequence[0].ImageOrientationPatient, float).reshape(2, 3)
    between_rows, between_columns = map(float, shared.PixelMeasuresSequence[0].PixelSpacing)
    found = np.zeros(labels.grid.shape, np.uint16)
    for frame, group in zip(frames, ds.PerFrameFunctionalGroupsSequence, strict=True):
        rows, columns = np.nonzero(frame)
        first = np.array(group.PlanePositionSequence[0].ImagePositionPatient, float)
        lps = first + np.outer(columns * between_columns, right) + np.outer(rows * between_rows, down)
        i, j, k = np.rint(labels.grid.to_index(lps * [-1, -1, 1])).astype(int).T
        if coding == "binary":
            number = group.SegmentIdentificationSequence[0].ReferencedSegmentNumber
            found[i, j, k] = label_of[number]
        else:
            found[i, j, k] = frame[rows, columns]
    assert np.array_equal(found, labels.labels)


def test_it_is_as_the_standard_has_it(made):
    path, _, coding = made
    ds = pydicom.dcmread(path)
    assert ds.file_meta.MediaStorageSOPClassUID == ds.SOPClassUID
    assert faults(ds, conditional=("frame-of-reference",)) == []
    assert faults_by_hand(ds, TABLE | (BINARY_ONLY if coding == "binary" else {})) == []
    assert ds.Modality == "SEG"
    assert ds.LossyImageCompression == "00"
    assert ds.SegmentationType == coding.upper()
    bits = 1 if coding == "binary" else 8
    assert (ds.BitsAllocated, ds.BitsStored, ds.HighBit) == (bits, bits, bits - 1)
    assert (ds.FrameOfReferenceUID, ds.StudyInstanceUID) == (SCAN.frame, SCAN.study)
    numbers = [s.SegmentNumber for s in ds.SegmentSequence]
    assert numbers == ([1, 2, 3] if coding == "binary" else [0, 3, 7, 12])  # C.8.20.2.4
    told = ds.ContributingEquipmentSequence[0].ContributionDescription
    assert told.startswith("Made for a test. Frame of reference: new.")
    assert told.endswith("clinical.")


def test_dimension_indices_count_the_places_from_one_along_the_normal(made):
    ds = pydicom.dcmread(made[0])
    right, down = np.array(
        ds.SharedFunctionalGroupsSequence[0].PlaneOrientationSequence[0].ImageOrientationPatient, float
    ).reshape(2, 3)
    normal = np.cross(right, down)
    places = {}
    for group in ds.PerFrameFunctionalGroupsSequence:
        depth = np.array(group.PlanePositionSequence[0].ImagePositionPatient, float) @ normal
        places.setdefault(int(np.atleast_1d(group.FrameContentSequence[0].DimensionIndexValues)[-1]), depth)
    assert sorted(places) == [1, 2, 3, 4, 5, 6]
    assert (np.diff([places[n] for n in sorted(places)]) > 0).all()


def test_names_and_codes_go_along_and_what_is_missing_is_said(made):
    ds = pydicom.dcmread(made[0])
    segments = {label_in(s.SegmentDescription): s for s in ds.SegmentSequence}
    assert segments[3].SegmentLabel == "kidney, outer part"
    assert segments[7].SegmentLabel == "Leber ü"
    assert segments[12].SegmentLabel == "label 12"
    kind = segments[7].SegmentedPropertyTypeCodeSequence[0]
    assert (kind.CodeValue, kind.CodingSchemeDesignator, kind.CodeMeaning) == ("10200004", "SCT", "Liver")
    assert segments[7].SegmentedPropertyCategoryCodeSequence[0].CodeMeaning == "Anatomical Structure"
    assert kind.SegmentedPropertyTypeModifierCodeSequence[0].CodeMeaning == "Left"
    assert segments[7].AnatomicRegionSequence[0].AnatomicRegionModifierSequence[0].CodeValue == "7771000"
    assert "AnatomicRegionSequence" not in segments[3]
    assert segments[7].SegmentDescription == "label 7"
    assert segments[3].SegmentedPropertyTypeCodeSequence[0].CodeMeaning == "Tissue"
    assert "no code was given" in segments[3].SegmentDescription


def test_binary_has_few_frames_and_the_whole_grid(tmp_path):
    path = tmp_path / "labels.dcm"
    write_segmentation(path, volume(), scan=SCAN)
    ds = pydicom.dcmread(path)
    owners = [
        g.SegmentIdentificationSequence[0].ReferencedSegmentNumber
        for g in ds.PerFrameFunctionalGroupsSequence
    ]
    assert [owners.count(n) for n in (1, 2, 3)] == [6, 4, 1]
    assert len(ds.PixelData) % 2 == 0


def test_labels_above_255_take_two_bytes(tmp_path, coding):
    import highdicom

    path, labels = tmp_path / "labels.dcm", volume(values=(3, 255, 40000))
    write_segmentation(path, labels, scan=SCAN, coding=coding)
    seg = highdicom.seg.segread(path)
    table = np.zeros(65536, np.uint16)
    for number, label in label_of_segment(seg).items():
        table[number] = label
    found = seg.get_volume(combine_segments=True)
    require_same_voxels(labels, table[found.array], found.affine)
    assert pydicom.dcmread(path).BitsAllocated == (1 if coding == "binary" else 16)


def test_same_labels_same_bytes_other_labels_another_identifier(tmp_path, coding):
    paths = [tmp_path / f"{n}.dcm" for n in range(3)]
    changed = np.array(volume().labels)
    changed[5, 5, 5] = 3 if changed[5, 5, 5] != 3 else 7
    other = LabelVolume(volume().grid, changed, volume().names, "made.nii")
    for path, labels in zip(paths, (volume(), volume(), other), strict=True):
        write_segmentation(path, labels, scan=SCAN, coding=coding)
    assert paths[0].read_bytes() == paths[1].read_bytes()
    a, b = (pydicom.dcmread(path) for path in (paths[0], paths[2]))
    assert a.SOPInstanceUID != b.SOPInstanceUID
    assert a.StudyInstanceUID == b.StudyInstanceUID


def test_names_that_no_attribute_may_hold_are_made_to_fit(tmp_path):
    labels = volume()
    odd = LabelVolume(labels.grid, labels.labels, {3: "a\\b\nc" + "x" * 80, 7: "\t"}, "made.nii")
    path = tmp_path / "labels.dcm"
    write_segmentation(path, odd, scan=SCAN)
    found = [s.SegmentLabel for s in pydicom.dcmread(path).SegmentSequence]
    assert found[0].startswith("a b c")
    assert len(found[0]) == 64
    assert found[1] == "segment 2"


@pytest.mark.parametrize(
    ("change", "told"), [("empty", "holds no label"), ("sheared", "not orthogonal"), ("name", ".dcm")]
)
def test_what_cannot_be_written_is_refused_and_nothing_is_left(tmp_path, change, told):
    labels, name = volume(), "labels.dcm"
    if change == "empty":
        labels = LabelVolume(labels.grid, np.zeros_like(labels.labels), {}, "made.nii")
    elif change == "sheared":
        matrix = np.array(labels.grid.affine)
        matrix[:3, 2] += 0.05 * matrix[:3, 0]
        labels = LabelVolume(Grid(labels.grid.shape, matrix), labels.labels, {}, "made.nii")
    else:
        name = "labels.nii"
    with pytest.raises(InputError, match=told):
        write_segmentation(tmp_path / name, labels, scan=SCAN)
    assert not list(tmp_path.iterdir())


def test_the_label_in_a_description_is_found_and_others_words_are_not_taken_for_one():
    assert label_in("label 17") == 17
    assert label_in("label 17; no code was given, tissue stands for anything") == 17
    for words in ("", "label", "labels 17", "a label 17", "label 17 or so", "label 0", "label 70000"):
        assert label_in(words) is None


def test_what_was_written_is_read_again_voxel_for_voxel(made):
    # Law: writing and reading undo each other, left-handed, oblique and non-axial grids included; the digest
    # (shape, voxels, affine as float32) is how a scan is known again.
    path, labels, _ = made
    found, _ = read_segmentation(path)
    assert found.sha256 == labels.sha256
    assert found.grid.same_place(labels.grid, 1e-9)
    assert {n: found.name_of(n) for n in found.present} == {n: labels.name_of(n) for n in labels.present}
    assert dict(found.codes) == {7: LIVER}


@pytest.mark.parametrize(
    ("value", "keyword"),
    [("1234567890123456", "CodeValue"), ("1" * 18, "LongCodeValue"), ("urn:oid:1.2.3", "URNCodeValue")],
)
def test_codes_of_any_length_stand_where_they_may(tmp_path, value, keyword):
    labels, path = volume(), tmp_path / "labels.dcm"
    code = LabelCodes(Code(value, "SCT", "a"), Code(value, "SCT", "b"))
    codes = {7: code}
    write_segmentation(path, LabelVolume(labels.grid, labels.labels, {}, "made.nii", codes), scan=SCAN)
    ds = pydicom.dcmread(path)
    kind = next(s for s in ds.SegmentSequence if s.SegmentDescription == "label 7")
    assert kind.SegmentedPropertyTypeCodeSequence[0][keyword].value == value
    assert read_segmentation(path)[0].codes[7] == code


def test_others_descriptions_do_not_renumber(tmp_path):
    path = tmp_path / "labels.dcm"
    write_segmentation(path, volume(), scan=SCAN)
    ds = pydicom.dcmread(path)
    ds.ManufacturerModelName = "somebody's"
    ds.save_as(path)
    assert read_segmentation(path)[0].present == (1, 2, 3)


@settings(
    phases=[Phase.explicit, Phase.reuse, Phase.generate],
    max_examples=40,
    deadline=None,
    suppress_health_check=[HealthCheck.function_scoped_fixture],
)
@given(st.data())
def test_any_grid_comes_back_voxel_for_voxel(data):
    # Law, as above, for grids of any turn, hand, voxel and shape, one plane thick among them (which has no
    # hand, and no third direction of its own).  The digest needs every bit of the affine, which 16 letters
    # of a Decimal String do not always hold; of ordinary grids it is the same (above).
    shape = tuple(data.draw(st.integers(1, 6)) for _ in range(3))
    turn = Rotation.random(random_state=data.draw(st.integers(0, 2**32 - 1))).as_matrix()
    spacing = np.array([data.draw(st.floats(0.2, 6)) for _ in range(3)])
    matrix = np.eye(4)
    matrix[:3, :3] = turn * spacing * [1, 1, data.draw(st.sampled_from([-1, 1]))]
    matrix[:3, 3] = [data.draw(st.integers(-900_000, 900_000)) / 1000 for _ in range(3)]
    values = data.draw(st.lists(st.integers(1, 65535), min_size=1, max_size=4, unique=True))
    labels = np.random.default_rng(1).choice([0, *values], size=shape).astype(np.uint16)
    labels.flat[0] = values[0]
    given_labels = LabelVolume(Grid(shape, matrix.astype(np.float32).astype(float)), labels)
    coding = data.draw(st.sampled_from(["binary", "labelmap"]))
    with TemporaryDirectory() as place:
        write_segmentation(f"{place}/x.dcm", given_labels, scan=SCAN, coding=coding)
        found, _ = read_segmentation(f"{place}/x.dcm")
    assert np.array_equal(found.labels, given_labels.labels)
    assert found.grid.same_place(given_labels.grid, 1e-8)
