"""A map folder measured, files in and files out: the body is grown by 1.06 in closed form."""

import json
import shutil

import nibabel
import numpy as np
import pandas
import pytest
from pyarrow import parquet
from volmap_cli.main import main

from volmap import pipeline
from volmap.io.nifti import write_labels
from volmap.mapfolder import read_map_folder
from volmap.types import Grid, InputError, LabelVolume
from volmap.types.notice import caution

GROWTH = 1.06**3


def test_labels_of_a_map(small_pair, tmp_path):
    measured = pipeline.measure_files(
        small_pair.folder, tmp_path / "t.csv", mask=tmp_path / "reliable.nii.gz"
    )
    frame = pandas.read_csv(tmp_path / "t.csv").set_index("region")
    assert list(frame.index) == [1, 2]
    assert list(frame["name"]) == ["shell", "Kern é"]
    for side, file in (("source", small_pair.source), ("target", small_pair.target)):
        scan = nibabel.load(file)
        voxel = abs(np.linalg.det(scan.affine[:3, :3]))
        counts = np.bincount(np.asarray(scan.dataobj).astype(int).ravel())
        for number in (1, 2):
            drawn = counts[number] * voxel
            assert frame.loc[number, f"volume_{side}_voxels_mm3"] == pytest.approx(drawn, rel=1e-6)
            # the uncertainty holds what the map's solid lacks against the scan (three of them: one in 400)
            off = abs(frame.loc[number, f"volume_{side}_mm3"] - drawn)
            assert off < max(3 * frame.loc[number, "volume_change_uncertainty_mm3"], 0.01 * drawn)
    off = (frame["volume_change_percent"] - 100 * (GROWTH - 1)).abs()
    assert (off < 3 * frame["volume_change_uncertainty_percent"]).all()  # closed form
    assert (frame["volume_change_uncertainty_mm3"] <= frame["volume_change_bound_mm3"]).all()
    assert frame["uncertainty_from"].str.startswith("boundary residual").all()
    assert (frame["reliable_percent"] > 90).all()
    mask = nibabel.load(tmp_path / "reliable.nii.gz")
    assert np.allclose(mask.affine, nibabel.load(small_pair.source).affine)
    support = np.asarray(nibabel.load(small_pair.folder / "forward_support.nii.gz").dataobj)
    inside = np.asarray(mask.dataobj) > 0
    assert not inside[support == 0].any()
    assert inside.sum() > 0.9 * support.sum()
    assert measured.verdict.value == frame["verdict"].iloc[0]
    told = json.loads((tmp_path / "t.csv.json").read_text(encoding="utf-8"))
    assert told["notice"] == caution()
    assert told["source"]["name"] == small_pair.source.name
    assert {c["header"] for c in told["columns"]} == {"region", *frame.columns}
    assert str(small_pair.root) not in (tmp_path / "t.csv.json").read_text(encoding="utf-8")


def ball(grid, centre, radius, number=3):
    index = np.argwhere(np.ones(grid.shape, bool))
    inside = np.linalg.norm(grid.to_world(index.astype(float)) - centre, axis=1) < radius
    labels = np.where(inside, number, 0).astype(np.uint16).reshape(grid.shape)
    return LabelVolume(grid, labels, {number: "ball"}, "ball")


@pytest.mark.parametrize("side", ["source", "target"])
def test_a_region_drawn_in_either_scan(small_pair, tmp_path, side):
    folder = read_map_folder(small_pair.folder)
    grid = getattr(folder, side).grid
    write_labels(tmp_path / "ball.nii.gz", ball(grid, [1.0, 2, 0], 6.0))
    choice = {} if not folder.source.grid.same_place(folder.target.grid) else {"belongs_to": side}
    measured = pipeline.measure_folder(small_pair.folder, regions=tmp_path / "ball.nii.gz", **choice)
    table = measured.table
    assert table["drawn_in"] == (side,)
    change = table["volume_change_percent"][0]
    assert change == pytest.approx(100 * (GROWTH - 1), abs=6)  # the solver's error in so small a ball
    assert table[f"volume_{side}_mm3"][0] == pytest.approx(table[f"volume_{side}_voxels_mm3"][0], rel=1e-9)
    assert table["inside_percent"][0] == pytest.approx(100)
    for words in ("boundary residual", "two orders", "not in it"):
        assert words in table["uncertainty_from"][0]
    assert 0 < table["volume_change_uncertainty_percent"][0] < 20
    assert table.about["regions"]["drawn_in"] == side


def test_regions_on_neither_grid_must_be_vouched_for(small_pair, tmp_path):
    grid = Grid((20, 20, 20), np.eye(4))
    write_labels(tmp_path / "ball.nii.gz", ball(grid, [5.0, 5, 5], 4.0))
    with pytest.raises(InputError, match="--belongs-to") as refused:
        pipeline.measure_folder(small_pair.folder, regions=tmp_path / "ball.nii.gz")
    assert refused.value.refused
    measured = pipeline.measure_folder(
        small_pair.folder, regions=tmp_path / "ball.nii.gz", belongs_to="target"
    )
    assert measured.table["drawn_in"] == ("target",)


