"""What `volmap export` writes, read again by others, against the map and against the truth of the pair.

Truth: y = 1.06 x + (1.5, 0, -1) in RAS+ (tests/conftest.py), up to the voxels' rounding; the exact map of the
folder, evaluated by a plain barycentric search in numpy here.
"""

import json
import shutil
import subprocess
from dataclasses import replace

import numpy as np
import pydicom
import pytest
from dicom_pull import pulled
from dicom_standard import faults
from volmap_cli.main import main

from volmap import pipeline
from volmap.io.volumes import read_labels
from volmap.mapfolder import read_map_folder
from volmap.pipeline import exporting
from volmap.types import Code, Grid, InputError, LabelCodes, Verdict

LPS = np.array([-1.0, -1.0, 1.0])
INNER_MM = np.array([[-8.0, 2.0, 1.0], [6.0, 2.0, 3.0], [0.0, -6.0, -8.0], [2.0, 8.0, 6.0]])


def grown(points):
    return 1.06 * points + [1.5, 0.0, -1.0]


@pytest.fixture(scope="module")
def folder(small_pair):
    return read_map_folder(small_pair.folder)


def through_tets(points, values, tets, places):
    """(n, 3) values at places, by the tet with the largest smallest weight: a slow twin of locating."""
    corners = points[tets]
    matrix = np.linalg.inv((corners[:, 1:] - corners[:, :1]).transpose(0, 2, 1))
    found = []
    for place in places:
        last = np.einsum("tij,tj->ti", matrix, place - corners[:, 0])
        weights = np.concatenate([1 - last.sum(axis=1, keepdims=True), last], axis=1)
        best = weights.min(axis=1).argmax()
        found.append(weights[best] @ values[tets[best]])
    return np.array(found)


def export(small_pair, out, *options):
    assert main(["export", str(small_pair.folder), "--out", str(out), "--quiet", *options]) == 0
    return out


@pytest.mark.parametrize("bring", ["source", "target"])
def test_images_are_brought_the_way_that_was_asked_for(small_pair, folder, tmp_path, bring):
    path = export(small_pair, tmp_path / "field.dcm", "--as", "registration", "--bring", bring)
    here, there = (grown(INNER_MM), INNER_MM) if bring == "source" else (INNER_MM, grown(INNER_MM))
    found = pulled(path, here * LPS) * LPS
    assert np.abs(found - there).max() < 0.7  # a third of a voxel
    assert np.abs(found - here).max() > 1.0
    a, b = folder.map.mesh.points, folder.map.images
    start, end = (b, a) if bring == "source" else (a, b)
    exact = through_tets(start, end, folder.map.mesh.tets, here)
    assert np.abs(found - exact).max() < 0.2  # trilinear between voxels against the map: a tenth of a voxel
    made, told = pydicom.dcmread(path), json.loads(path.with_name(path.name + ".json").read_text())
    assert faults(made) == []
    assert told["what"] == f"brings images of {bring.upper()} into the frame of reference of " + (
        "TARGET" if bring == "source" else "SOURCE"
    )
    frames = {side: told["frames_of_reference"][side]["uid"] for side in ("SOURCE", "TARGET")}
    onto = "TARGET" if bring == "source" else "SOURCE"
    assert made.FrameOfReferenceUID == frames[onto]
    assert made.DeformableRegistrationSequence[0].SourceFrameOfReferenceUID == frames[bring.upper()]


@pytest.mark.parametrize("bring", ["source", "target"])
def test_the_check_point_is_exact_in_the_object_and_by_the_map(small_pair, folder, tmp_path, bring):
    path = export(small_pair, tmp_path / "field.dcm", "--as", "registration", "--bring", bring)
    check = json.loads(path.with_name(path.name + ".json").read_text())["check_point"]
    here = np.array([check["registered_lps_mm"]])
    assert np.abs(pulled(path, here) - check["source_lps_mm"]).max() < 1e-9
    a, b = folder.map.mesh.points, folder.map.images
    start, end = (b, a) if bring == "source" else (a, b)
    exact = through_tets(start, end, folder.map.mesh.tets, here * LPS)
    assert np.abs(exact - check["source_ras_mm"]).max() < 1e-5  # float32


