"""Closed surfaces through TetGen: closed forms, faults, and a second opinion on the lattice mesher."""

import os
import sys

import numpy as np
import pytest
import pyvista
from label_shapes import ball
from test_mesh_shapes import faces_of

from volmap.kernels.tets import signed_volumes
from volmap.mesh import MeshSettings, mesh, mesh_surface, tetgen_run
from volmap.mesh.surface_checks import enclosed_volume, merged, surface_topology
from volmap.types import InputError

ICOSPHERE_VOLUME = 4.152741  # of level 3 in the unit ball (recomputed in closed form)


def icosphere(level=3):
    surface = pyvista.Icosphere(radius=1.0, nsub=level)
    return np.asarray(surface.points, float), surface.faces.reshape(-1, 4)[:, 1:].astype(np.int64)


def test_sphere_is_filled_and_its_surface_kept():
    points, triangles = icosphere()
    far = 10 * points + [500.0, -900.0, 2000.0]
    result = mesh_surface(far, triangles, MeshSettings(wanted_tets=3000), label=4, name="ball.stl")
    assert result.mesh.present == (4,)
    assert np.isclose(result.mesh.volumes.sum(), 1000 * ICOSPHERE_VOLUME, rtol=1e-4)
    assert (result.mesh.volumes > 0).all()
    faces, counts = np.unique(faces_of(result.mesh.tets), axis=0, return_counts=True)
    assert counts.max() == 2
    assert (counts == 1).sum() == len(triangles)
    assert result.quality.pinned_tets == 0
    assert result.quality.min_dihedral_deg > 10
    hull = result.mesh.points[np.unique(faces[counts == 1])]
    assert np.allclose(np.linalg.norm(hull - [500.0, -900.0, 2000.0], axis=1), 10.0, atol=1e-4)


def test_edge_length_controls_the_number_of_tets():
    points, triangles = icosphere(2)
    n = [mesh_surface(10 * points, triangles, MeshSettings(edge_mm=e)).quality.tets for e in (1.5, 6.0)]
    assert n[0] > 3 * n[1]


def test_torus_topology():
    torus = pyvista.ParametricTorus(ringradius=3.0, crosssectionradius=1.0, u_res=30, v_res=16, w_res=4)
    torus = torus.triangulate().clean()
    points, triangles = np.asarray(torus.points, float), torus.faces.reshape(-1, 4)[:, 1:].astype(np.int64)
    points, triangles = merged(np.round(points, 5), triangles)
    assert surface_topology(triangles) == (1, 0)
    row = mesh_surface(points, triangles, MeshSettings(wanted_tets=2000)).quality.row(1)
    assert (row.pieces, row.euler) == (1, 0)
    assert abs(row.volume_mm3 / (2 * np.pi**2 * 3) - 1) < 0.05  # 2 pi^2 R r^2, chords inside


def test_repeated_points_of_a_stl_are_merged():
    points, triangles = icosphere(1)
    loose = points[triangles].reshape(-1, 3)
    joined, corners = merged(loose, np.arange(len(loose)).reshape(-1, 3))
    assert len(joined) == len(points)
    assert np.isclose(abs(enclosed_volume(joined, corners)), 3.658712, atol=1e-5)  # level 1, recomputed


def open_surface():
    points, triangles = icosphere()
    return points, triangles[1:]


def turned_triangle():
    points, triangles = icosphere()
    return points, np.r_[triangles[:1, ::-1], triangles[1:]]


def crossing_surface():
    points, triangles = icosphere()
    points = points * [1.0, 1.0, 0.2]
    points[np.argmax(points[:, 2]), 2] = -2.0
    return points, triangles


def branching_surface():
    points, triangles = icosphere(1)
    return np.r_[points, [[0.0, 0.0, 5.0]]], np.r_[triangles, [[*triangles[0, :2], len(points)]] * 2]


def flat_surface():
    return np.array([[0.0, 0, 0], [1, 0, 0], [0, 1, 0], [1, 1, 0]]), np.array(
        [[0, 1, 2], [0, 2, 3], [0, 3, 1], [1, 3, 2]]
    )


@pytest.mark.parametrize(
    ("make", "word"),
    [
        (open_surface, "not closed"),
        (turned_triangle, "inconsistently"),
        (crossing_surface, "could not be filled|crosses itself"),
        (branching_surface, "branches"),
        (flat_surface, "encloses nothing"),
    ],
)
def test_faulty_surfaces_are_refused_in_one_sentence(make, word):
    with pytest.raises(InputError, match=word) as caught:
        mesh_surface(*make(), MeshSettings(wanted_tets=500), name="faulty.ply")
    assert caught.value.refused
    assert "faulty.ply" in str(caught.value)
    assert "\n" not in str(caught.value)


@pytest.mark.parametrize(
    ("child", "word"),
    [("import os; os.abort()", "stopped"), ("import time; time.sleep(60)", "time limit")],
    ids=["crash", "hang"],
)
def test_a_crash_or_hang_of_the_child_is_a_sentence(monkeypatch, child, word):
    monkeypatch.setattr(tetgen_run, "CHILD", child)
    with pytest.raises(InputError, match=word):
        mesh_surface(*icosphere(1), MeshSettings(wanted_tets=500), time_limit_s=0.5)


def test_nothing_is_left_in_the_working_directory(tmp_path, monkeypatch, capfd):
    monkeypatch.chdir(tmp_path)
    mesh_surface(*icosphere(1), MeshSettings(wanted_tets=500))
    assert os.listdir(tmp_path) == []
    assert capfd.readouterr() == ("", "")
    assert "tetgen" not in sys.modules


def test_second_opinion_on_the_lattice_mesher():
    """The hull of a lattice mesh, filled anew by TetGen, holds the same volume."""
    result = mesh(ball(8.0), MeshSettings(edge_mm=2.0))
    surface = result.mesh.interfaces
    other = mesh_surface(surface.points, surface.triangles, MeshSettings(edge_mm=2.0))
    assert np.isclose(other.mesh.volumes.sum(), signed_volumes(result.mesh.points, result.mesh.tets).sum())
    assert np.isclose(enclosed_volume(*merged(surface.points, surface.triangles)), result.mesh.volumes.sum())
