"""DICOM images in: against highdicom's volumes, tags read by plain pydicom, and pydicom's packaged files.

Sections are of DICOM PS3.3 (2024), quoted from memory.
"""

from __future__ import annotations

import shutil
from pathlib import Path

import highdicom as hd
import numpy as np
import pydicom
import pytest
from dicom_scene import PLACES, affine_of, saved, slices, to_ras
from pydicom.data import get_testdata_file

from volmap.io.volumes import read_image, read_image_with_findings, read_labels, read_volume_with_findings
from volmap.types import ImageVolume, InputError

PACKAGED = Path(str(get_testdata_file("CT_small.dcm", download=False))).parent
SHAPE = (5, 6, 4)  # planes, rows, columns


def numbers(seed: int = 0) -> np.ndarray:
    return np.random.default_rng(seed).integers(-1000, 2000, SHAPE).astype(np.int16)


def values_at(volume: ImageVolume, world: np.ndarray) -> np.ndarray:
    """Values at RAS+ points that must be voxel centres."""
    index = volume.grid.to_index(world.reshape(-1, 3))
    assert np.abs(index - np.rint(index)).max() < 1e-4
    i, j, k = np.rint(index).astype(int).T
    return volume.values[i, j, k].reshape(world.shape[:-1])


def centres(affine: np.ndarray, shape: tuple[int, ...]) -> np.ndarray:
    """RAS+ of all voxels of a scene."""
    index = np.moveaxis(np.indices(shape), 0, -1)
    return to_ras(index @ affine[:3, :3].T + affine[:3, 3])


@pytest.mark.parametrize("place", PLACES)
def test_a_folder_in_any_order_lies_where_it_was_put(tmp_path: Path, place: str) -> None:
    stored = numbers()
    sets = slices(PLACES[place], stored, slope=0.5, intercept=-1024.0)
    folder = saved([sets[k] for k in (3, 0, 4, 2, 1)], tmp_path / "scan")
    volume, findings = read_image_with_findings(folder)
    np.testing.assert_array_equal(
        values_at(volume, centres(PLACES[place], SHAPE)), stored * np.float32(0.5) - 1024
    )
    assert volume.values.shape == (4, 6, 5)
    assert volume.grid.handedness == "right"  # planes are sorted along row x column direction
    assert (volume.unit, volume.name, findings) == ("HU", "DICOM images", ())


@pytest.mark.parametrize("place", ["axial", "oblique", "sagittal"])
def test_highdicom_makes_the_same_volume(place: str, tmp_path: Path) -> None:
    sets = slices(PLACES[place], numbers(), slope=2.0)
    twin = hd.get_volume_from_series(sets)
    volume = read_image(saved(sets, tmp_path / "scan"))
    world = to_ras(twin.map_indices_to_reference(np.indices(twin.shape).reshape(3, -1).T))
    np.testing.assert_allclose(values_at(volume, world), twin.array.reshape(-1))


def test_a_tilted_gantry_is_a_sheared_grid(tmp_path: Path) -> None:
    """Closed form: the step leans by atan(1 / 3) = 18.4 degrees, and every plane stays where it says."""
    affine = affine_of(np.eye(3)[[2, 1, 0]], (3.0, 1.0, 1.0), (0, 0, 0))
    affine[1, 0] = 1.0  # planes also 1 mm further back each
    sets = slices(affine, numbers())
    volume, findings = read_image_with_findings(saved(sets, tmp_path / "scan"))
    np.testing.assert_array_equal(values_at(volume, centres(affine, SHAPE)), numbers())
    assert volume.grid.shear == pytest.approx(1 / np.sqrt(10), abs=1e-6)
    assert ["leans by 18.4 degrees" in f.sentence for f in findings if f.code == "leaning_stack"] == [True]


