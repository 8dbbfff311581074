"""Segmentation objects in: against highdicom as independent writer and placer, and pydicom's packaged file.

Sections are of DICOM PS3.3 (2024), quoted from memory.
"""

from __future__ import annotations

from pathlib import Path

import highdicom as hd
import numpy as np
import pydicom
import pytest
from dicom_scene import PLACES, segmentation, some_labels, to_ras
from pydicom.data import get_testdata_file

from volmap.io.reading import Reading
from volmap.io.volumes import read_labels, read_labels_with_findings, read_volume_with_findings
from volmap.types import InputError, LabelVolume

SHAPE = (6, 7, 9)  # planes, rows, columns: no byte boundary falls on a frame (63 bits)


def world_by_highdicom(ds: pydicom.Dataset, frame: int) -> np.ndarray:
    """(rows, columns, 3) RAS+ of a frame's pixels by highdicom's transformer (columns, rows in; LPS out)."""
    shared, own = ds.SharedFunctionalGroupsSequence[0], ds.PerFrameFunctionalGroupsSequence[frame]
    place = hd.spatial.PixelToReferenceTransformer(
        own.PlanePositionSequence[0].ImagePositionPatient,
        shared.PlaneOrientationSequence[0].ImageOrientationPatient,
        shared.PixelMeasuresSequence[0].PixelSpacing,
    )
    rows, columns = np.indices((ds.Rows, ds.Columns))
    pixels = np.stack([columns.ravel(), rows.ravel()], axis=1)
    return to_ras(place(pixels)).reshape(ds.Rows, ds.Columns, 3)


def labels_at(volume: LabelVolume, world: np.ndarray) -> np.ndarray:
    """Labels at RAS+ points that must be voxel centres."""
    index = volume.grid.to_index(world.reshape(-1, 3))
    assert np.abs(index - np.rint(index)).max() < 1e-4
    i, j, k = np.rint(index).astype(int).T
    return volume.labels[i, j, k].reshape(world.shape[:-1])


@pytest.mark.parametrize("place", PLACES)
@pytest.mark.parametrize("kind", ["BINARY", "LABELMAP"])
@pytest.mark.parametrize("whole", [True, False])
def test_reads_what_highdicom_wrote_voxel_for_voxel(
    tmp_path: Path, place: str, kind: str, whole: bool
) -> None:
    labels = some_labels(SHAPE, 3, seed=len(place))
    written = segmentation(PLACES[place], labels, kind, omit_empty_frames=not whole)
    written.save_as(tmp_path / "seg.dcm")
    volume, findings = read_labels_with_findings(tmp_path / "seg.dcm")
    # place by equation C.7.6.2.1-1 from the affine the scene asked for, not from anything we read
    for k, plane in enumerate(labels):
        row, column = np.indices(plane.shape)
        at = np.stack([np.full(plane.shape, k), row, column, np.ones(plane.shape)], axis=-1) @ PLACES[place].T
        np.testing.assert_array_equal(labels_at(volume, to_ras(at[..., :3])), plane)
    assert volume.labels.shape == (9, 7, 6)
    assert np.count_nonzero(volume.labels) == np.count_nonzero(labels)
    left_out = [f for f in findings if f.code == "planes_left_out"]
    assert len(left_out) == (not whole)  # the empty plane in the middle
    assert volume.name == "seg.dcm"


@pytest.mark.parametrize("place", PLACES)
def test_voxels_lie_where_highdicom_places_its_frames(tmp_path: Path, place: str) -> None:
    labels = some_labels(SHAPE, 2, seed=4)
    segmentation(PLACES[place], labels, "BINARY").save_as(tmp_path / "seg.dcm")
    ds, volume = pydicom.dcmread(tmp_path / "seg.dcm"), read_labels(tmp_path / "seg.dcm")
    stored = ds.pixel_array
    assert len(stored) == 10  # five planes with voxels, two segments
    for n, frame in enumerate(ds.PerFrameFunctionalGroupsSequence):
        segment = frame.SegmentIdentificationSequence[0].ReferencedSegmentNumber
        found = labels_at(volume, world_by_highdicom(ds, n)) == segment
        np.testing.assert_array_equal(found, stored[n] == 1)


