"""The same question gives the same bytes, the question turned round the exact inverse; nothing private."""

import base64
import getpass
import gzip
import json
import re
import socket
import time
from dataclasses import replace
from pathlib import Path

import numba
import numpy as np
import pytest

from volmap import pipeline
from volmap.io.landmarks import read_pairs, write_pairs
from volmap.io.nifti import read_labels
from volmap.mapfolder import read_map_folder

MAY_DIFFER = ("seconds", "peak_mb")  # of certificate.json, and of the line of the report that tells them


@pytest.fixture(scope="module")
def again(small_pair, small_job):
    out = small_pair.root / "karte 2"
    pipeline.map_files(small_pair.source, small_pair.target, out, small_job, guides=small_pair.pairs)
    return out


@pytest.fixture(scope="module")
def turned(small_pair, small_job, without_report):
    out = small_pair.root / "karte zurück"
    write_pairs(small_pair.root / "beads back.csv", read_pairs(small_pair.pairs).reversed())
    guides = small_pair.root / "beads back.csv"
    scans = small_pair.target, small_pair.source
    without_report(pipeline.map_files, *scans, out, small_job, guides=guides)
    return out


def certificate_without_times(path):
    document = json.loads(path.read_text(encoding="utf-8"))
    return {key: value for key, value in document.items() if key not in MAY_DIFFER}


def report_without_times(path):
    text, count = re.subn(r'<p class="small">Time: [^<]*</p>', "", path.read_text(encoding="utf-8"))
    assert count == 1
    return text


def test_the_same_pair_twice(small_pair, again):
    first = small_pair.folder
    assert {p.name for p in first.iterdir()} == {p.name for p in again.iterdir()}
    for path in first.iterdir():
        if path.name == "certificate.json":
            assert certificate_without_times(path) == certificate_without_times(again / path.name)
        elif path.name == "report.html":
            assert report_without_times(path) == report_without_times(again / path.name)
        else:
            assert path.read_bytes() == (again / path.name).read_bytes(), path.name


def test_the_pair_asked_for_the_other_way_is_the_exact_inverse(small_pair, turned):
    one, two = read_map_folder(small_pair.folder), read_map_folder(turned)
    assert np.array_equal(one.map.mesh.points, two.map.images)
    assert np.array_equal(one.map.images, two.map.mesh.points)
    assert np.array_equal(one.map.mesh.tets, two.map.mesh.tets)
    assert {one.solved_on, two.solved_on} == {"source", "target"}
    assert np.array_equal(one.forward.displacement, two.backward.displacement, equal_nan=True)
    assert np.array_equal(one.backward.displacement, two.forward.displacement, equal_nan=True)
    assert np.array_equal(one.other.mesh.points, two.other.images)
    for here, there in zip(one.alone, two.alone, strict=True):
        assert np.array_equal(here.mesh.points, there.images)
        assert np.array_equal(here.images, there.mesh.points)
    affine = [np.array(f.certificate.settings["alignment"]["affine"]) for f in (one, two)]
    assert np.allclose(affine[0] @ affine[1], np.eye(4), atol=1e-9)
    assert one.certificate.verdict is two.certificate.verdict


def test_the_number_of_threads_changes_no_bit(small_pair, small_job):
    threads = numba.get_num_threads()
    scans = [read_labels(small_pair.source), read_labels(small_pair.target)]
    try:
        pipeline.use_threads(1)
        by_one = pipeline.map_pair(*scans, small_job)
    finally:
        pipeline.use_threads(threads)
    stored = read_map_folder(small_pair.folder)
    assert np.array_equal(by_one.map.images, stored.map.images)
    assert np.array_equal(by_one.map.mesh.points, stored.map.mesh.points)


def test_one_order_is_the_map_before_it_was_drawn_to_the_other(small_pair, small_job):
    scans = [read_labels(small_pair.source), read_labels(small_pair.target)]
    single = pipeline.map_pair(*scans, replace(small_job, both_orders=False))
    stored = read_map_folder(small_pair.folder)
    assert single.alone is None
    assert np.array_equal(single.map.images, stored.alone[0].images)
    assert np.array_equal(single.map.mesh.points, stored.alone[0].mesh.points)
    apart = np.abs(stored.map.mesh.points - stored.alone[0].mesh.points).max()
    assert 0 < max(apart, np.abs(stored.map.images - stored.alone[0].images).max()) < 0.5  # of a 1 mm voxel


def test_the_report_made_again_is_the_same_page(small_pair):
    page = small_pair.folder / "report.html"
    before = page.read_bytes()
    assert pipeline.report_folder(small_pair.folder) == page
    assert page.read_bytes() == before


def contents(path):
    """Everything a reader could find: unpacked, and pictures of the page as they are."""
    data = path.read_bytes()
    parts = [gzip.decompress(data) if path.suffix == ".gz" else data]
    parts += [base64.b64decode(m) for m in re.findall(rb"base64,([A-Za-z0-9+/=]+)", data)]
    return b"\0".join(parts)


def private_words(root):
    names = {getpass.getuser(), socket.gethostname()}
    words = {str(root), root.name, root.parent.name, str(Path.home()), str(Path(__file__).parents[2])}
    # a name that is an everyday word ("root" is in "cube root") cannot be searched for alone
    words |= {name for name in names if len(name) > 4}
    words |= {f"/{name}" for name in names if len(name) > 3}
    day = time.localtime()
    words |= {
        time.strftime(form, day)
        for form in ("%Y-%m-%d", "%Y%m%d", "%d.%m.%Y", "%d %b %Y", "%d %B %Y", "%b %d")
    }
    return {word for word in words if len(word) > 3}


def test_no_path_user_host_or_date_in_any_file(small_pair):
    for path in small_pair.folder.iterdir():
        data = contents(path)
        for word in private_words(small_pair.root):
            assert word.encode() not in data, (path.name, word)
        if path.suffix == ".gz":
            packed = path.read_bytes()
            assert packed[3] == 0  # RFC 1952: no file name, no comment
            assert packed[4:8] == bytes(4)  # nor a time
        else:
            assert not re.search(rb"\b\d\d:\d\d:\d\d\b", data), path.name


def test_an_oblique_scan_that_states_its_place_by_quaternion_alone(
    tmp_path, small_pair, small_job, without_report
):
    # law: a folder reads back as its own; a quaternion's affine is not the float32 numbers NIfTI keeps
    import nibabel

    turn = np.eye(4)
    angle = 0.3
    turn[:2, :2] = [[np.cos(angle), -np.sin(angle)], [np.sin(angle), np.cos(angle)]]
    turn[:3, 3] = [101.7, -57.3, 33.1]
    files = []
    for file, name in ((small_pair.source, "a.nii.gz"), (small_pair.target, "b.nii.gz")):
        image = nibabel.load(file)
        moved = nibabel.Nifti1Image(np.asarray(image.dataobj), None)
        moved.header.set_xyzt_units("mm")
        moved.header.set_qform(turn @ image.affine, code=1)
        moved.header["sform_code"] = 0
        nibabel.save(moved, tmp_path / name)
        assert int(nibabel.load(tmp_path / name).header["sform_code"]) == 0
        files.append(tmp_path / name)
    without_report(pipeline.map_files, *files, tmp_path / "map", replace(small_job, both_orders=False))
    opinion = pipeline.certify_folder(tmp_path / "map")
    assert opinion.disagreements == ()
