"""Measurement tables and lines through a map folder: rules asked for, applied and remembered."""

import csv
import json

import numpy as np
import pytest
from pyarrow import parquet
from volmap_cli.main import main

from volmap.io.polylines import read_polylines, write_polylines
from volmap.mapfolder import read_map_folder
from volmap.types import Polylines

HEADER = "name,x_mm,y_mm,z_mm,t1_ms,dose_Gy,flow_x_mm_per_s,flow_y_mm_per_s,flow_z_mm_per_s,site\n"
RULES = ["--rule", "flux", "--rule", "t1=value", "--rule", "dose=density"]


@pytest.fixture
def table(tmp_path):
    rows = np.random.default_rng(3).uniform(-8, 8, (20, 8))
    lines = [",".join([f"p{i}", *map(repr, row), "left"]) for i, row in enumerate(rows.tolist())]
    (tmp_path / "here.csv").write_text(HEADER + "\n".join(lines) + "\n", encoding="utf-8")
    return tmp_path / "here.csv", rows


def carry(thing, out, folder, *options):
    return main(["carry", str(thing), "--through", str(folder), "--out", str(out), "--quiet", *options])


def numbers(path):
    with path.open(encoding="utf-8", newline="") as stream:
        rows = list(csv.DictReader(stream))
    return np.array([[float(row[c]) for c in HEADER.strip().split(",")[1:-1]] for row in rows])


def test_numbers_follow_the_rules_that_were_said(table, small_pair, capsys):
    """Truth: J and F of the tet that holds each place, found by linear algebra over all tets."""
    here, rows = table
    there = here.with_name("there.csv")
    assert carry(here, there, small_pair.folder, *RULES) == 0
    found = numbers(there)
    volume_map = read_map_folder(small_pair.folder).map
    points, tets = volume_map.mesh.points, volume_map.mesh.tets
    system = np.concatenate([points[tets].swapaxes(1, 2), np.ones((len(tets), 1, 4))], axis=1)
    for row, carried in zip(rows, found, strict=True):
        weights = np.linalg.solve(system, np.append(row[:3], 1.0)[None, :, None])[..., 0]
        tet = weights.min(axis=1).argmax()
        here_edges, there_edges = (v[tets[tet, 1:]] - v[tets[tet, 0]] for v in (points, volume_map.images))
        F = np.linalg.solve(here_edges, there_edges).T
        J = np.linalg.det(F)
        expected = [*weights[tet] @ volume_map.images[tets[tet]], row[3], row[4] / J, *F @ row[5:] / J]
        np.testing.assert_allclose(carried, expected, atol=1e-9)
    assert there.read_text(encoding="utf-8").startswith(HEADER)
    assert carry(here, here.with_name("there.parquet"), small_pair.folder, *RULES) == 0
    table = parquet.read_table(here.with_name("there.parquet"))
    assert table["dose_Gy"].to_pylist() == found[:, 4].tolist()
    assert there.read_text(encoding="utf-8").count(",left\n") == 20
    capsys.readouterr()


def test_back_by_the_rules_in_the_document_beside_it(table, small_pair, capsys):
    here, rows = table
    there, home = here.with_name("there.csv"), here.with_name("home.csv")
    assert carry(here, there, small_pair.folder, *RULES) == 0
    told = json.loads(there.with_name("there.csv.json").read_text(encoding="utf-8"))
    assert {q["name"]: q["rule"] for q in told["quantities"]} == {
        "t1": "value",
        "dose": "density",
        "flow": "flux",
    }
    assert carry(there, home, small_pair.folder, "--reverse") == 0
    assert "rules were taken from the document beside it" in capsys.readouterr().out
    np.testing.assert_allclose(numbers(home), rows, atol=1e-9)


@pytest.mark.parametrize(
    ("options", "said"),
    [
        ([], "here.csv: nothing says how the scalar t1 changes"),
        (["--rule", "value"], "nothing says how the vector flow changes"),
        (["--rule", "flow=fast"], "'fast' is none of value, density, turn"),
        (["--rule", "value", "--rule", "density"], "another rule was given for all quantities"),
        ([*RULES, "--rule", "age=value"], "here.csv: holds no quantity 'age'"),
    ],
)
def test_what_was_not_said_is_a_matter_of_usage(table, small_pair, capsys, options, said):
    here, _ = table
    before = sorted(here.parent.iterdir())
    assert carry(here, here.with_name("there.csv"), small_pair.folder, *options) == 2
    err = capsys.readouterr().err
    assert said in err
    assert err.rstrip().endswith("see volmap carry --help")
    assert sorted(here.parent.iterdir()) == before