@pytest.mark.parametrize("place", PLACES)
def test_grid_is_the_one_that_was_written(tmp_path: Path, place: str) -> None:
    """All planes written: the first voxel is that of the first frame, so the order of a file is kept."""
    labels = some_labels(SHAPE, 2, seed=5)
    segmentation(PLACES[place], labels, "LABELMAP", omit_empty_frames=False).save_as(tmp_path / "s.dcm")
    volume = read_labels(tmp_path / "s.dcm")
    first = pydicom.dcmread(tmp_path / "s.dcm").PerFrameFunctionalGroupsSequence[0].PlanePositionSequence[0]
    origin = to_ras(np.array(first.ImagePositionPatient, float))
    np.testing.assert_allclose(volume.grid.affine[:3, 3], origin, atol=1e-5)
    twin = hd.seg.segread(tmp_path / "s.dcm").get_volume(combine_segments=True)
    found = np.moveaxis(np.asarray(volume.labels), (0, 1, 2), (2, 1, 0))
    affine = np.diag([-1.0, -1.0, 1.0, 1.0]) @ volume.grid.affine[:, [2, 1, 0, 3]]
    flipped = np.sign(twin.affine[:3, 0] @ affine[:3, 0]) < 0  # highdicom sorts planes its own way
    theirs = twin.array[::-1] if flipped else twin.array
    np.testing.assert_array_equal(found, theirs)
    start = twin.affine @ [len(theirs) - 1 if flipped else 0, 0, 0, 1]
    np.testing.assert_allclose(affine[:3, 3], start[:3], atol=1e-5)
    np.testing.assert_allclose(np.abs(affine[:3, :3]), np.abs(twin.affine[:3, :3]), atol=1e-6)


def test_frames_in_any_order(tmp_path: Path) -> None:
    """Law: the order of frames in a file does not change what lies where (each has its own place)."""
    written = segmentation(
        PLACES["oblique"], some_labels(SHAPE, 3, seed=7), "LABELMAP", omit_empty_frames=False
    )
    written.save_as(tmp_path / "a.dcm")
    order = [4, 0, 5, 2, 1, 3]
    n = written.Rows * written.Columns
    frames = [written.PixelData[k * n : (k + 1) * n] for k in order]
    written.PixelData = b"".join(frames) + b"\0" * (len(written.PixelData) - 6 * n)
    written.PerFrameFunctionalGroupsSequence = [written.PerFrameFunctionalGroupsSequence[k] for k in order]
    written.save_as(tmp_path / "b.dcm")
    a, b = read_labels(tmp_path / "a.dcm"), read_labels(tmp_path / "b.dcm")
    assert a.grid.handedness == "left"  # highdicom lists planes against their normal, and that order is kept
    assert b.grid.handedness == "right"
    index = np.argwhere(np.ones(a.labels.shape, bool))
    np.testing.assert_array_equal(labels_at(b, a.grid.to_world(index)), a.labels.ravel())


def test_names_and_codes_are_kept(tmp_path: Path) -> None:
    """C.8.20.4 Segment Description; 8.8 coded entries: Liver is SCT 10200004 (pydicom's own tables)."""
    segmentation(PLACES["axial"], some_labels(SHAPE, 3, seed=1), "BINARY").save_as(tmp_path / "s.dcm")
    volume, findings = read_labels_with_findings(tmp_path / "s.dcm")
    assert dict(volume.names) == {1: "part 1", 2: "part 2", 3: "part 3"}
    assert (volume.codes[3].kind.value, volume.codes[3].kind.scheme) == ("10200004", "SCT")
    assert volume.codes[1].category.meaning == "Organ"
    assert volume.codes[1].region is not None
    assert volume.codes[1].region.meaning == "Abdomen"
    assert [f.code for f in findings if "names" in f.code] == ["names_from_segments"]
    (tmp_path / "names.tsv").write_text("index\tname\n1\tone\n2\ttwo\n3\tthree\n")
    named, findings = read_labels_with_findings(tmp_path / "s.dcm", Reading(names=tmp_path / "names.tsv"))
    assert named.names[2] == "two"
    assert not [f for f in findings if f.code == "names_from_segments"]