@pytest.mark.parametrize(
    ("change", "words"),
    [
        (lambda s: s[2].ImagePositionPatient.__setitem__(2, 19.5), "irregular distances.*slice_00"),
        (lambda s: s.pop(2), "lacks planes.*6 mm between slice_001 and slice_002"),
        (lambda s: s.append(s[2]), "at one place.*slice_005 at the place of slice_002"),
        (lambda s: setattr(s[3], "PixelSpacing", [0.7, 1.1]), "differ in pixel size, found slice_003"),
        (
            lambda s: setattr(s[3], "ImageOrientationPatient", [0, 1, 0, 1, 0, 0]),
            "differ in orientation, found slice_003",
        ),
        (
            lambda s: (setattr(s[3], "Rows", 3), setattr(s[3], "Columns", 8)),
            "sizes, found slice_003 of 8 x 3",
        ),
        (lambda s: setattr(s[4], "SeriesInstanceUID", "1.2.3"), "than one series.*4 and 1 files; slice_004"),
        (lambda s: setattr(s[1], "RescaleType", "OD"), "different units, found slice_001 in OD"),
        (lambda s: delattr(s[1], "ImagePositionPatient"), "slice_001: has no place"),
        (lambda s: setattr(s[1], "PixelData", s[1].PixelData[:20]), "slice_001: the pixels are cut short"),
        (lambda s: setattr(s[1], "SamplesPerPixel", 3), "slice_001: holds colours"),
        (lambda s: setattr(s[1], "NumberOfFrames", 2), "many frames beside others, found slice_001"),
        (lambda s: setattr(s[1], "RescaleSlope", 0), "slice_001: its RescaleSlope is nonsense"),
    ],
)
def test_no_regular_volume_is_refused_in_a_sentence_that_names_the_file(
    tmp_path: Path, change: object, words: str
) -> None:
    sets = slices(PLACES["axial"], numbers())
    change(sets)  # type: ignore[operator]
    with pytest.raises(InputError, match=words) as fault:
        read_image(saved(sets, tmp_path / "scan"))
    assert "\n" not in str(fault.value)


def test_small_jitter_is_said_and_regular_places_are_used(tmp_path: Path) -> None:
    sets = slices(PLACES["axial"], numbers())
    sets[2].ImagePositionPatient[2] += 0.12  # 4 % of a step
    volume, findings = read_image_with_findings(saved(sets, tmp_path / "scan"))
    assert volume.grid.spacing[2] == pytest.approx(3.0)
    assert ["0.12 mm" in f.sentence for f in findings if f.code == "planes_not_quite_regular"] == [True]


def test_other_files_are_passed_over_and_said(tmp_path: Path) -> None:
    folder = saved(slices(PLACES["axial"], numbers()), tmp_path / "scan")
    (folder / "readme.txt").write_text("no image")
    volume, findings = read_image_with_findings(folder)
    assert volume.values.shape == (4, 6, 5)
    assert [f.code for f in findings] == ["other_files"]


def test_an_enhanced_image_is_the_volume_of_its_slices(tmp_path: Path) -> None:
    """highdicom makes one many-frame object of the slices (legacy converted enhanced CT)."""
    sets = slices(PLACES["oblique"], numbers(), slope=1.5, intercept=-10.0)
    converted = hd.legacy.LegacyConvertedEnhancedCTImage(
        sets, pydicom.uid.generate_uid(), 2, pydicom.uid.generate_uid(), 1
    )
    converted.save_as(tmp_path / "enhanced.dcm")
    one = read_image(tmp_path / "enhanced.dcm")
    np.testing.assert_array_equal(
        values_at(one, centres(PLACES["oblique"], SHAPE)), numbers() * np.float32(1.5) - 10
    )
    assert one.unit == "HU"
    assert one.sha256 == read_image(saved(sets, tmp_path / "scan")).sha256


def test_packaged_slices_of_a_real_scan(tmp_path: Path) -> None:
    """Five CT slices that come with pydicom; place and values from the tags, by equation C.7.6.2.1-1."""
    folder = PACKAGED / "dicomdirtests" / "98892001" / "CT5N"
    volume, _ = read_image_with_findings(folder)
    assert (volume.values.shape, volume.unit) == ((16, 16, 5), "HU")
    row, column = np.indices((16, 16))
    for file in sorted(folder.iterdir()):
        ds = pydicom.dcmread(file)
        rows_mm, columns_mm = map(float, ds.PixelSpacing)
        along, down = np.array(ds.ImageOrientationPatient, float).reshape(2, 3)
        at = np.array(ds.ImagePositionPatient, float) + (
            column[..., None] * columns_mm * along + row[..., None] * rows_mm * down
        )
        expected = ds.pixel_array * float(ds.RescaleSlope) + float(ds.RescaleIntercept)
        np.testing.assert_array_equal(values_at(volume, to_ras(at)), expected)