@pytest.mark.parametrize("which", ["carried", "source", "target"])
@pytest.mark.parametrize("coding", ["binary", "labelmap"])
def test_labels_leave_with_their_names_and_stand_where_they_stood(
    small_pair, folder, tmp_path, which, coding
):
    import highdicom

    out = tmp_path / "labels.dcm"
    path = export(small_pair, out, "--as", "segmentation", "--labels", which, "--coding", coding)
    seg, labels = highdicom.seg.segread(path), getattr(folder, which)
    assert faults(seg, conditional=("frame-of-reference",)) == []
    found = seg.get_volume(combine_segments=True)
    index = np.argwhere(found.array > 0)
    lps = index @ found.affine[:3, :3].T + found.affine[:3, 3]
    i, j, k = np.rint(labels.grid.to_index(lps * LPS)).astype(int).T
    assert np.array_equal(
        found.array[tuple(index.T)], labels.labels[i, j, k]
    )  # labels 1 and 2: no renumbering
    assert len(index) == np.count_nonzero(labels.labels)
    names = [s.SegmentLabel for s in seg.SegmentSequence]
    assert names[-2:] == ["shell", "Kern é"]


def test_all_objects_about_one_scan_share_study_and_frame(small_pair, tmp_path):
    onto = pydicom.dcmread(export(small_pair, tmp_path / "a.dcm", "--as", "registration"))
    back = pydicom.dcmread(
        export(small_pair, tmp_path / "b.dcm", "--as", "registration", "--bring", "target")
    )
    carried = pydicom.dcmread(export(small_pair, tmp_path / "c.dcm", "--as", "segmentation"))
    source = pydicom.dcmread(
        export(small_pair, tmp_path / "d.dcm", "--as", "segmentation", "--labels", "source")
    )
    of = {name: (d.StudyInstanceUID, d.FrameOfReferenceUID) for name, d in
          {"onto": onto, "back": back, "carried": carried, "source": source}.items()}  # fmt: skip
    assert of["onto"] == of["carried"]
    assert of["back"] == of["source"]
    assert len({uid for pair in of.values() for uid in pair}) == 4
    assert len({d.SOPInstanceUID for d in (onto, back, carried, source)}) == 4
    assert len({d.SeriesInstanceUID for d in (onto, back, carried, source)}) == 4


def test_stated_frames_are_used_and_said(small_pair, tmp_path, capsys):
    path = export(small_pair, tmp_path / "a.dcm", "--as", "registration", "--frames", "1.2.3.4", "1.2.3.5")
    made = pydicom.dcmread(path)
    assert made.FrameOfReferenceUID == "1.2.3.5"
    assert made.DeformableRegistrationSequence[0].SourceFrameOfReferenceUID == "1.2.3.4"
    said = capsys.readouterr().out
    assert "frame of reference of SOURCE: 1.2.3.4 (as the user stated it)" in said
    assert "brings images of SOURCE into the frame of reference of TARGET" in said
    export(small_pair, tmp_path / "b.dcm", "--as", "registration")
    assert "(new)" in capsys.readouterr().out


def test_the_same_export_has_the_same_bytes(small_pair, tmp_path):
    for kind in ("registration", "segmentation"):
        a, b = (export(small_pair, tmp_path / f"{kind}{n}.dcm", "--as", kind) for n in range(2))
        assert a.read_bytes() == b.read_bytes()
        assert a.with_name(a.name + ".json").read_bytes() == b.with_name(b.name + ".json").read_bytes()


@pytest.mark.parametrize(
    ("options", "status"),
    [
        (["--as", "registration", "--coding", "binary", "--out", "x.dcm"], 2),
        (["--as", "segmentation", "--bring", "source", "--out", "x.dcm"], 2),
        (["--as", "registration", "--out", "x.nii"], 3),
        (["--as", "registration", "--out", "taken.dcm"], 3),
        (["--as", "registration", "--out", "beside.dcm"], 3),
    ],
)
def test_what_does_not_fit_together_is_refused_and_nothing_is_written(
    small_pair, tmp_path, monkeypatch, options, status
):
    monkeypatch.chdir(tmp_path)
    for name in ("taken.dcm", "beside.dcm.json"):
        (tmp_path / name).write_text("mine")
    assert main(["export", str(small_pair.folder), "--quiet", *options]) == status
    assert sorted(p.name for p in tmp_path.iterdir()) == ["beside.dcm.json", "taken.dcm"]


