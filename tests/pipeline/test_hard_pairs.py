"""Hard pairs: refused before anything is meshed where topology differs; else solved, valid, honest."""

import numpy as np
import pytest
from volmap_phantoms.hard_pairs import HARD, make_hard

from volmap.kernels.crossings import triangle_crossings
from volmap.kernels.predicates import orientation_signs
from volmap.mapping import map_mesh
from volmap.mesh import MeshSettings, mesh
from volmap.pipeline import map_pair, pair
from volmap.types import InputError, Status

REFUSED = ("handle-missing", "piece-lost")


@pytest.mark.parametrize("name", REFUSED)
def test_another_topology_is_refused_before_meshing(monkeypatch, name):
    def meshed(*_, **__):
        raise AssertionError("meshed before it was refused")

    monkeypatch.setattr(pair.meshing, "mesh", meshed)
    hard = make_hard(name)
    with pytest.raises(InputError, match="Euler numbers") as refusal:
        map_pair(hard.source, hard.target)
    assert refusal.value.refused


@pytest.mark.slow
@pytest.mark.parametrize("name", [n for n in HARD if n not in REFUSED])
def test_hard_pairs_are_reached_without_folds(name):
    """Law: every exact sign positive, no boundary triangles cross; the residual inside a tenth of a voxel."""
    hard = make_hard(name)
    settings = MeshSettings(wanted_tets=4000)
    source, target = (mesh(volume, settings).mesh for volume in (hard.source, hard.target))
    outcome = map_mesh(source, target.interfaces, voxel_mm=hard.voxel_mm, guides=hard.guides).outcome
    assert outcome.status is Status.SETTLED
    assert outcome.history[-1].residual_mm <= 0.1 * hard.voxel_mm
    assert (orientation_signs(outcome.map.images, source.tets) > 0).all()
    surface = source.interfaces
    outer = surface.triangles[surface.sides[:, 1] == 0]
    assert len(triangle_crossings(np.array(outcome.map.images), outer)) == 0
