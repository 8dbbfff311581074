"""The solve: laws of motion, names, units and order; honest endings; no inverted tet at any step."""

import numba
import numpy as np
import pytest
from hand_made_bodies import cubes, lopsided, rotation

from volmap.kernels.energies import ENERGIES
from volmap.kernels.predicates import orientation_signs
from volmap.mapping import MapSettings, climbing, map_mesh
from volmap.mapping.guides import guide_observations, guide_rms
from volmap.mapping.matching import Residual
from volmap.mapping.objective import Objective
from volmap.types import InputError, LandmarkPairs, Status, TetMesh

SHIFT = np.array([30.0, -20.0, 10.0])
BODY = lopsided()
BENT = BODY.points + 0.4 * np.sin(BODY.points[:, [1, 2, 0]] / 3.0)
TARGET = BODY.moved(BENT)


def solved(mesh=BODY, target=TARGET, *, voxel_mm=1.0, guides=None, **settings):
    surface = target.interfaces if isinstance(target, TetMesh) else target
    return map_mesh(mesh, surface, MapSettings(**settings), voxel_mm=voxel_mm, guides=guides)


@pytest.fixture(scope="module")
def plain():
    return solved()


@pytest.mark.parametrize("energy", ENERGIES)
def test_every_energy_settles_with_all_signs_positive(shell, energy):
    mesh, target = shell
    outcome = solved(mesh, target, voxel_mm=2.0, energy=energy).outcome
    assert outcome.status is Status.SETTLED
    assert outcome.history[-1].residual_mm <= 0.2  # a tenth of a voxel
    assert (orientation_signs(outcome.map.images, mesh.tets) > 0).all()


@pytest.mark.parametrize("energy", ["soft-tissue", "arap", "conformal"])
def test_no_tet_is_inverted_at_any_step(monkeypatch, energy):
    """Exact signs of every iterate, the start too; a thin bent target pushed hard, so that steps are cut."""
    labels = np.ones((14, 3, 3), int)
    labels[9:] = 2
    bar = cubes(labels)
    x, y, z = (bar.points - (7, 1.5, 1.5)).T
    radius = 5 + 1.4 * z
    bent = np.stack([radius * np.sin(x / 4), 0.6 * y, radius * np.cos(x / 4) + y * z * 0.2], axis=1)
    iterates = []
    step = climbing.step

    def recorded(solver, state):
        iterates.append(state.images)
        result = step(solver, state)
        iterates.append(state.images)
        return result

    monkeypatch.setattr(climbing, "step", recorded)
    hard = {"uncertainty_mm": 0.01, "first_weight": 10.0, "last_weight": 1000.0, "most_steps": 40}
    hard["start"] = "world"  # one start, so that the iterates are those of one solve
    outcome = solved(bar, bar.moved(bent), energy=energy, **hard).outcome
    assert len(iterates) == 2 * len(outcome.history) > 10
    assert sum(h.step_length < 1.0 for h in outcome.history) >= 10
    assert all((orientation_signs(x, bar.tets) > 0).all() for x in iterates)
    assert outcome.map.images is not iterates[-1]
    np.testing.assert_array_equal(outcome.map.images, iterates[-1])


@pytest.mark.parametrize("degrees", [20.0, 150.0])
def test_a_moved_target_gives_the_moved_map(plain, degrees):
    turn = rotation((1, 2, 3), degrees)
    other = solved(target=TARGET.moved(BENT @ turn.T + SHIFT))
    moved = plain.outcome.map.images @ turn.T + SHIFT
    assert np.abs(other.outcome.map.images - moved).max() < 1e-3


@pytest.mark.parametrize("degrees", [20.0, 150.0])
def test_a_moved_source_gives_the_same_map(plain, degrees):
    turn = rotation((3, 1, -2), degrees)
    other = solved(BODY.moved(BODY.points @ turn.T + SHIFT))
    assert np.abs(other.outcome.map.images - plain.outcome.map.images).max() < 5e-3  # both settled to 1e-4


def test_far_from_the_origin_nothing_changes(plain):
    """World offsets of a metre."""
    other = solved(BODY.moved(BODY.points + 1000.0), TARGET.moved(BENT + 1000.0))
    assert np.abs(other.outcome.map.images - 1000.0 - plain.outcome.map.images).max() < 1e-6