def test_packaged_slices_with_a_gap_are_refused() -> None:
    folder = PACKAGED / "dicomdirtests" / "77654033" / "CT2"
    with pytest.raises(InputError, match=r"lacks planes, found 202\.5 mm between 17106 and 17136"):
        read_image(folder)


@pytest.mark.parametrize("name", ["MR1", "MR2", "MR700", "../98892001/CT2N"])
def test_packaged_folders_that_are_no_volume(name: str) -> None:
    with pytest.raises(InputError, match=r"more than one series|differ in orientation"):
        read_image(PACKAGED / "dicomdirtests" / "98892003" / name)


@pytest.mark.parametrize(
    "name", ["RLE", "jp2klossless", "jpeg_ls_lossless", "bigendian", "implicit", "expb", "padded"]
)
def test_packings_give_the_same_numbers(name: str) -> None:
    """One MR slice that pydicom ships in several lossless transfer syntaxes."""
    plain = read_image(PACKAGED / "MR_small.dcm")
    assert plain.sha256 == read_image(PACKAGED / f"MR_small_{name}.dcm").sha256
    np.testing.assert_array_equal(
        plain.values[..., 0].T, pydicom.dcmread(PACKAGED / "MR_small.dcm").pixel_array
    )


def test_signs_that_the_file_and_its_packing_tell_differently() -> None:
    """pydicom's own reading of its file is the truth (JPEG 2000 unsigned inside, signed outside)."""
    path = PACKAGED / "J2K_pixelrep_mismatch.dcm"
    ds = pydicom.dcmread(path)
    expected = ds.pixel_array * float(ds.RescaleSlope) + float(ds.RescaleIntercept)
    np.testing.assert_array_equal(read_image(path).values[..., 0].T, expected)


@pytest.mark.parametrize("name", ["rtdose.dcm", "rtdose_expb.dcm", "rtdose_rle.dcm"])
def test_packaged_dose_has_its_scaling_and_offsets(name: str) -> None:
    """RT Dose: dose = stored * Dose Grid Scaling; planes by Grid Frame Offset Vector (C.8.8.3.2)."""
    ds = pydicom.dcmread(PACKAGED / name)
    volume = read_image(PACKAGED / name)
    expected = (ds.pixel_array * float(ds.DoseGridScaling)).astype(np.float32)
    np.testing.assert_array_equal(volume.values, expected.T)
    first = np.array(ds.ImagePositionPatient, float)
    for k, offset in enumerate(ds.GridFrameOffsetVector):
        place = volume.grid.to_world(np.array([[0.0, 0.0, k]]))[0]
        np.testing.assert_allclose(place, to_ras(first + np.array([0, 0, float(offset)])), atol=1e-4)


def test_a_packing_nobody_here_can_unpack(tmp_path: Path) -> None:
    ds = pydicom.dcmread(PACKAGED / "MR_small_jp2klossless.dcm")
    ds.file_meta.TransferSyntaxUID = pydicom.uid.MPEG2MPML
    ds.save_as(tmp_path / "film")
    with pytest.raises(InputError, match=r"cannot be unpacked here, found MPEG2.*uncompressed"):
        read_image(tmp_path / "film")


def test_images_are_no_labels_and_labels_no_images(tmp_path: Path) -> None:
    folder = saved(slices(PLACES["axial"], np.zeros(SHAPE, np.int16)), tmp_path / "scan")
    volume, _ = read_volume_with_findings(folder)
    assert isinstance(volume, ImageVolume)  # whole numbers or not: it is what it says it is
    with pytest.raises(InputError, match="more than one DICOM file"):
        read_labels(folder)
    with pytest.raises(InputError, match="is no segmentation"):
        read_labels(folder / "slice_000")


def test_a_deflated_bomb_is_refused_before_it_is_unpacked(tmp_path: Path) -> None:
    """Zeros packed 200 to 1 (deflated transfer syntax, PS3.5 A.5): 285 MB in a megabyte."""
    import zlib

    ds = slices(PLACES["axial"], numbers())[0]
    ds.file_meta.TransferSyntaxUID = pydicom.uid.DeflatedExplicitVRLittleEndian
    pydicom.dcmwrite(tmp_path / "ok.dcm", ds, enforce_file_format=True)
    assert read_image(tmp_path / "ok.dcm").values.shape == (4, 6, 1)
    whole = (tmp_path / "ok.dcm").read_bytes()
    head = 144 + int.from_bytes(whole[140:144], "little")
    pack = zlib.compressobj(1, zlib.DEFLATED, -15)
    body = pack.compress(zlib.decompress(whole[head:], -15))
    body += b"".join(pack.compress(bytes(2**24)) for _ in range(17)) + pack.flush()
    (tmp_path / "bomb.dcm").write_bytes(whole[:head] + body)
    with pytest.raises(InputError, match="unpack to too much"):
        read_image(tmp_path / "bomb.dcm")


