"""Solids and surfaces as `volmap export` writes them, read by pyvista and nibabel.

Truth: F from the points of the file itself, by numpy here; the polar decomposition of SciPy; closed form
J = 1.06^3 of the pair (tests/conftest.py); distances by VTK's closest cell.
"""

import json

import nibabel as nib
import numpy as np
import pytest
import pyvista
from scipy.linalg import polar
from volmap_cli.main import main

from volmap.carry import strain_of
from volmap.mapfolder import read_map_folder
from volmap.types import TetMesh, VolumeMap


@pytest.fixture(scope="module")
def folder(small_pair):
    return read_map_folder(small_pair.folder)


@pytest.fixture(scope="module")
def solid(small_pair, tmp_path_factory):
    place = tmp_path_factory.mktemp("out") / "solid"
    assert main(["export", str(small_pair.folder), "--as", "solid", "--out", str(place), "--quiet"]) == 0
    return place


@pytest.fixture(scope="module")
def surfaces(small_pair, tmp_path_factory):
    place = tmp_path_factory.mktemp("out") / "surfaces"
    assert main(["export", str(small_pair.folder), "--as", "surfaces", "--out", str(place), "--quiet"]) == 0
    return place


def gradients(points, images, tets):
    a, b = (p[tets][:, 1:] - p[tets][:, :1] for p in (points, images))
    return np.linalg.solve(a, b).swapaxes(1, 2)


def test_strain_of_a_known_shear_is_its_closed_form():
    # Simple shear x -> x + g y: stretches (sqrt(g^2 + 4) +- g) / 2 and 1; R turns by atan(g / 2) about -z.
    g, points = 0.8, np.array([[0.0, 0, 0], [1, 0, 0], [0, 1, 0], [0, 0, 1]])
    mesh = TetMesh(points, np.array([[0, 1, 2, 3]]), np.array([1]))
    strain = strain_of(VolumeMap(mesh, points + np.outer(points[:, 1], [g, 0, 0])))
    large = (np.sqrt(g * g + 4) + g) / 2
    assert np.abs(strain.stretches[0] - [large, 1, 1 / large]).max() < 1e-12
    c, s = np.cos(np.arctan(g / 2)), np.sin(np.arctan(g / 2))
    assert np.abs(strain.turns[0] - [[c, s, 0], [-s, c, 0], [0, 0, 1]]).max() < 1e-12
    F = np.array([[1, g, 0], [0, 1, 0], [0, 0, 1.0]])
    assert np.abs(strain.before[0] @ F.T - strain.stretches[0][:, None] * strain.after[0]).max() < 1e-12
    assert (strain.before[0][np.arange(3), np.abs(strain.before[0]).argmax(axis=1)] > 0).all()