def test_a_uid_that_is_none_ends_with_usage(small_pair, tmp_path, capsys):
    with pytest.raises(SystemExit) as ended:
        main(["export", str(small_pair.folder), "--as", "registration", "--out", str(tmp_path / "x.dcm"),
              "--frames", "1.2", "one"])  # fmt: skip
    assert ended.value.code == 2
    assert "is not a UID" in capsys.readouterr().err


def test_on_a_sheared_grid_the_map_is_sampled_anew_and_that_is_said(folder, tmp_path, monkeypatch):
    matrix = np.array(folder.target.grid.affine)
    matrix[:3, 2] += 0.3 * matrix[:3, 0]
    sheared = replace(folder.target, grid=Grid(folder.target.grid.shape, matrix))
    monkeypatch.setattr(exporting, "read_map_folder", lambda _: replace(folder, target=sheared))
    done = exporting.export_registration(tmp_path, tmp_path / "x.dcm")
    assert [f.code for f in done.findings] == ["grid-squared"]
    found = pulled(tmp_path / "x.dcm", grown(INNER_MM) * LPS) * LPS
    exact = through_tets(folder.map.images, folder.map.mesh.points, folder.map.mesh.tets, grown(INNER_MM))
    assert np.abs(found - exact).max() < 0.2
    here = np.array([done.told["check_point"]["registered_lps_mm"]])
    assert np.abs(pulled(tmp_path / "x.dcm", here) - done.told["check_point"]["source_lps_mm"]).max() < 1e-9
    with pytest.raises(InputError, match="not orthogonal"):
        exporting.export_segmentation(tmp_path, tmp_path / "y.dcm", which="target")
    assert not (tmp_path / "y.dcm").exists()


def test_a_map_whose_certificate_fails_says_so_when_it_leaves(folder, tmp_path, monkeypatch):
    gates = [
        replace(g, verdict=Verdict.FAIL) if g.name == "inverted_tets" else g for g in folder.certificate.gates
    ]
    failed = replace(folder, certificate=replace(folder.certificate, gates=tuple(gates)))
    monkeypatch.setattr(exporting, "read_map_folder", lambda _: failed)
    (finding,) = exporting.export_segmentation(tmp_path, tmp_path / "x.dcm").findings
    assert "certificate fails (inverted_tets)" in finding.sentence


def test_codes_of_source_go_with_its_carried_labels(folder, tmp_path, monkeypatch):
    liver = LabelCodes(Code("91723000", "SCT", "Anatomical Structure"), Code("10200004", "SCT", "Liver"))
    coded = replace(folder, source=replace(folder.source, codes={2: liver}))
    monkeypatch.setattr(exporting, "read_map_folder", lambda _: coded)
    exporting.export_segmentation(tmp_path, tmp_path / "x.dcm")
    found = read_labels(tmp_path / "x.dcm")
    assert dict(found.codes) == {2: liver}
    assert found.sha256 == folder.carried.sha256


def test_a_folder_that_is_none_cannot_be_exported(tmp_path):
    with pytest.raises(InputError, match="not a map folder"):
        pipeline.export_registration(tmp_path, tmp_path / "x.dcm")


@pytest.mark.skipif(shutil.which("dciodvfy") is None, reason="dciodvfy of dicom3tools is not installed")
@pytest.mark.parametrize(
    "options", [["registration"], ["registration", "--bring", "target"], ["segmentation"]]
)
def test_another_validator_finds_no_error(small_pair, tmp_path, options):
    path = export(small_pair, tmp_path / "x.dcm", "--as", *options)
    said = subprocess.run(["dciodvfy", str(path)], capture_output=True, text=True, check=False)
    assert "Error" not in said.stdout + said.stderr