@pytest.mark.parametrize("factor", [2.0, 0.01, 10.0])
def test_units_do_not_matter(plain, factor):
    other = solved(BODY.moved(factor * BODY.points), TARGET.moved(factor * BENT), voxel_mm=factor)
    assert len(other.outcome.history) == len(plain.outcome.history)
    assert np.abs(other.outcome.map.images / factor - plain.outcome.map.images).max() < 1e-6


@pytest.mark.parametrize("names", [{1: 2, 2: 1}, {1: 7, 2: 300}])
def test_names_of_labels_do_not_matter(plain, names):
    bodies = [TetMesh(b.points, b.tets, [names[int(v)] for v in b.labels]) for b in (BODY, TARGET)]
    other = solved(*bodies)
    assert np.abs(other.outcome.map.images - plain.outcome.map.images).max() < 1e-6


def test_a_body_much_larger_is_reached():
    """Every length 2.2 times as long: volumes differ by a factor of 10.6; the alignment alone gives it."""
    outcome = solved(target=BODY.moved(2.2 * BODY.points)).outcome
    assert outcome.status is Status.SETTLED
    assert np.abs(outcome.map.images - 2.2 * BODY.points).max() < 0.05
    np.testing.assert_allclose(outcome.map.volume_ratio, 2.2**3, rtol=0.05)


def test_a_body_onto_itself_stays():
    outcome = solved(target=BODY).outcome
    assert outcome.status is Status.SETTLED
    assert np.abs(outcome.map.images - BODY.points).max() < 1e-6


def test_there_and_back(shell):
    """Law of order: solved on either mesh, one map and its inverse, within a third of a voxel in the mean.

    The target is the moved body itself, so that both orders see the same two surfaces.
    """
    there = solved().outcome.map
    back = solved(TARGET, BODY).outcome.map
    # Same tets on both sides: going there and back means going by the same barycentric coordinates.
    assert np.linalg.norm(there.images - BENT, axis=1).mean() < 0.33
    assert np.linalg.norm(back.images - BODY.points, axis=1).mean() < 0.33
    ratio = np.log(there.volume_ratio) + np.log(back.volume_ratio)
    assert np.abs(ratio).mean() < 0.5 * np.abs(np.log(there.volume_ratio)).mean()


def test_same_inputs_same_bytes(plain):
    again = solved()
    assert again.outcome.map.images.tobytes() == plain.outcome.map.images.tobytes()
    assert again.outcome.history == plain.outcome.history


def test_any_number_of_threads_gives_the_same_bytes(shell):
    """Law; sums of products are where threads could tell.  Cannot fail on a machine of one thread."""
    mesh, target = shell
    most = numba.get_num_threads()
    images = []
    for threads in (1, most):
        numba.set_num_threads(threads)
        images.append(solved(mesh, target, most_steps=4).outcome.map.images.tobytes())
    assert images[0] == images[1]


def test_history_makes_sense(shell):
    mesh, target = shell
    told = []
    settings = MapSettings(uncertainty_mm=0.05, start="world")
    outcome = map_mesh(mesh, target, settings, progress=lambda *args: told.append(args)).outcome
    history = outcome.history
    weights = np.array([h.boundary_weight for h in history])
    assert [h.step for h in history] == list(range(1, len(history) + 1))
    assert (np.diff(weights) >= 0).all()
    assert weights[-1] > weights[0]
    assert weights[0] == pytest.approx(0.01 * (0.02 * np.cbrt(mesh.volumes.sum())) ** -2, rel=0.02)
    assert history[-1].residual_mm < 0.5 * history[0].residual_mm
    assert all(h.distortion <= h.energy and h.smallest_ratio > 0 and 0 < h.step_length <= 1 for h in history)
    assert history[-1].smallest_ratio == pytest.approx(outcome.map.volume_ratio.min(), rel=1e-9)
    assert [s for stage, s, *_ in told if stage == "map"] == [h.step for h in history]


def test_settled_means_settled(plain):
    assert plain.outcome.status is Status.SETTLED
    assert plain.outcome.status.finished
    assert plain.outcome.history[-1].residual_mm <= 0.1
    assert plain.alignment.name in plain.outcome.start