@pytest.mark.parametrize(
    ("name", "number", "label", "kept"),
    [
        ("Zeiss^Anna", "4711", "Anna Zeiss, lobe 1", False),
        ("Zeiss^Anna", "4711", "ZEISS_ANNA", False),
        ("Zeiss^Anna", "4711", "lobe 4711", False),
        ("Zeiss^Anna", "4711", "lobe of Zeiss", True),  # one word alone may be anatomy, as Peyer or Lisfranc
        ("Zeiss^Anna", "1", "part 1", True),  # too short to tell anybody
        ("Liver", "Liver", "Liver", True),  # what its code means
        ("", "", "part 1", True),
    ],
)
def test_a_label_that_names_the_patient_is_left_out(
    tmp_path: Path, name: str, number: str, label: str, kept: bool
) -> None:
    """Ours: names that leave must not be the patient's (PS3.15, E.1: Patient's Name, Patient ID)."""
    labels = some_labels(SHAPE, 1, seed=1)
    written = segmentation(PLACES["axial"], labels, "BINARY")
    written.PatientName, written.PatientID = name, number
    written.SegmentSequence[0].SegmentLabel = label
    if label == "Liver":
        written.SegmentSequence[0].SegmentedPropertyTypeCodeSequence[0].CodeMeaning = "Liver"
    written.save_as(tmp_path / "s.dcm")
    volume, findings = read_labels_with_findings(tmp_path / "s.dcm")
    assert volume.names[1] == (label if kept else "Spleen")
    assert ("names_left_out" in {f.code for f in findings}) == (not kept)
    assert label not in " ".join(f.line for f in findings)


def test_label_map_of_sixteen_bits_and_another_background(tmp_path: Path) -> None:
    """LABELMAP: a pixel is its Segment Number, 8 or 16 bits (C.8.20.2); Pixel Padding Value is outside."""
    labels = some_labels(SHAPE, 3, seed=9)
    written = segmentation(PLACES["axial"], labels, "LABELMAP", omit_empty_frames=False)
    numbers = np.where(labels == 0, 65535, labels.astype(np.uint16) * 300).astype("<u2")
    written.BitsAllocated, written.BitsStored, written.HighBit = 16, 16, 15
    written.PixelPaddingValue = 65535
    written.PixelData = numbers.tobytes()
    for segment in written.SegmentSequence:
        segment.SegmentNumber = segment.SegmentNumber * 300 or 65535
    written.save_as(tmp_path / "s.dcm")
    volume, findings = read_labels_with_findings(tmp_path / "s.dcm")
    np.testing.assert_array_equal(volume.labels, np.where(labels == 0, 0, labels * np.uint16(300)).T)
    assert sorted(volume.names) == [300, 600, 900]
    assert "segments_not_described" not in {f.code for f in findings}


def test_numbers_that_no_segment_describes_are_said(tmp_path: Path) -> None:
    written = segmentation(PLACES["axial"], some_labels(SHAPE, 3, seed=9), "LABELMAP")
    del written.SegmentSequence[2]
    written.save_as(tmp_path / "s.dcm")
    _, findings = read_labels_with_findings(tmp_path / "s.dcm")
    assert [f.sentence for f in findings if f.code == "segments_not_described"]


def test_shares_need_a_threshold_and_keep_to_it(tmp_path: Path) -> None:
    """FRACTIONAL stores round(share * Maximum Fractional Value), C.8.20.2; here the shares are compared."""
    shares = np.random.default_rng(3).integers(0, 201, SHAPE) / 200.0
    written = segmentation(
        PLACES["oblique"],
        shares[..., None],
        "FRACTIONAL",
        max_fractional_value=200,
        fractional_type="OCCUPANCY",
    )
    written.save_as(tmp_path / "s.dcm")
    with pytest.raises(InputError, match=r"--threshold 0\.5") as fault:
        read_labels(tmp_path / "s.dcm")
    assert fault.value.refused
    for threshold in (0.5, 0.005, 1.0):
        volume, findings = read_labels_with_findings(tmp_path / "s.dcm", Reading(threshold=threshold))
        np.testing.assert_array_equal(volume.labels.T, (np.rint(shares * 200) >= threshold * 200 - 1e-9))
        assert [f for f in findings if f.code == "thresholded" and "occupancy" in f.sentence]


