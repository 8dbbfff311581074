"""Laws: a moved or mirrored grid gives the mesh moved; two runs give the same bytes; faults are told."""

import numpy as np
import pytest
from label_shapes import affine_of, centres, two_in_one, volume_of

from volmap.mesh import MeshSettings, mesh
from volmap.types import InputError

COARSE = MeshSettings(edge_mm=2.5)


@pytest.fixture(scope="module")
def plain():
    return two_in_one(), mesh(two_in_one(), COARSE)


def turned(angle, axis):
    u = np.array(axis, float) / np.linalg.norm(axis)
    cross = np.array([[0, -u[2], u[1]], [u[2], 0, -u[0]], [-u[1], u[0], 0]])
    return np.eye(3) + np.sin(angle) * cross + (1 - np.cos(angle)) * cross @ cross


def test_oblique_grid_gives_the_mesh_moved(plain):
    volume, base = plain
    rigid = np.eye(4)
    rigid[:3, :3], rigid[:3, 3] = turned(0.7, [1, 2, 3]), [40.0, -7.0, 100.0]
    moved = mesh(volume_of(volume.labels, affine=rigid @ volume.grid.affine), COARSE)
    assert np.allclose(moved.mesh.points, base.mesh.points @ rigid[:3, :3].T + rigid[:3, 3], atol=1e-6)
    assert (moved.mesh.tets == base.mesh.tets).all()


def test_left_handed_grid_gives_the_mesh_mirrored(plain):
    volume, base = plain
    mirror = np.diag([-1.0, 1.0, 1.0, 1.0])
    mirrored = mesh(volume_of(volume.labels, affine=mirror @ volume.grid.affine), COARSE)
    assert np.allclose(mirrored.mesh.points, base.mesh.points * [-1, 1, 1], atol=1e-9)
    assert (mirrored.mesh.volumes > 0).all()
    assert (np.sort(mirrored.mesh.tets) == np.sort(base.mesh.tets)).all()


def test_two_runs_give_the_same_bytes(plain):
    volume, base = plain
    again = mesh(volume, COARSE).mesh
    for name in ("points", "tets", "labels"):
        assert getattr(again, name).tobytes() == getattr(base.mesh, name).tobytes()


def test_labels_keep_their_numbers(plain):
    volume, base = plain
    renamed = np.array([0, 7, 300, 12])[np.array(volume.labels)]
    result = mesh(volume_of(renamed), COARSE)
    assert result.mesh.present == (7, 12, 300)
    for old, new in ((1, 7), (2, 300), (3, 12)):
        assert np.isclose(result.mesh.volume_of(new), base.mesh.volume_of(old), rtol=5e-3)


def test_sheared_grid_is_told(plain):
    volume, base = plain
    affine = affine_of(volume.grid.shape)
    affine[0, 1] = 0.2
    result = mesh(volume_of(volume.labels, affine=affine), COARSE)
    assert [f.code for f in result.findings] == ["sheared-affine"]
    assert not base.findings
    assert abs(result.quality.row(2).volume_error_pct) < 0.5


def test_specks_left_out_are_told():
    labels = np.zeros((16, 16, 16), np.uint16)
    labels[3:13, 3:13, 3:10] = 1
    labels[8, 8, 13] = 1
    result = mesh(volume_of(labels), COARSE)
    assert "pieces-left-out" in [f.code for f in result.findings]
    assert result.quality.row(1).specks_mm3 == 1.0


def test_contact_through_an_edge_is_told_as_a_hinge_or_a_change():
    labels = np.zeros((20, 20, 16), np.uint16)
    labels[3:10, 3:10, 3:13] = 1
    labels[10:17, 10:17, 3:13] = 1
    result = mesh(volume_of(labels), COARSE)
    assert {f.code for f in result.findings} & {"hinge", "topology-changed", "label-fragmented"}


def test_a_handle_that_is_lost_is_told():
    x, y, z = centres((20, 20, 9))
    labels = (x * x + y * y < 64) & (np.abs(z) < 3) & (x * x + y * y > 0.6)  # a hole one voxel wide
    result = mesh(volume_of(labels), COARSE)
    row = result.quality.row(1)
    assert row.voxel_euler == 0
    assert (row.euler != row.voxel_euler) == ("topology-changed" in [f.code for f in result.findings])


def test_a_body_smaller_than_the_edges_is_refused():
    labels = np.zeros((9, 9, 9), np.uint16)
    labels[4, 4, 4] = 1
    with pytest.raises(InputError, match="large enough") as caught:
        mesh(volume_of(labels), MeshSettings(edge_mm=30.0))
    assert caught.value.refused


@pytest.mark.parametrize(
    "wrong", [{"edge_mm": 0.0}, {"smoothing_voxels": 9.0}, {"refine": 7}, {"wanted_tets": 3}, {"max_tets": 1}]
)
def test_settings_out_of_range_are_refused(wrong):
    with pytest.raises(InputError, match="out of its range"):
        MeshSettings(**wrong)


def test_progress_is_told():
    told = []
    mesh(two_in_one(), COARSE, progress=lambda stage, step, total, note="": told.append((stage, step, total)))
    assert told[0][:2] == ("mesh", 1)
    assert told[-1][1] == told[-1][2]


def test_noise_is_meshed_and_told():
    labels = np.zeros((14, 14, 14), np.uint16)
    labels[2:12, 2:12, 2:12] = np.random.default_rng(0).integers(0, 3, (10, 10, 10))
    result = mesh(volume_of(labels), COARSE)
    assert (result.mesh.volumes > 0).all()
    codes = {f.code for f in result.findings}
    assert codes & {"volume-off", "label-fragmented", "label-lost", "label-perforated"}
    assert "topology-changed" in codes
    assert ("poor-tets" in codes) == (result.quality.min_dihedral_deg < 12)
