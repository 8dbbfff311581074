"""NRRD volumes, against pynrrd as independent reader and writer, and against the format's own definition."""

import bz2
import gzip

import nrrd
import numpy as np
import pytest

from volmap.io.reading import Reading
from volmap.io.volumes import read_image, read_labels, read_labels_with_findings
from volmap.types import InputError

SPACES = {  # Truth: the format's definition, "space": signs of the world axes against R, A, S
    "right-anterior-superior": (1, 1, 1),
    "RAS": (1, 1, 1),
    "left-anterior-superior": (-1, 1, 1),
    "LAS": (-1, 1, 1),
    "left-posterior-superior": (-1, -1, 1),
    "LPS": (-1, -1, 1),
}
DIRECTIONS = np.array([[0.8, 0.6, 0.0], [-0.36, 0.48, 0.8], [1.44, -1.92, 1.8]])  # one axis a row
ORIGIN = np.array([7.125, -3.5, 11.25])


def some(shape=(4, 5, 6), dtype=np.uint8):
    return np.random.default_rng(2).integers(0, 5, shape).astype(dtype)


def header(**fields):
    return {"space": "left-posterior-superior", "space directions": DIRECTIONS, "space origin": ORIGIN,
            "space units": ["mm", "mm", "mm"], "kinds": ["domain"] * 3} | fields  # fmt: skip


def save(path, values, **fields):
    made = {k: v for k, v in header(**fields).items() if v is not None}
    encoding = made.pop("encoding", "gzip")
    nrrd.write(str(path), values, {**made, "encoding": encoding}, detached_header=path.suffix == ".nhdr")
    return path


def text(path, lines, data=b""):
    path.write_bytes("\n".join(["NRRD0004", *lines, "", ""]).encode() + data)
    return path


PLAIN = ["type: uint8", "dimension: 3", "sizes: 2 3 4", "encoding: raw", "space: left-posterior-superior",
         "space directions: (1,0,0) (0,1,0) (0,0,1)", "space origin: (0,0,0)"]  # fmt: skip


def without(*names, **fields):
    lines = [
        line for line in PLAIN if line.split(":")[0] not in {n.replace("_", " ") for n in (*names, *fields)}
    ]
    return [*lines, *(f"{name.replace('_', ' ')}: {value}" for name, value in fields.items())]


@pytest.mark.parametrize("space", SPACES)
def test_the_space_decides_what_left_and_front_are(tmp_path, space):
    # Closed form: voxel (i, j, k) lies at origin + i d0 + j d1 + k d2 of the space, then its signs.
    read = read_labels(save(tmp_path / "x.nrrd", some(), space=space))
    index = np.array([[0, 0, 0], [3, 4, 5], [1, 0, 2]])
    expected = (ORIGIN + index @ DIRECTIONS) * SPACES[space]
    assert np.allclose(read.grid.to_world(index.astype(float)), expected, atol=1e-5)
    assert np.array_equal(read.labels, some())


@pytest.mark.parametrize("encoding", ["raw", "gzip", "bzip2", "ascii"])
@pytest.mark.parametrize("dtype", ["u1", "i1", "<i2", ">i2", "<u2", "<i4", ">u4", "<i8", "<f4", ">f8"])
@pytest.mark.parametrize("suffix", [".nrrd", ".nhdr"])
def test_encodings_types_and_orders(tmp_path, encoding, dtype, suffix):
    # Independent library: pynrrd writes; the numbers are known.
    values = some(dtype=dtype)
    read, findings = read_labels_with_findings(save(tmp_path / f"x{suffix}", values, encoding=encoding))
    assert np.array_equal(read.labels, values)
    assert findings == ()


def test_an_image_keeps_its_fractions(tmp_path):
    values = np.linspace(-3, 3, 120).reshape(4, 5, 6).astype(np.float32)
    assert np.array_equal(read_image(save(tmp_path / "x.nrrd", values)).values, values)