@pytest.mark.parametrize(
    ("name", "marker", "at", "n_bytes"),
    [("jpeg_ls_lossless", b"\xff\xf7", 5, 2), ("jp2klossless", b"\xff\x4f\xff\x51", 8, 4)],
)
def test_a_packed_frame_that_says_it_is_huge_is_not_unpacked(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, name: str, marker: bytes, at: int, n_bytes: int
) -> None:
    """The decoders would take 1.6 GB and 12 s for these (measured); the frame's own header is read first."""
    asked = []
    told_by_pydicom = pydicom.pixels.decoders.base.Decoder.iter_array
    monkeypatch.setattr(
        pydicom.pixels.decoders.base.Decoder,
        "iter_array",
        lambda *a, **k: asked.append(1) or told_by_pydicom(*a, **k),
    )
    read_image(PACKAGED / f"MR_small_{name}.dcm")
    assert asked == [1]
    data = bytearray((PACKAGED / f"MR_small_{name}.dcm").read_bytes())
    assert data.count(marker) == 1
    first = data.index(marker) + at
    told = [data[first + k * n_bytes : first + (k + 1) * n_bytes] for k in range(2)]
    assert told == [(64).to_bytes(n_bytes, "big")] * 2  # the test changes what it means to change
    for k in range(2):
        data[first + k * n_bytes : first + (k + 1) * n_bytes] = (20000).to_bytes(n_bytes, "big")
    (tmp_path / "x").write_bytes(data)
    with pytest.raises(InputError, match="cannot be unpacked"):
        read_image(tmp_path / "x")
    assert asked == [1]


@pytest.mark.filterwarnings("ignore:Expected explicit VR")
def test_sizes_in_packed_frames_are_read_as_they_are() -> None:
    """JPEG, JPEG-LS and JPEG 2000 that pydicom ships: each frame is as large as its object says."""
    from pydicom.encaps import generate_frames

    from volmap.io.dicom.codestreams import packed_size

    seen = set()
    damaged = "JPEG2000-embedded-sequence-delimiter.dcm"  # other bytes stand in place of its width
    for file in sorted(PACKAGED.glob("*.dcm")):
        if file.name == damaged:
            continue
        ds = pydicom.dcmread(file, force=True)
        syntax = getattr(getattr(ds, "file_meta", None), "TransferSyntaxUID", None)
        if syntax is not None and syntax.is_encapsulated and "RLE" not in syntax.name and "PixelData" in ds:
            n = int(ds.get("NumberOfFrames", 1))
            sizes = {packed_size(frame) for frame in generate_frames(ds.PixelData, number_of_frames=n)}
            assert sizes == {(ds.Rows, ds.Columns)}, file.name
            seen.add(syntax.name)
    assert len(seen) >= 5


def test_claims_of_an_element_take_no_memory(tmp_path: Path) -> None:
    """A length of 4 GB in a short file reads as cut short (a plain read would ask for all of it)."""
    import resource

    folder = saved(slices(PLACES["axial"], numbers())[:1], tmp_path / "scan")
    whole = (folder / "slice_000").read_bytes()
    at = whole.index(b"\xe0\x7f\x10\x00OW") + 8
    (tmp_path / "x").write_bytes(whole[:at] + b"\xf0\xff\xff\xff" + whole[at + 4 :])
    soft, hard = resource.getrlimit(resource.RLIMIT_AS)
    held = int(Path("/proc/self/statm").read_text().split()[0]) * resource.getpagesize()
    resource.setrlimit(resource.RLIMIT_AS, (held + 2**30, hard))
    try:
        assert read_image(tmp_path / "x").values.shape == (4, 6, 1)
    finally:
        resource.setrlimit(resource.RLIMIT_AS, (soft, hard))


def test_folders_without_images(tmp_path: Path) -> None:
    shutil.copy(PACKAGED / "dicomdirtests" / "DICOMDIR", tmp_path / "DICOMDIR")
    with pytest.raises(InputError, match="holds no DICOM file"):
        read_image(tmp_path)
