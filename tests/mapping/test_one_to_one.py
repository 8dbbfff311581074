"""One-to-one: the image of the boundary never crosses itself, at any iterate (exact test)."""

from importlib.resources import files

import numpy as np
import pytest

from volmap.io.nifti import read_labels
from volmap.kernels.crossings import triangle_crossings
from volmap.mapping import MapSettings, climbing, map_mesh
from volmap.mapping.contact import Contact
from volmap.mesh import MeshSettings, mesh
from volmap.types import Status


@pytest.fixture(scope="module")
def donors():
    place = files("volmap_shared").joinpath("subcortical")
    return [
        mesh(read_labels(str(place / f"donor-{i}.nii.gz")), MeshSettings(wanted_tets=9000)).mesh
        for i in (12876, 10021)
    ]


def outer(body):
    surface = body.interfaces
    return np.ascontiguousarray(surface.triangles[surface.sides[:, 1] == 0])


def test_a_crack_in_one_scan_only(donors, monkeypatch):
    """Putamen and pallidum are parted by a crack in one scan only: crosses without the barrier, not with."""
    source, target = donors
    triangles = outer(source)
    free = map_mesh(source, target.interfaces, MapSettings(one_to_one=False)).outcome
    assert len(triangle_crossings(np.array(free.map.images), triangles)) > 0
    seen = []
    step = climbing.step

    def watched(solver, state):
        done = step(solver, state)
        seen.append(len(triangle_crossings(state.images, triangles)))
        return done

    monkeypatch.setattr(climbing, "step", watched)
    kept = map_mesh(source, target.interfaces, MapSettings()).outcome
    assert len(seen) == len(kept.history) > 5
    assert set(seen) == {0}
    assert (
        kept.history[-1].residual_mm < 0.2
    )  # a fifth of a voxel: the barrier does not hold the bodies apart


def test_the_watch_list_changes_nothing(donors):
    """Slow twin: a fresh search at every look, against the list that is kept while points move little."""
    source, _ = donors
    contact = Contact(source.interfaces, reach_mm=0.15)
    contact.weight = 1.0
    rng = np.random.default_rng(2)
    x = np.array(source.points)
    for _ in range(6):
        fresh = Contact(source.interfaces, reach_mm=0.15)
        fresh.weight = 1.0
        gradients = np.zeros_like(x), np.zeros_like(x)
        (a, ties), (b, others) = contact.add(x, gradients[0]), fresh.add(x, gradients[1])
        assert a == pytest.approx(b, rel=1e-12)
        assert len(ties.stiffness) == len(others.stiffness) > 0
        np.testing.assert_allclose(gradients[0], gradients[1], rtol=1e-9, atol=1e-15)
        step = 0.02 * rng.normal(size=x.shape)
        share = contact.longest_step(x, step)
        assert share == pytest.approx(fresh.longest_step(x, step), abs=1e-12)
        x = x + share * step


def test_far_parts_do_not_repel(donors):
    source, _ = donors
    contact = Contact(source.interfaces, reach_mm=1e-3)
    contact.weight = 1.0
    gradient = np.zeros_like(source.points)
    energy, ties = contact.add(np.array(source.points), gradient)
    assert energy == 0.0
    assert len(ties.stiffness) == 0
    assert not gradient.any()


@pytest.mark.slow
def test_parts_that_start_near_each_other_do_not_hold_the_solve_up(monkeypatch):
    """Law: where the free solve reaches the boundary and the bodies are apart, so does the one with contact.

    Putamen and pallidum of this pair start so near each other that a barrier of fixed stiffness lets every
    step end at a contact.
    """
    place = files("volmap_shared").joinpath("subcortical")
    source, target = (
        mesh(read_labels(str(place / f"donor-{i}.nii.gz")), MeshSettings(wanted_tets=16000)).mesh
        for i in (10021, 12876)
    )
    found = map_mesh(source, target.interfaces, MapSettings()).outcome
    assert found.status is Status.SETTLED
    assert found.history[-1].residual_mm < 0.1  # a tenth of a voxel
    assert len(triangle_crossings(np.array(found.map.images), outer(source))) == 0
    monkeypatch.setattr(Contact, "stiffen_if_blocked", lambda _: None)
    soft = map_mesh(source, target.interfaces, MapSettings(most_steps=40)).outcome
    assert soft.history[-1].residual_mm > 0.3
