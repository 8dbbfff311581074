"""`carry` through one field's file: the right way only, and only with the document that belongs to it."""

import csv
import json
import shutil

import nibabel
import numpy as np
import pytest
from scipy.ndimage import map_coordinates
from volmap_cli.main import main

from volmap import pipeline
from volmap.carry import move_points
from volmap.mapfolder import read_map_folder
from volmap.types import InputError


@pytest.fixture
def fields(small_pair, tmp_path):
    """The fields and their documents alone, away from their folder."""
    for name in ("forward", "backward"):
        for ending in (".nii.gz", ".json"):
            shutil.copyfile(small_pair.folder / f"{name}{ending}", tmp_path / f"{name}{ending}")
    return tmp_path


def points_file(path, points):
    with path.open("w", newline="", encoding="utf-8") as stream:
        writer = csv.writer(stream)
        writer.writerow(["name", "x_mm", "y_mm", "z_mm"])
        writer.writerows([f"p{i}", *map(repr, p)] for i, p in enumerate(points.tolist()))


def read_points(path):
    with path.open(encoding="utf-8", newline="") as stream:
        return np.array([[float(r[c]) for c in ("x_mm", "y_mm", "z_mm")] for r in csv.DictReader(stream)])


def codes(findings):
    return [f.code for f in findings]


def test_points_are_moved_and_the_output_says_by_what(small_pair, fields):
    points = np.random.default_rng(5).uniform(-8, 8, (40, 3))
    points_file(fields / "here.csv", points)
    findings = pipeline.carry_file(fields / "here.csv", fields / "forward.nii.gz", fields / "there.csv")
    assert codes(findings) == ["sampled-field"]
    there = read_points(fields / "there.csv")
    # truth: SciPy's linear interpolation of the field's voxels, read by nibabel
    image = nibabel.load(fields / "forward.nii.gz")
    index = nibabel.affines.apply_affine(np.linalg.inv(image.affine), points).T
    u = [map_coordinates(np.asarray(image.dataobj)[..., 0, d], index, order=1) for d in range(3)]
    np.testing.assert_allclose(there, points + np.stack(u, axis=1), atol=1e-4)
    told = json.loads((fields / "there.csv.json").read_text(encoding="utf-8"))
    error = json.loads((fields / "forward.json").read_text(encoding="utf-8"))["against_exact_map"]["max_mm"]
    exact = move_points(read_map_folder(small_pair.folder).map, points).points
    assert 0 < np.linalg.norm(there - exact, axis=1).max() < 1.05 * error
    assert "not by the exact map" in told["how"]
    assert f"differ by up to {error:.3g} mm" in told["how"]
    assert (told["from"]["name"], told["to"]["name"]) == ("before.nii.gz", "nachher ü.nii.gz")
    assert told["through"] == [{"field": "forward.nii.gz", "from": "before.nii.gz", "to": "nachher ü.nii.gz"}]


def test_labels_of_target_come_onto_sources_grid(small_pair, fields):
    out = fields / "out.nii.gz"
    findings = pipeline.carry_file(small_pair.target, fields / "forward.nii.gz", out, kind="labels")
    assert codes(findings) == ["sampled-field"]
    pipeline.carry_file(
        small_pair.target, small_pair.folder, fields / "by_map.nii.gz", kind="labels", reverse=True
    )
    a, b = (np.asarray(nibabel.load(p).dataobj) for p in (out, fields / "by_map.nii.gz"))
    assert (a != b).mean() < 1e-3
    assert (a > 0).sum() > 1000


@pytest.mark.parametrize(
    ("field", "wrong", "other"), [("forward", "source", "backward"), ("backward", "target", "forward")]
)
def test_a_volume_of_the_wrong_scan_is_refused_by_its_digest(small_pair, fields, field, wrong, other):
    with pytest.raises(InputError) as caught:
        pipeline.carry_file(getattr(small_pair, wrong), fields / f"{field}.nii.gz", fields / "out.nii.gz")
    assert "(its digest says so)" in caught.value.sentence
    assert f"use {other}.nii.gz" in caught.value.sentence
    assert caught.value.refused
    assert not (fields / "out.nii.gz").exists()


def other_grid(document):
    """As if the two scans had grids of their own, of which the field lies on SOURCE's."""
    document["points_into"]["grid"]["affine"][0][3] += 0.5


def changed(path, change):
    document = json.loads(path.read_text(encoding="utf-8"))
    change(document)
    path.write_text(json.dumps(document), encoding="utf-8")