@pytest.mark.parametrize("said", ["YES", "NO", "UNDEFINED", None])
def test_overlap_is_refused_in_fact_whatever_is_said(tmp_path: Path, said: str | None) -> None:
    """Segments Overlap (0062,0013), C.8.20.2: NO only says so; counted by hand below."""
    masks = np.zeros((*SHAPE, 2), np.uint8)
    masks[1:4, 1:5, 1:5, 0] = 1
    masks[3:5, 4:6, 2:8, 1] = 1  # shares plane 3, row 4, columns 2 to 4: three voxels
    written = segmentation(PLACES["axial"], masks, "BINARY")
    if said is None:
        del written.SegmentsOverlap
    else:
        written.SegmentsOverlap = said
    written.save_as(tmp_path / "s.dcm")
    with pytest.raises(InputError) as fault:
        read_labels(tmp_path / "s.dcm")
    x, y, z = to_ras(PLACES["axial"] @ [3, 4, 2, 1] @ np.eye(4, 3))
    assert f"3 voxels claimed twice, the first by segments 1 and 2 at ({x:.1f}, {y:.1f}, {z:.1f}) mm" in str(
        fault.value
    )
    masks[3, 4, 2:5, 1] = 0
    apart = segmentation(PLACES["axial"], masks, "BINARY")
    apart.SegmentsOverlap = said or "UNDEFINED"
    apart.save_as(tmp_path / "apart.dcm")
    volume = read_labels(tmp_path / "apart.dcm")
    expected = masks[1:5, ..., 0] + 2 * masks[1:5, ..., 1]
    np.testing.assert_array_equal(volume.labels.T[::-1], expected)  # highdicom lists planes downward


def edited(tmp_path: Path, change: object, *, kind: str = "LABELMAP", planes: int = 6) -> Path:
    """A segmentation with something wrong with it."""
    labels = some_labels((planes, 7, 9), 2, seed=2)
    labels[:, 0, 0] = 1
    written = segmentation(PLACES["axial"], labels, kind)
    change(written)  # type: ignore[operator]
    written.save_as(tmp_path / "s.dcm")
    return tmp_path / "s.dcm"


def shift(ds: pydicom.Dataset, frame: int, by: tuple[float, float, float]) -> None:
    plane = ds.PerFrameFunctionalGroupsSequence[frame].PlanePositionSequence[0]
    plane.ImagePositionPatient = [float(a + b) for a, b in zip(plane.ImagePositionPatient, by, strict=True)]


def shared(ds: pydicom.Dataset) -> pydicom.Dataset:
    return ds.SharedFunctionalGroupsSequence[0]


def measures(ds: pydicom.Dataset) -> pydicom.Dataset:
    return shared(ds).PixelMeasuresSequence[0]


def drop(ds: pydicom.Dataset, frames: set[int]) -> None:
    n, per = ds.Rows * ds.Columns, ds.PerFrameFunctionalGroupsSequence
    kept = [k for k in range(len(per)) if k not in frames]
    data = b"".join(ds.PixelData[k * n : (k + 1) * n] for k in kept)
    ds.PixelData = data + b"\0" * (len(data) % 2)
    ds.PerFrameFunctionalGroupsSequence = [per[k] for k in kept]
    ds.NumberOfFrames = len(kept)


@pytest.mark.parametrize(
    ("change", "words"),
    [
        (lambda ds: shift(ds, 3, (0, 0, 1.2)), "irregular distances"),
        (lambda ds: shift(ds, 3, (2.0, 0, 0)), "off the line"),
        (lambda ds: shift(ds, 3, (0, 0, 3.0)), "more than one frame at one place"),
        (lambda ds: shift(ds, 3, (9.0, 0, 3.0)), "beside each other"),
        (lambda ds: setattr(measures(ds), "PixelSpacing", [0.0, 1.0]), "nonsense"),
        (lambda ds: setattr(ds, "NumberOfFrames", 7), "describe each of its frames"),
        (lambda ds: setattr(ds, "PixelData", ds.PixelData[:-100]), "cut short"),
        (lambda ds: setattr(ds, "Rows", 65535), "cut short"),
        (lambda ds: delattr(ds, "SegmentSequence"), "describes no segment"),
        (lambda ds: delattr(ds, "SegmentationType"), "unknown type"),
        (lambda ds: delattr(ds, "PixelData"), "no pixels"),
        (lambda ds: setattr(ds.SegmentSequence[1], "SegmentNumber", 2), "stands twice"),
        (lambda ds: delattr(shared(ds), "PlaneOrientationSequence"), "no place in the"),
        (lambda ds: setattr(ds, "SegmentationType", "BINARY"), "do not fit its type"),
    ],
)  # fmt: skip
def test_what_is_no_regular_volume_is_refused_in_one_sentence(
    tmp_path: Path, change: object, words: str
) -> None:
    with pytest.raises(InputError, match=words) as fault:
        read_labels(edited(tmp_path, change))
    assert "\n" not in str(fault.value)
    assert str(fault.value).startswith("s.dcm")