@pytest.mark.parametrize("at", [0, 1, 3])
@pytest.mark.parametrize("kind", ["list", "time", "???"])
def test_a_list_of_frames_on_any_axis(tmp_path, at, kind):
    # Truth: an axis without direction is not of space (the format's definition, "space directions: none").
    values = some((4, 5, 6, 3))
    kinds, rows = ["domain"] * 3, list(DIRECTIONS)
    kinds.insert(at, kind)
    rows.insert(at, np.full(3, np.nan))
    file = save(tmp_path / "x.nrrd", np.moveaxis(values, 3, at),
                kinds=kinds, **{"space directions": np.array(rows)})  # fmt: skip
    read, findings = read_labels_with_findings(file, Reading(frame=2))
    assert np.array_equal(read.labels, values[..., 2])
    assert [f.code for f in findings] == ["frame-chosen"]
    with pytest.raises(InputError, match="3 frames"):
        read_labels(file)


def test_probabilities_one_frame_a_label(tmp_path):
    values = np.array([[0.9, 0.2], [0.1, 0.7]], np.float32).reshape(2, 2, 1, 1)  # frame first
    rows = np.array([np.full(3, np.nan), *DIRECTIONS])
    file = save(tmp_path / "x.nrrd", values, kinds=["list", *["domain"] * 3], **{"space directions": rows})
    assert read_labels(file, Reading(threshold=0.5)).labels.ravel().tolist() == [1, 2]


def test_without_units_millimetres_are_assumed_and_said(tmp_path):
    _, findings = read_labels_with_findings(save(tmp_path / "x.nrrd", some(), **{"space units": None}))
    assert [f.code for f in findings] == ["unit_not_stated"]


def test_keys_of_other_programs_are_not_read(tmp_path):
    lines = [*PLAIN, "space:=nonsense", "0_Name:=liver: of Jane Doe", "# sizes: 1 1 1"]
    read = read_labels(text(tmp_path / "x.nrrd", lines, bytes(range(24))))
    assert read.labels.ravel(order="F").tolist() == list(range(24))
    assert dict(read.names) == {}


def test_names_beside_it(tmp_path):
    save(tmp_path / "x.nrrd", some())
    (tmp_path / "x.tsv").write_text("index\tname\n1\tliver\n")
    assert read_labels(tmp_path / "x.nrrd").name_of(1) == "liver"


def test_lines_and_bytes_before_the_voxels(tmp_path):
    # Truth: the format's definition: "line skip" first, then (after unpacking) "byte skip"; -1 counts from
    # the end.
    voxels = bytes(range(24))
    packed = gzip.compress(b"???" + voxels)
    for name, data, fields in (
        ("a", b"one\ntwo\n" + b"???" + voxels, {"line_skip": 2, "byte_skip": 3}),
        (
            "b",
            b"one\n" + packed,
            {"line_skip": 1, "byte_skip": 3, "encoding": "gzip"},
        ),
        ("c", b"anything" + voxels, {"byte_skip": -1}),
        ("d", bz2.compress(voxels), {"encoding": "bz2"}),
    ):
        (tmp_path / f"{name}.raw").write_bytes(data)
        file = text(tmp_path / f"{name}.nhdr", without(**fields, data_file=f"{name}.raw"))
        assert read_labels(file).labels.ravel(order="F").tolist() == list(range(24))


def test_a_detached_file_is_taken_from_its_own_folder_only(tmp_path):
    home = tmp_path / "home"
    home.mkdir()
    (tmp_path / "secret.raw").write_bytes(bytes(24))
    (home / "link.raw").symlink_to(tmp_path / "secret.raw")
    (home / "down").mkdir()
    (home / "down" / "x.raw").write_bytes(bytes(24))
    secret = str(tmp_path / "secret.raw")
    elsewhere = ("../secret.raw", secret, "link.raw", "down/x.raw", "..\\secret.raw", "..")
    for name in (*elsewhere, "LIST", "x%03d.raw 1 4 1"):
        with pytest.raises(InputError, match=r"where it says|link out of its folder"):
            read_labels(text(home / "x.nhdr", without(data_file=name)))
    (home / "here.raw").write_bytes(bytes(24))
    assert read_labels(text(home / "x.nhdr", without(data_file="./here.raw"))).present == ()