def an_image(small_pair, path, shift=0.0):
    scan = nibabel.load(small_pair.target)
    affine = scan.affine.copy()
    affine[0, 3] += shift
    image = nibabel.Nifti1Image(np.random.default_rng(0).normal(size=scan.shape).astype(np.float32), affine)
    image.header.set_xyzt_units("mm")
    nibabel.save(image, path)


def test_an_image_is_told_by_its_grid(small_pair, fields):
    changed(fields / "forward.json", other_grid)
    an_image(small_pair, fields / "target_image.nii.gz", 0.5)
    an_image(small_pair, fields / "source_image.nii.gz")
    an_image(small_pair, fields / "other_image.nii.gz", 0.25)
    through = fields / "forward.nii.gz"
    findings = pipeline.carry_file(fields / "target_image.nii.gz", through, fields / "out.nii.gz")
    assert "told-by-grid" in codes(findings)
    for name, words in (("source", "has the voxel grid of before"), ("other", "say --belongs-to target")):
        with pytest.raises(InputError, match=words):
            pipeline.carry_file(fields / f"{name}_image.nii.gz", through, fields / "no.nii.gz")
    findings = pipeline.carry_file(
        fields / "other_image.nii.gz", through, fields / "yes.nii.gz", belongs_to="target"
    )
    assert "vouched-for" in codes(findings)


def negate(folder):
    path = folder / "forward.nii.gz"
    image = nibabel.load(path)
    nibabel.save(nibabel.Nifti1Image(-np.asarray(image.dataobj), None, image.header), path)


def off_by_one(folder):
    path = folder / "forward.nii.gz"
    image = nibabel.load(path)
    affine = image.affine.copy()
    affine[:3, 3] += affine[:3, 0]
    written = nibabel.Nifti1Image(np.asarray(image.dataobj), None, image.header)
    written.set_sform(affine, 1)
    written.set_qform(affine, 1)
    nibabel.save(written, path)


def swapped(folder):
    shutil.copyfile(folder / "backward.nii.gz", folder / "forward.nii.gz")


def no_document(folder):
    (folder / "forward.json").unlink()


def other_schema(folder):
    changed(folder / "forward.json", lambda d: d.update(schema="volmap-map/1"))


def no_direction(folder):
    changed(folder / "forward.json", lambda d: d.pop("direction"))


def wrong_role(folder):
    changed(folder / "forward.json", lambda d: d.update(direction="backward"))


@pytest.mark.parametrize(
    ("spoil", "words"),
    [
        (negate, "forward.nii.gz: the vector at voxel"),
        (negate, "their sign turned"),
        (
            off_by_one,
            "does not lie on the grid that forward.json names, found its affine is off by 1 voxel along i",
        ),
        (swapped, "forward.nii.gz: the vector at voxel"),
        (no_document, "has no document beside it, and nothing else says which way the field runs"),
        (other_schema, "forward.json: is not the document of a field"),
        (no_direction, "forward.json: does not say in which scan grid_space is"),
        (wrong_role, "forward.json: does not say in which scan grid_space is"),
    ],
)
def test_a_field_that_is_not_what_it_says_carries_nothing(fields, spoil, words):
    points_file(fields / "here.csv", np.zeros((1, 3)))
    spoil(fields)
    with pytest.raises(InputError) as caught:
        pipeline.carry_file(fields / "here.csv", fields / "forward.nii.gz", fields / "there.csv")
    assert words in caught.value.sentence
    assert not (fields / "there.csv").exists()


def test_a_field_has_one_way_and_no_company(fields, small_pair, capsys):
    points_file(fields / "here.csv", np.zeros((1, 3)))
    call = ["carry", str(fields / "here.csv"), "--out", str(fields / "there.csv"), "--quiet", "--through"]
    assert main([*call, str(fields / "forward.nii.gz"), "--reverse"]) == 2
    said = capsys.readouterr().err
    assert "a field runs one way: for this kind of thing from before.nii.gz" in said
    assert "use backward.nii.gz, without --reverse" in said
    assert main([*call, str(small_pair.folder), str(fields / "forward.nii.gz")]) == 3
    assert "a field is not chained with others" in capsys.readouterr().err
    assert main([*call, str(fields / "forward.nii.gz")]) == 0
    assert "note: forward.nii.gz: carried by the sampled field" in capsys.readouterr().out
