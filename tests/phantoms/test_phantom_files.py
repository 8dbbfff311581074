"""What a phantom leaves on disk, read back with independent readers."""

import csv
import hashlib
import json

import nibabel
import numpy as np
import pytest
from volmap_phantoms import make, write, writer

from volmap.types import InputError
from volmap.types.notice import caution, short_caution


@pytest.fixture(scope="module")
def phantom():
    return make("folded-slab", voxel_mm=2.5)


@pytest.fixture(scope="module")
def folder(phantom, tmp_path_factory):
    return write(phantom, tmp_path_factory.mktemp("phantoms") / "slab")


def rows(file, delimiter=","):
    with file.open(encoding="utf-8", newline="") as stream:
        return list(csv.DictReader(stream, delimiter=delimiter))


def test_every_file_is_there(folder):
    wanted = {"README.md", "truth.json", "labels.tsv"}
    wanted |= {f"visit{k}_{kind}.nii.gz" for k in range(3) for kind in ("labels", "image")}
    wanted |= {f"beads_visit{k}.csv" for k in range(3)}
    wanted |= {"beads_0_to_1.csv", "beads_0_to_2.csv", "beads_1_to_2.csv"}
    assert {p.name for p in folder.iterdir()} == wanted


def test_volumes_read_back_with_nibabel(folder, phantom):
    # independent reader: voxels, both affines, their codes, unit, orientation letters and caution
    for k, code in enumerate(("RAS", "LSA", "SPR")):
        for kind in ("labels", "image"):
            image = nibabel.load(folder / f"visit{k}_{kind}.nii.gz")
            header = image.header
            affine = phantom.visits[k].labels.grid.affine
            assert np.array_equal(header.get_sform(), affine)
            assert header.get_qform() == pytest.approx(affine, abs=1e-4)
            assert (int(header["sform_code"]), int(header["qform_code"])) == (1, 1)
            assert header.get_xyzt_units()[0] == "mm"
            assert "".join(nibabel.aff2axcodes(image.affine)) == code
            assert bytes(header["descrip"]).rstrip(b"\0").decode() == short_caution()
        labels = nibabel.load(folder / f"visit{k}_labels.nii.gz")
        assert labels.get_data_dtype() == np.uint8
        assert np.array_equal(np.asarray(labels.dataobj), phantom.visits[k].labels.labels)
        values = np.asarray(nibabel.load(folder / f"visit{k}_image.nii.gz").dataobj)
        assert np.abs(values - phantom.visits[k].image.values).max() <= 0.501


def test_tables_hold_the_beads(folder, phantom):
    table = rows(folder / "beads_0_to_2.csv")
    assert list(table[0]) == list(writer.PAIR_HEADER)
    start = np.array([[float(r[c]) for c in ("x_mm", "y_mm", "z_mm")] for r in table])
    end = np.array([[float(r[c]) for c in ("to_x_mm", "to_y_mm", "to_z_mm")] for r in table])
    assert start == pytest.approx(phantom.visits[0].beads.points, abs=1e-4)
    assert end == pytest.approx(phantom.visits[2].beads.points, abs=1e-4)
    assert {r["role"] for r in table} == {"check"}
    single = rows(folder / "beads_visit1.csv")
    assert list(single[0]) == list(writer.POINT_HEADER)
    assert [r["name"] for r in single] == list(phantom.visits[1].beads.names)
    assert rows(folder / "labels.tsv", "\t")[1] == {"index": "2", "name": "rod"}


def test_truth_record_holds_displacements_and_ratios(folder, phantom):
    record = json.loads((folder / "truth.json").read_text(encoding="utf-8"))
    moved = phantom.visits[2].beads.points - phantom.visits[0].beads.points
    assert list(record["pairs"]["0_to_2"]["displacement_mm"].values()) == pytest.approx(moved, abs=1e-4)
    assert record["pairs"]["0_to_1"]["volume_ratio"]["1"] == {"mean": 1.0, "min": 1.0, "max": 1.0}
    assert record["notice"] == caution()
    assert record["settings"] == {"seed": "0", "voxel_mm": "2.5"}
    assert caution() in (folder / "README.md").read_text(encoding="utf-8")


def test_same_bytes_every_time(folder, phantom, tmp_path):
    again = write(phantom, tmp_path / "again")
    for file in sorted(folder.iterdir()):
        one, two = (hashlib.sha256((d / file.name).read_bytes()).hexdigest() for d in (folder, again))
        assert one == two, file.name


def test_whole_or_not_at_all(phantom, tmp_path, monkeypatch):
    def fails(*_):
        raise KeyboardInterrupt

    monkeypatch.setattr(writer, "_readme", fails)
    with pytest.raises(KeyboardInterrupt):
        write(phantom, tmp_path / "half")
    assert list(tmp_path.iterdir()) == []


def test_a_folder_that_exists_is_left_alone(phantom, tmp_path):
    (tmp_path / "mine").mkdir()
    with pytest.raises(InputError, match="mine: the folder exists already"):
        write(phantom, tmp_path / "mine")
    assert list((tmp_path / "mine").iterdir()) == []


def test_pairs_without_truth_say_no_ratio(tmp_path):
    folder = write(make("twin-bodies", voxel_mm=3.0), tmp_path / "twins")
    pair = json.loads((folder / "truth.json").read_text(encoding="utf-8"))["pairs"]["0_to_1"]
    assert set(pair) == {"displacement_mm"}
    assert "no true map" in (folder / "README.md").read_text(encoding="utf-8")