def test_the_solid_is_in_both_worlds_with_what_its_own_points_say(solid, folder):
    here, there = (pyvista.read(solid / f"solid_in_{side}.vtu") for side in ("source", "target"))
    tets = here.cells_dict[10]
    assert np.array_equal(tets, there.cells_dict[10])
    assert np.abs(here.points + here["to_target_mm"] - there.points).max() < 1e-9
    assert np.abs(there.points + there["to_source_mm"] - here.points).max() < 1e-9
    F = gradients(np.array(here.points), np.array(there.points), tets)
    assert np.abs(np.linalg.det(F) - here["volume_ratio"][: len(tets)]).max() < 1e-9
    for t in range(0, len(tets), len(tets) // 40):
        turn, stretch = polar(F[t])
        assert np.abs(here["rotation"][t].reshape(3, 3) - turn).max() < 1e-8
        lengths, _ = np.linalg.eigh(stretch)
        assert np.abs(here["stretch"][t] - lengths[::-1]).max() < 1e-9
        for a in range(3):
            direction, image = (m[f"stretch_direction_{a + 1}"][t] for m in (here, there))
            assert np.abs(F[t] @ direction - here["stretch"][t, a] * image).max() < 1e-8
    assert abs(np.median(here.point_data["volume_ratio"]) - 1.06**3) < 0.05


def test_arrays_are_all_there_and_all_explained(solid):
    told = json.loads((solid / "contents.json").read_text())
    for side in ("source", "target"):
        mesh = pyvista.read(solid / f"solid_in_{side}.vtu")
        assert set(told["cell_arrays"]) == set(mesh.cell_data)
        moved = {"source": {"to_target_mm", "image_mm"}, "target": {"to_source_mm", "origin_mm"}}[side]
        assert set(told["point_arrays"]) | moved == set(mesh.point_data)
        assert mesh.field_data["label_2"][0] == "Kern é"
        assert mesh.field_data["world"][0] == side.upper()
        assert "research use only" in mesh.field_data["notice"][0]


def test_boundary_distances_are_those_of_another_library(solid, folder):
    here, there = (pyvista.read(solid / f"solid_in_{side}.vtu") for side in ("source", "target"))
    far = here["boundary_distance_mm"]
    surface = folder.map.mesh.interfaces
    assert np.array_equal(np.flatnonzero(~np.isnan(far)), np.unique(surface.triangles))
    outer = np.setdiff1d(surface.of_label(1).triangles, surface.of_label(2).triangles)[:200]
    most = np.zeros(len(outer))
    for mesh, scan in ((here, folder.source_surface), (there, folder.target_surface)):
        own = scan.of_label(1)
        faces = np.insert(own.triangles, 0, 3, axis=1)
        poly = pyvista.PolyData(np.array(own.points), faces)
        _, nearest = poly.find_closest_cell(np.array(mesh.points)[outer], return_closest_point=True)
        most = np.maximum(most, np.linalg.norm(nearest - np.array(mesh.points)[outer], axis=1))
    assert np.abs(most - far[outer]).max() < 1e-6


def test_surfaces_of_each_label_close_and_hold_its_volume(surfaces, folder):
    names = sorted(p.name for p in surfaces.iterdir())
    assert names == sorted(["contents.json", *(f"{stem}{label}{end}" for label in (1, 2) for stem, end in (
        ("source_label_", ".surf.gii"), ("source_label_", ".shape.gii"), ("target_label_", ".surf.gii"))),
        *(f"source_label_{label}_in_target.surf.gii" for label in (1, 2))])  # fmt: skip
    for label in (1, 2):
        volumes = {}
        for kind in ("source_label_{}", "source_label_{}_in_target", "target_label_{}"):
            file = nib.load(surfaces / f"{kind.format(label)}.surf.gii")
            p, t = file.agg_data("pointset").astype(float), file.agg_data("triangle")
            edges = np.sort(np.concatenate([t[:, [0, 1]], t[:, [1, 2]], t[:, [2, 0]]]), axis=1)
            assert (np.unique(edges, axis=0, return_counts=True)[1] % 2 == 0).all()  # closed
            volumes[kind] = np.einsum("ti,ti->t", p[t[:, 0]], np.cross(p[t[:, 1]], p[t[:, 2]])).sum() / 6
        mesh = folder.map.mesh
        assert volumes["source_label_{}"] == pytest.approx(mesh.volume_of(label), rel=1e-5)
        image = folder.map.image_mesh.volume_of(label)
        assert volumes["source_label_{}_in_target"] == pytest.approx(image, rel=1e-5)
        assert volumes["target_label_{}"] == pytest.approx(image, rel=0.02)


def test_values_belong_to_the_points_of_their_surface(surfaces, folder):
    shape = nib.load(surfaces / "source_label_2.shape.gii")
    points = nib.load(surfaces / "source_label_2.surf.gii").agg_data("pointset")
    values = {array.meta["Name"]: array.data for array in shape.darrays}
    assert set(values) == {"volume_ratio", "moved_mm", "boundary_distance_mm"}
    images = nib.load(surfaces / "source_label_2_in_target.surf.gii").agg_data("pointset")
    assert np.abs(np.linalg.norm(images - points, axis=1) - values["moved_mm"]).max() < 1e-4
    assert not np.isnan(values["boundary_distance_mm"]).any()


def test_the_same_folder_has_the_same_bytes(small_pair, solid, surfaces, tmp_path):
    for kind, first in (("solid", solid), ("surfaces", surfaces)):
        again = tmp_path / kind
        assert main(["export", str(small_pair.folder), "--as", kind, "--out", str(again), "--quiet"]) == 0
        for path in first.iterdir():
            assert path.read_bytes() == (again / path.name).read_bytes()


def test_a_folder_that_stands_there_is_left_alone(small_pair, tmp_path):
    (tmp_path / "mine").mkdir()
    (tmp_path / "mine" / "thesis.txt").write_text("years of work")
    call = ["export", str(small_pair.folder), "--as", "solid", "--out", str(tmp_path / "mine"), "--quiet"]
    assert main(call) == 3
    assert main([*call, "--overwrite"]) == 3
    assert [p.name for p in (tmp_path / "mine").iterdir()] == ["thesis.txt"]
