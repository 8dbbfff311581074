"""Coarser meshes of one volume.

Laws: the fine one is what `mesh` gives; a coarser one has its topology, or is left out.
"""

import numpy as np
import pytest
from label_shapes import ball, centres, two_in_one, volume_of
from test_mesh_shapes import require_sound

from volmap.mesh import MeshSettings, mesh, mesh_levels
from volmap.types import Level


def test_levels_of_three_labels():
    volume, settings = two_in_one(), MeshSettings(edge_mm=1.5)
    levels = mesh_levels(volume, settings, coarser=1)
    alone = mesh(volume, settings)
    for name in ("points", "tets", "labels"):
        assert getattr(levels.fine.mesh, name).tobytes() == getattr(alone.mesh, name).tobytes()
    assert not levels.left_out
    (coarse,) = levels.coarser
    assert coarse.settings.edge_mm == 2 * levels.fine.settings.edge_mm
    assert coarse.mesh.present == (1, 2, 3)
    require_sound(coarse)
    # Law: edges twice as long, volumes eight times as large; interfaces are split, so not quite.
    assert 5 < len(alone.mesh.tets) / len(coarse.mesh.tets) < 9
    for row in coarse.quality.rows:
        assert abs(row.volume_mm3 / row.voxel_mm3 - 1) < 0.03


def test_a_level_that_loses_a_label_is_left_out_and_told():
    labels = np.array(ball(10.0).labels)
    x, y, z = centres(labels.shape)
    labels[x * x + y * y + (z - 2) ** 2 < 2.0**2] = 2  # 33 voxels; the last level's edges cubed are 512 mm3
    levels = mesh_levels(volume_of(labels), MeshSettings(edge_mm=2.0))
    assert levels.fine.mesh.present == (1, 2)
    assert len(levels.coarser) + len(levels.left_out) == 2
    assert all(coarse.mesh.present == (1, 2) for coarse in levels.coarser)
    told = levels.left_out[-1]
    assert (told.level, told.code) == (Level.NOTE, "coarse-level-left-out")
    assert "edges of 8 mm" in told.sentence
    assert "label 2: no tets" in told.sentence


def test_a_level_that_closes_a_handle_is_left_out():
    x, y, z = centres((26, 26, 10))
    volume = volume_of((np.hypot(x, y) - 7.5) ** 2 + z * z < 9)  # a hole of 9 mm
    levels = mesh_levels(volume, MeshSettings(edge_mm=1.8), coarser=3)
    assert levels.fine.quality.row(1).euler == 0  # torus
    assert [coarse.quality.row(1).euler for coarse in levels.coarser] == [0] * len(levels.coarser)
    assert levels.left_out


@pytest.mark.parametrize("coarser", [0, 1])
def test_as_many_levels_as_asked(coarser):
    levels = mesh_levels(ball(8.0), MeshSettings(edge_mm=2.0), coarser=coarser)
    assert len(levels.coarser) + len(levels.left_out) == coarser