# Truth: each fault by the format's definition; (lines, data, exit is "refused", words).
PACKED = gzip.compress(bytes(24))
FAULTS = {
    "magic": (["nonsense"], b"", False, "damaged"),
    "no sizes": (without("sizes"), bytes(24), False, "no sizes"),
    "sizes do not fit": (without(dimension=2), bytes(24), False, "dimensions"),
    "no numbers": (without(sizes="a b c"), bytes(24), False, "damaged"),
    "size 0": (without(sizes="2 0 4"), bytes(24), False, "dimensions"),
    "negative": (without(sizes="2 -3 -4"), bytes(24), False, "dimensions"),
    "huge": (without(sizes="100000 100000 100000"), bytes(24), False, "claims"),
    "huge packed": (without(sizes="9000 9000 9000", encoding="gzip"), PACKED, False, "claims"),
    "beyond numbers": (without(sizes="1e300 2 3"), bytes(24), False, "dimensions|damaged"),
    "two dimensions": (
        without(dimension=2, sizes="4 6", space_directions="(1,0,0) (0,1,0)"), bytes(24), True, "dimensions"),
    "cut": (PLAIN, bytes(23), False, "cut short"),
    "too long": (PLAIN, bytes(25), False, "more than its header claims"),
    "packed cut": (without(encoding="gzip"), PACKED[:-9], False, "cut short"),
    "packed damaged": (without(encoding="gzip"), PACKED[:-8] + b"12345678", False, "damaged"),
    "bzip2 damaged": (without(encoding="bz2"), b"BZh9" + bytes(40), False, "damaged"),
    "text cut": (without(encoding="ascii"), b"1 2 3 " * 9, False, "cut short"),
    "text of words": (without(encoding="ascii"), b"1 2 x " * 40, False, "numbers"),
    "text too large": (without(encoding="ascii"), b"300 " * 24, False, "do not fit"),
    "encoding": (without(encoding="hex"), bytes(48), False, "encoded"),
    "type": (without(type="colour"), bytes(24), False, "type"),
    "blocks": (without(type="block"), bytes(24), True, "type"),
    "order of bytes": (without(type="short"), bytes(48), False, "order of bytes"),
    "no space": (without("space"), bytes(24), True, "left, front and top"),
    "another space": (without(space="scanner-xyz"), bytes(24), True, "left, front and top"),
    "no directions": (without("space_directions"), bytes(24), True, "orientation"),
    "two directions": (without(space_directions="(1,0,0) (0,1,0)"), bytes(24), False, "orientation"),
    "NaN direction": (without(space_directions="(1,0,0) (0,nan,0) (0,0,1)"), bytes(24), False, "finite"),
    "no direction": (without(space_directions="(1,0,0) none (0,0,1)"), bytes(24), True, "three axes"),
    "flat": (without(space_directions="(1,0,0) (1,0,0) (0,0,1)"), bytes(24), False, "invertible"),
    "no origin": (without("space_origin"), bytes(24), True, "origin"),
    "odd origin": (without(space_origin="(1,2)"), bytes(24), False, "origin"),
    "centimetres": ([*PLAIN, 'space units: "cm" "cm" "cm"'], bytes(24), True, "unit"),
    "vectors": (
        without(dimension=4, sizes="3 2 1 4", space_directions="none (1,0,0) (0,1,0) (0,0,1)",
                kinds="vector domain domain domain"), bytes(24), True, "not one number"),
    "skips back": ([*PLAIN, "byte skip: -7"], bytes(24), False, "skips"),
    "from the end of packed data": (
        [*without(encoding="gzip"), "byte skip: -1"], gzip.compress(bytes(24)), False, "from the end"),
    "no such file": (without(data_file="gone.raw"), b"", False, "no such file"),
}  # fmt: skip


@pytest.mark.parametrize("fault", FAULTS)
def test_a_fault_is_one_sentence(tmp_path, capfd, fault):
    lines, data, refused, words = FAULTS[fault]
    with pytest.raises(InputError, match=words) as caught:
        read_labels(text(tmp_path / "scan.nrrd", lines, data))
    assert caught.value.refused is refused
    assert "\n" not in caught.value.sentence
    assert str(tmp_path) not in caught.value.sentence
    assert capfd.readouterr() == ("", "")


def test_a_header_without_end(tmp_path):
    (tmp_path / "x.nrrd").write_bytes(b"NRRD0004\n" + b"# more\n" * 200_000)
    with pytest.raises(InputError, match="no end"):
        read_labels(tmp_path / "x.nrrd")


def test_unpacked_no_further_than_the_header_claims(tmp_path):
    # 64 MB in 64 kB; only the 24 bytes of the header and one more are unpacked
    bomb = gzip.compress(bytes(2**26))
    with pytest.raises(InputError, match="more than its header claims"):
        read_labels(text(tmp_path / "x.nrrd", without(encoding="gzip"), bomb))