@pytest.mark.parametrize(
    ("levels", "decrease", "rests"),
    [
        ([5.0, 4.0, 3.0, 2.0, 1.0], 1e-2, False),  # still falling
        ([1.0, 2.0, 2.0, 2.0], 1e-2, False),  # too few steps to tell
        ([1.0, 1.01, 1.02, 1.01, 1.02], 1e-2, True),  # each step gains 1 %, and new matches take it back
        ([1.0, 0.9998, 0.9999, 1.0001, 1.0], 1e-2, True),  # 2e-4 in four steps
        ([1.0, 0.9998, 0.9999, 1.0001, 0.999], 1e-2, False),  # 1e-3 in four steps
        ([5.0], 1e-5, True),  # a step that gains nothing
    ],
)
def test_rest_is_told_from_cycling(levels, decrease, rests):
    state = climbing.State(BENT, 1.0, 1.0, [], levels=levels)
    assert climbing._at_rest(state, decrease, 1e-4) is rests


def test_out_of_steps_is_told(plain):
    outcome = solved(most_steps=3).outcome
    assert outcome.status is Status.OUT_OF_STEPS
    assert not outcome.status.finished
    assert len(outcome.history) == 3
    assert (outcome.map.volume_ratio > 0).all()


def test_a_boundary_that_is_not_reached_is_told():
    outcome = solved(uncertainty_mm=1e-4, last_weight=0.1).outcome
    assert outcome.status is Status.BOUNDARY_NOT_REACHED
    assert outcome.history[-1].residual_mm > 1e-4


def test_a_stalled_solve_is_told(monkeypatch):
    """No step is ever acceptable: the alignment stays as it is, and is not called done."""
    monkeypatch.setattr(Objective, "largest_step", lambda self, images, direction: 0.0)
    result = solved(uncertainty_mm=1e-3)
    assert result.outcome.status is Status.STALLED
    assert [h.step_length for h in result.outcome.history] == [0.0, 0.0, 0.0]
    np.testing.assert_array_equal(result.outcome.map.images, result.alignment.apply(BODY.points))


def test_guides_are_reached_within_their_deviation():
    """A guide pair 1.5 mm off what the boundary alone would say, placed to 0.1 mm."""
    inside = np.array([[-1.0, 6.0, 4.0]])
    guides = LandmarkPairs(("g",), inside, np.add(inside, (1.5, 0, 0)), ("guide",), sd_mm=[0.1])
    outcome = solved(target=BODY, guides=guides).outcome
    assert outcome.status is Status.SETTLED
    placed = guide_observations(
        BODY,
        guides,
        pattern=Objective(np.array(BODY.points), np.array(BODY.tets), energy="arap").pattern,
    )
    assert guide_rms(placed, outcome.map.images) <= 0.1
    assert (outcome.map.volume_ratio > 0).all()


def test_different_labels_are_refused():
    with pytest.raises(InputError, match="different labels") as caught:
        solved(target=TetMesh(BENT, BODY.tets, np.ones(len(BODY.tets), int)))
    assert caught.value.refused
    assert "[1, 2] and [1]" in caught.value.found


def test_a_mesh_with_an_inverted_tet_is_refused():
    tets = np.array(BODY.tets)
    tets[5] = tets[5][[0, 2, 1, 3]]
    with pytest.raises(InputError, match="not positive"):
        solved(TetMesh(BODY.points, tets, BODY.labels))


@pytest.mark.parametrize(
    ("name", "value"), [("energy", "rubber"), ("uncertainty_mm", 0.0), ("most_steps", 0)]
)
def test_settings_out_of_range_are_refused(name, value):
    with pytest.raises(InputError):
        MapSettings(**{name: value})


@pytest.mark.parametrize(
    ("rms_mm", "rejected", "reached"), [(0.1, 0.01, True), (0.11, 0.01, False), (0.0, 1.0, False)]
)
def test_what_counts_as_a_boundary_reached(plain, rms_mm, rejected, reached):
    """Within a tenth of a voxel of 1 mm, and matched: where every match is rejected the residual is 0 too."""
    solver = climbing.Climber(
        BODY, TARGET.interfaces, MapSettings(), alignment=plain.alignment, guides=None, voxel_mm=1.0
    )
    assert solver.boundary_reached(Residual(rms_mm, rms_mm, rms_mm, rejected)) is reached