def test_spacing_tells_which_planes_are_left_out(tmp_path: Path) -> None:
    """Empty frames may be left out (C.8.20.2.3); Spacing Between Slices (C.7.6.16.2.1) says how many."""

    def only_two(ds: pydicom.Dataset) -> None:
        drop(ds, {1, 2, 4, 5})

    def nor_spacing(ds: pydicom.Dataset) -> None:
        only_two(ds)
        del measures(ds).SpacingBetweenSlices

    told, findings = read_labels_with_findings(edited(tmp_path, only_two))
    assert told.labels.shape == (9, 7, 4)
    assert [f.level for f in findings if f.code == "planes_left_out"] == ["warn"]
    assert not told.labels[..., 1:3].any()
    untold = read_labels(edited(tmp_path, nor_spacing))  # then 9 mm is the only distance there is
    assert untold.labels.shape == (9, 7, 2)
    assert untold.grid.spacing[2] == pytest.approx(9.0)


def test_wrong_spacing_beside_right_positions_is_said(tmp_path: Path) -> None:
    def wrong(ds: pydicom.Dataset) -> None:
        measures(ds).SpacingBetweenSlices = 5.0

    volume, findings = read_labels_with_findings(edited(tmp_path, wrong))
    assert volume.grid.spacing[2] == pytest.approx(3.0)
    assert [f.level for f in findings if f.code == "spacing_contradicts"] == ["warn"]


def test_one_plane_takes_its_spacing_or_says_it_takes_its_thickness(tmp_path: Path) -> None:
    def spacing(ds: pydicom.Dataset) -> None:
        measures(ds).SpacingBetweenSlices = 3.0
        measures(ds).SliceThickness = 2.5

    def no_spacing(ds: pydicom.Dataset) -> None:
        spacing(ds)
        del measures(ds).SpacingBetweenSlices

    def nothing(ds: pydicom.Dataset) -> None:
        no_spacing(ds)
        del measures(ds).SliceThickness

    plain, findings = read_labels_with_findings(edited(tmp_path, spacing, planes=1))
    assert plain.grid.spacing[2] == pytest.approx(3.0)
    assert "thickness_as_spacing" not in {f.code for f in findings}
    thick, findings = read_labels_with_findings(edited(tmp_path, no_spacing, planes=1))
    assert thick.grid.spacing[2] == pytest.approx(2.5)
    assert "thickness_as_spacing" in {f.code for f in findings}
    with pytest.raises(InputError, match="how thick"):
        read_labels(edited(tmp_path, nothing, planes=1))


@pytest.mark.parametrize("name", ["liver_1frame.dcm", "liver_expb_1frame.dcm"])
def test_packaged_liver_has_its_volume_and_place(name: str) -> None:
    """pydicom's own test file: bits unpacked by pydicom, place from the tags by equation C.7.6.2.1-1."""
    path = get_testdata_file(name, download=False)
    ds = pydicom.dcmread(path)
    mask = ds.pixel_array.astype(bool)
    groups = ds.SharedFunctionalGroupsSequence[0]
    rows_mm, columns_mm = map(float, groups.PixelMeasuresSequence[0].PixelSpacing)
    depth_mm = float(groups.PixelMeasuresSequence[0].SpacingBetweenSlices)
    first = ds.PerFrameFunctionalGroupsSequence[0].PlanePositionSequence[0].ImagePositionPatient
    row, column = np.nonzero(mask)
    along = [columns_mm * column.mean(), rows_mm * row.mean(), 0.0]  # rows run along +x, columns along +y
    centre = np.array(first, float) + np.array(along)
    volume, findings = read_labels_with_findings(path)
    assert volume.names[1] == "Liver"
    voxels = np.argwhere(volume.labels == 1)
    assert len(voxels) * volume.grid.voxel_mm3 == pytest.approx(mask.sum() * rows_mm * columns_mm * depth_mm)
    np.testing.assert_allclose(volume.grid.to_world(voxels).mean(axis=0), to_ras(centre), atol=1e-4)
    assert "frames_missing" in {f.code for f in findings}  # of the original three frames one was kept


def test_a_folder_of_one_segmentation_and_a_file_without_ending(tmp_path: Path) -> None:
    labels = some_labels(SHAPE, 2, seed=1)
    segmentation(PLACES["axial"], labels, "BINARY").save_as(tmp_path / "plain")
    volume, _ = read_volume_with_findings(tmp_path)
    assert isinstance(volume, LabelVolume)
    assert volume.sha256 == read_labels(tmp_path / "plain").sha256
    with pytest.raises(InputError, match="is a segmentation"):
        read_volume_with_findings(tmp_path, kind="image")
