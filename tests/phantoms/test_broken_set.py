"""Every broken input has the fault it is said to have, and only that one; seen with independent readers."""

import hashlib
import zlib
from pathlib import Path

import nibabel
import numpy as np
import pytest
from scipy.ndimage import label as pieces
from skimage.measure import euler_number
from volmap_phantoms.broken import BrokenInput, body, make_all


@pytest.fixture(scope="module")
def folder(tmp_path_factory):
    return tmp_path_factory.mktemp("broken")


@pytest.fixture(scope="module")
def entries(folder):
    return {entry.name: entry for entry in make_all(folder)}


def voxels(folder, name, file="scan.nii.gz"):
    return np.asarray(nibabel.load(folder / name / file).dataobj)


def test_entries_are_whole(entries, folder):
    assert len(entries) >= 45
    for name, entry in entries.items():
        assert entry.status in (1, 3)
        assert entry.arguments[0] in ("screen", "map", "mesh")
        assert entry.words
        paths = [Path(a) for a in entry.arguments if a.startswith("/")]
        assert all(p.parent == folder / name for p in paths)
        assert any(p.name in entry.file.split("|") for p in paths)
        assert {p.exists() for p in paths} == {name != "missing-file"}
    assert {p.name for p in folder.iterdir()} == set(entries)


def test_the_good_scans_are_good():
    for turn in (0, 1):
        labels = body(turn).labels
        assert np.unique(labels).tolist() == [0, 1, 2]
        assert labels[1:-1, 1:-1, 1:-1].sum() == labels.sum()
        assert [pieces(labels == n)[1] for n in (1, 2)] == [1, 1]


@pytest.mark.parametrize(
    "name", ["not-nifti", "gzip-cut", "gzip-damaged", "gzip-of-text", "empty-file", "text-file", "voxels-cut"]
)
def test_unreadable_files_are_unreadable(entries, folder, name):
    # independent reader: nibabel cannot read them either
    path = Path(entries[name].arguments[1])
    faults = (nibabel.filebasedimages.ImageFileError, OSError, EOFError, ValueError, zlib.error)
    with pytest.raises(faults):
        np.asarray(nibabel.load(path).dataobj)


def test_headers_have_the_fault_they_say(entries, folder):
    def header(name):
        first = (folder / name / "scan.nii").read_bytes()[:348]
        return nibabel.Nifti1Header(first, endianness="<", check=False)

    none = header("no-orientation")
    assert (int(none["sform_code"]), int(none["qform_code"])) == (0, 0)
    assert np.isnan(header("nan-affine").get_sform()).sum() == 1
    assert np.linalg.det(header("singular-affine").get_sform()) == 0
    zero = header("zero-spacing")
    assert (zero["pixdim"][1:4] == 0).tolist() == [False, True, False]
    assert int(zero["sform_code"]) == 0
    assert int(header("two-dimensional")["dim"][0]) == 2
    assert header("many-frames")["dim"][:5].tolist() == [4, 40, 36, 30, 3]
    assert header("rgb-voxels").get_data_dtype().names == ("R", "G", "B")
    assert header("huge-dimensions")["dim"][1:4].tolist() == [30000] * 3
    assert header("metres").get_xyzt_units()[0] == "meter"
    for name, factor in (("micron-sized", 1e-3), ("metre-sized", 1e3)):
        for affine in (header(name).get_sform(), header(name).get_qform()):
            assert np.diag(affine)[:3] == pytest.approx(np.array([1.5, 1.5, 2.0]) * factor, rel=1e-6)
        assert header(name).get_xyzt_units()[0] == "mm"


def test_labels_have_the_fault_they_say(entries, folder):
    smooth = voxels(folder, "interpolated-labels")
    assert (smooth != np.rint(smooth)).mean() > 0.05
    assert np.isnan(voxels(folder, "nan-labels")).sum() == 1
    assert voxels(folder, "negative-labels").min() == -1
    assert voxels(folder, "label-too-large").max() == 100_000
    assert not voxels(folder, "nothing-labelled").any()
    assert len(np.unique(voxels(folder, "image-as-labels"))) > 300
    assert pieces(voxels(folder, "salt-and-pepper") == 1)[1] > 100
    assert pieces(voxels(folder, "empty-slices") > 0)[1] == 2


def test_pairs_have_the_fault_they_say(entries, folder):
    def both(name):
        return [voxels(folder, name, f"{role}.nii.gz") for role in ("source", "target")]

    assert [np.unique(v).tolist() for v in both("label-missing")] == [[0, 1, 2], [0, 1]]
    assert [np.unique(v).tolist() for v in both("other-label")] == [[0, 1, 2], [0, 1, 7]]
    assert [pieces(v)[1] for v in both("pieces-differ")] == [1, 3]
    # independent library: Euler number 1 of a ball, 0 of a ring, 2 of a hollow ball
    assert [euler_number(v, connectivity=3) for v in both("ring-against-ball")] == [1, 0]
    assert [euler_number(v, connectivity=3) for v in both("hollow-against-solid")] == [1, 2]
    for name in ("pieces-differ", "ring-against-ball", "hollow-against-solid"):
        for v in both(name):
            assert v[1:-1, 1:-1, 1:-1].sum() == v.sum()


def test_surfaces_have_the_fault_they_say(folder):
    # independent count: each edge of a closed, evenly turned surface is met once in each direction
    def edges(name):
        content = (folder / name / "surface.stl").read_bytes()
        count = int.from_bytes(content[80:84], "little")
        record = np.frombuffer(content[84 : 84 + 50 * count], np.dtype([("f", "<f4", 12), ("a", "<u2")]))
        corners = record["f"][:, 3:].reshape(-1, 3)
        _, corner = np.unique(corners, axis=0, return_inverse=True)
        triangles = corner.reshape(-1, 3)
        directed = np.concatenate([triangles[:, [0, 1]], triangles[:, [1, 2]], triangles[:, [2, 0]]])
        twice = len(directed) - len(np.unique(directed, axis=0))
        met = np.unique(np.sort(directed, axis=1), axis=0, return_counts=True)[1]
        return twice, int((met == 1).sum())

    assert edges("surface-open")[0] == 0
    assert edges("surface-open")[1] >= 3
    assert edges("surface-flipped")[0] > 0
    assert edges("surface-flipped")[1] == 0


def test_same_bytes_every_time(entries, folder, tmp_path):
    make_all(tmp_path)
    files = [p.relative_to(folder) for p in sorted(folder.rglob("*")) if p.is_file()]
    assert len(files) > 45
    for file in files:
        one, two = (hashlib.sha256((d / file).read_bytes()).hexdigest() for d in (folder, tmp_path))
        assert one == two, file


def test_words_are_looked_for_in_any_case_and_by_choice():
    entry = BrokenInput("x", "fault", ("screen", "/d/a.nii", "{out}"), "a.nii", 3, ("NIfTI|gzip", "remedy"))
    assert entry.unsaid("A.nii: is not a nifti file") == ["remedy"]
    assert entry.unsaid("something else") == ["a.nii", "NIfTI|gzip", "remedy"]
    assert entry.command(Path("/tmp/there")) == ["screen", "/d/a.nii", "/tmp/there"]