def test_regions_that_are_empty_or_cut_short_write_nothing(small_pair, tmp_path, capsys):
    grid = read_map_folder(small_pair.folder).source.grid
    write_labels(tmp_path / "none.nii.gz", LabelVolume(grid, np.zeros(grid.shape, np.uint16)))
    (tmp_path / "cut.nii.gz").write_bytes(small_pair.source.read_bytes()[:400])
    for name, status, said in (("none.nii.gz", 1, "holds no region"), ("cut.nii.gz", 3, "cut short")):
        command = ["measure", str(small_pair.folder), "--regions", str(tmp_path / name), "--quiet"]
        command += ["--out", str(tmp_path / "t.csv"), "--belongs-to", "source"]
        assert main(command) == status
        told = capsys.readouterr().err
        assert said in told
        assert told.count("\n") == 1
    assert sorted(p.name for p in tmp_path.iterdir()) == ["cut.nii.gz", "none.nii.gz"]


def test_the_scans_own_labels_are_known_by_their_digest(small_pair):
    measured = pipeline.measure_folder(small_pair.folder, regions=small_pair.target)
    assert set(measured.table["drawn_in"]) == {"target"}
    labels = pipeline.measure_folder(small_pair.folder).table
    # drawn with voxels or as the map's tets: the same label to what voxels make of a boundary
    assert measured.table["volume_target_mm3"] == pytest.approx(labels["volume_target_mm3"], rel=0.05)
    # law: no word of the user makes one scan's own labels those of the other
    with pytest.raises(InputError, match="its digest says so") as refused:
        pipeline.measure_folder(small_pair.folder, regions=small_pair.target, belongs_to="source")
    assert refused.value.refused


def test_a_failed_map_says_so_in_every_row_and_ends_with_1(small_pair, tmp_path, capsys):
    folder = shutil.copytree(small_pair.folder, tmp_path / "failed")
    document = json.loads((folder / "certificate.json").read_text(encoding="utf-8"))
    gate = next(g for g in document["gates"] if g["name"] == "overlap")
    gate["verdict"] = document["verdict"] = "fail"
    (folder / "certificate.json").write_text(json.dumps(document), encoding="utf-8")
    assert main(["measure", str(folder), "--out", str(tmp_path / "t.parquet"), "--quiet"]) == 1
    assert "says fail (overlap)" in capsys.readouterr().out
    frame = pandas.read_parquet(tmp_path / "t.parquet")
    assert (frame["verdict"] == "fail").all()
    assert (frame["failed_gates"] == "overlap").all()
    assert (frame["reliable_percent"] == 0).all()  # the gate names no place: it speaks of the whole map
    assert frame["volume_ratio_p50_reliable_1"].isna().all()
    assert frame["volume_ratio_p50_1"].notna().all()


@pytest.mark.parametrize("each", ["tet", "point"])
def test_rows_of_single_tets_and_points(small_pair, tmp_path, each):
    out = tmp_path / "t.parquet"
    assert main(["measure", str(small_pair.folder), "--out", str(out), "--each", each, "--quiet"]) == 0
    found = parquet.read_table(out)
    folder = read_map_folder(small_pair.folder)
    mesh, image = folder.map.mesh, folder.map.images
    assert found.num_rows == (len(mesh.tets) if each == "tet" else len(mesh.points))
    assert found.schema.field("image_x_mm").metadata[b"unit"] == b"mm"
    x = image[mesh.tets].mean(axis=1) if each == "tet" else image
    assert np.array_equal(found["image_x_mm"].to_numpy(), x[:, 0])
    assert abs(found["volume_ratio_1"].to_numpy().mean() - GROWTH) < 0.1


def test_long_rows(small_pair, tmp_path):
    out = str(tmp_path / "t.csv")
    assert main(["measure", str(small_pair.folder), "--out", out, "--long", "--quiet"]) == 0
    frame = pandas.read_csv(out)
    assert set(frame["measure"]) >= {"volume_source", "volume_ratio_p50", "stretch_smallest_p99_reliable"}
    one = frame[(frame["region"] == 2) & (frame["measure"] == "volume_source")]
    assert one["unit"].tolist() == ["mm3"]


@pytest.mark.parametrize(
    ("options", "said"),
    [
        (["--each", "tet", "--long"], "--each tet goes with neither"),
        (["--belongs-to", "source"], "none are given"),
        (["--threshold", "0.5"], "none are given"),
        (["--frame", "0"], "none are given"),
        (["--names", "names.tsv"], "none are given"),
    ],
)
def test_options_that_do_not_go_together(small_pair, tmp_path, capsys, options, said):
    assert main(["measure", str(small_pair.folder), "--out", str(tmp_path / "t.csv"), *options]) == 2
    assert said in capsys.readouterr().err
    assert not list(tmp_path.iterdir())


def test_a_place_that_is_taken_is_told_before_the_work(small_pair, tmp_path, capsys):
    (tmp_path / "m.nii.gz").write_bytes(b"x")
    command = ["measure", str(small_pair.folder), "--out", str(tmp_path / "t.csv")]
    assert main([*command, "--mask", str(tmp_path / "m.nii.gz"), "--quiet"]) == 3
    assert "m.nii.gz: exists already" in capsys.readouterr().err
    assert [p.name for p in tmp_path.iterdir()] == ["m.nii.gz"]