def test_a_rule_for_a_quantity_of_a_volume_is_told_to_have_nothing_to_act_on(tmp_path, small_pair, capsys):
    said = ["--rule", "flow=flux"]
    assert carry(small_pair.source, tmp_path / "out.nii.gz", small_pair.folder, *said) == 2
    assert "holds no quantity 'flow'" in capsys.readouterr().err


def test_a_rule_for_landmarks_is_told_to_have_nothing_to_act_on(tmp_path, small_pair, capsys):
    (tmp_path / "marks.csv").write_text("name,x_mm,y_mm,z_mm\na,1,2,3\n", encoding="utf-8")
    status = carry(tmp_path / "marks.csv", tmp_path / "out.csv", small_pair.folder, "--rule", "flow=flux")
    assert status == 2
    assert "holds no quantity 'flow'" in capsys.readouterr().err


@pytest.mark.parametrize("ending", ["csv", "vtp"])
def test_lines_go_there_and_back_through_files(tmp_path, small_pair, capsys, ending):
    """Law: the exact image has exact lengths both ways, and they are told for each line in both worlds."""
    points = np.random.default_rng(4).uniform(-8, 8, (9, 3))
    lines = Polylines(("1", "2", "3"), points, np.array([0, 2, 6, 9]))
    here, there, home = (tmp_path / f"{name}.{ending}" for name in ("here", "there", "home"))
    write_polylines(here, lines)
    assert carry(here, there, small_pair.folder) == 0
    assert carry(there, home, small_pair.folder, "--reverse") == 0
    back = read_polylines(home)[0]
    assert len(back.points) > 2 * len(points)
    np.testing.assert_allclose(back.lengths_mm, lines.lengths_mm, atol=1e-9)
    told = json.loads((tmp_path / f"there.{ending}.json").read_text(encoding="utf-8"))["lines"]
    assert [row["name"] for row in told] == ["1", "2", "3"]
    np.testing.assert_allclose([row["length_before_mm"] for row in told], lines.lengths_mm)
    np.testing.assert_allclose([row["length_after_mm"] for row in told], read_polylines(there)[0].lengths_mm)
    assert carry(here, tmp_path / f"few.{ending}", small_pair.folder, "--vertices-only") == 0
    assert len(read_polylines(tmp_path / f"few.{ending}")[0].points) == 9
    capsys.readouterr()


def test_a_mesh_with_data_through_files(tmp_path, small_pair, capsys):
    """VTK writes and reads; mass of a density is kept, a displacement follows its two ends."""
    pv = pytest.importorskip("pyvista")
    volume_map = read_map_folder(small_pair.folder).map
    made = pv.UnstructuredGrid({pv.CellType.TETRA: volume_map.mesh.tets}, np.array(volume_map.mesh.points))
    made.cell_data["label"] = volume_map.mesh.labels
    made.cell_data["dose"] = np.linspace(1, 2, made.n_cells)
    corners = volume_map.mesh.tets
    made.cell_data["edge"] = volume_map.mesh.points[corners[:, 1]] - volume_map.mesh.points[corners[:, 0]]
    made.save(tmp_path / "here.vtu")
    there = tmp_path / "there.vtu"
    assert carry(tmp_path / "here.vtu", there, small_pair.folder) == 2
    assert "--rule edge=turn" in capsys.readouterr().err
    said = ["--rule", "density", "--rule", "edge=line"]
    assert carry(tmp_path / "here.vtu", there, small_pair.folder, *said) == 0
    read = pv.read(there)
    sizes = {}
    for name, mesh in (("here", made), ("there", read)):
        sizes[name] = (mesh.compute_cell_sizes()["Volume"] * mesh["dose"]).sum()
    assert sizes["there"] == pytest.approx(sizes["here"], rel=1e-9)
    points = np.array(read.points, np.float64)
    np.testing.assert_allclose(read["edge"], points[corners[:, 1]] - points[corners[:, 0]], atol=1e-9)
    np.testing.assert_array_equal(read["label"], volume_map.mesh.labels)
    assert carry(tmp_path / "here.vtu", tmp_path / "x.vtp", small_pair.folder, *said) == 3
    assert "is no name for what comes out" in capsys.readouterr().err
    assert carry(there, tmp_path / "home.vtu", small_pair.folder, "--reverse") == 0
    assert "document beside it, which says how it was carried before (dose: density, edge" in (
        capsys.readouterr().out
    )
    np.testing.assert_allclose(pv.read(tmp_path / "home.vtu")["dose"], made["dose"], rtol=1e-9)
    left = ["--leave-out", "edge"]
    assert carry(tmp_path / "here.vtu", tmp_path / "few.vtu", small_pair.folder, *left) == 0
    assert sorted(pv.read(tmp_path / "few.vtu").array_names) == [
        "dose",
        "frame",
        "label",
        "notice",
        "rules",
        "units",
    ]
