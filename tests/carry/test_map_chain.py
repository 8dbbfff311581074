"""Maps that follow one another: exact on points, joined by digest, turned round as a whole."""

import pickle

import numpy as np
import pytest

from volmap.carry import move_points
from volmap.types import InputError, MapChain, VolumeMap

A, B, C = "a" * 64, "b" * 64, "c" * 64
SHEAR = np.array([[1.2, 0.3, 0.0], [0.0, 0.9, -0.2], [0.1, 0.0, 1.1]])
TURN = np.array([[0.0, -1.0, 0.0], [1.0, 0.0, 0.0], [0.0, 0.0, 1.0]])
SHIFT = np.array([5.0, -2.0, 1.0])


def link(mesh, rule, names=("visit 0", "visit 1"), digests=("", "")):
    return VolumeMap(mesh, rule(np.array(mesh.points)), *names, *digests)


@pytest.fixture(scope="module")
def affine_chain(known):
    """y = SHEAR x, then z = TURN y + SHIFT on another mesh that holds the image of the first."""
    first = link(known.jittered(known.box(3, -1, 1), 0.15), lambda x: x @ SHEAR.T)
    second = link(known.box(4, -3, 3), lambda y: y @ TURN.T + SHIFT, ("visit 1", "visit 2"))
    return MapChain((first, second))


def test_points_go_through_both_affine_maps(affine_chain):
    """Closed form: z = TURN SHEAR x + SHIFT, wherever the tets of the two meshes lie."""
    points = np.random.default_rng(0).uniform(-0.99, 0.99, (500, 3))
    moved = move_points(affine_chain, points)
    np.testing.assert_allclose(moved.points, points @ (TURN @ SHEAR).T + SHIFT, atol=1e-12)
    assert moved.carried.all()
    assert not moved.extrapolated.any()


def test_there_and_back_through_a_chain_is_nothing(known):
    """Law: a chain and its reverse undo each other; maps that bend, each on a mesh of its own."""
    first = link(known.jittered(known.box(5, -0.7, 0.7), 0.15), known.shears)
    second = link(known.box(6, -3, 3), lambda x: known.twist(x, 0.2), ("visit 1", "visit 2"))
    chain = MapChain((first, second))
    points = np.random.default_rng(1).uniform(-0.69, 0.69, (1000, 3))
    there = move_points(chain, points)
    back = move_points(chain.reversed(), there.points)
    np.testing.assert_allclose(back.points, points, atol=1e-9)
    assert np.linalg.norm(there.points - points, axis=1).mean() > 0.1


def test_a_chain_is_its_maps_one_after_the_other(known):
    """Law of composition, to the bit: nothing is sampled between two maps."""
    first = link(known.box(4, -0.7, 0.7), known.shears)
    second = link(known.box(5, -3, 3), lambda x: known.twist(x, 0.2), ("visit 1", "visit 2"))
    points = np.random.default_rng(2).uniform(-0.9, 0.9, (400, 3))
    one = move_points(first, points, reach_mm=0.05)
    two = move_points(second, one.points[one.carried], reach_mm=0.05)
    whole = move_points(MapChain((first, second)), points, reach_mm=0.05)
    assert one.extrapolated.sum() > 0
    assert not one.carried.all()
    np.testing.assert_array_equal(whole.points[one.carried], two.points)
    np.testing.assert_array_equal(whole.carried, one.carried)
    np.testing.assert_array_equal(whole.outside_mm, one.outside_mm)


def test_a_point_that_leaves_the_body_halfway_has_no_answer(known):
    """The second body is smaller: closed form of who gets through, and how far outside the others were."""
    first = link(known.box(2, -4, 4), lambda x: x + 1)
    second = link(known.box(2, -4, 3), lambda x: 2 * x, ("visit 1", "visit 2"))
    points = np.array([[0.0, 0, 0], [1.9, 1, 1], [2.5, 0, 0], [-3.9, 3.9, 1.0]])
    moved = move_points(MapChain((first, second)), points, reach_mm=0.6)
    np.testing.assert_allclose(moved.points[:3], 2 * (points[:3] + 1), atol=1e-12)
    np.testing.assert_array_equal(moved.carried, [True, True, True, False])
    np.testing.assert_allclose(moved.outside_mm, [0, 0, 0.5, 1.9], atol=1e-12)


def test_one_map_is_a_chain_of_one(known):
    one = link(known.box(2, -1, 1), lambda x: 2 * x, digests=(A, B))
    chain = MapChain((one,))
    assert one.maps == chain.maps == (one,)
    assert (chain.source, chain.target) == ("visit 0", "visit 1")
    assert (chain.source_sha256, chain.target_sha256) == (A, B)
    np.testing.assert_array_equal(chain.mesh.points, one.mesh.points)
    np.testing.assert_array_equal(chain.image_mesh.points, one.images)


def test_a_reversed_chain_runs_from_its_end(known):
    first = link(known.box(1, -1, 1), lambda x: x, ("visit 0", "visit 1"), (A, B))
    second = link(known.box(1, -1, 1), lambda x: x, ("visit 1", "visit 2"), (B, C))
    back = MapChain((first, second)).reversed()
    assert [(m.source, m.target) for m in back.maps] == [("visit 2", "visit 1"), ("visit 1", "visit 0")]
    assert (back.source_sha256, back.target_sha256) == (C, A)
    assert [m.source_sha256 for m in back.maps] == [C, B]


def test_maps_join_by_digest_whatever_their_names(known):
    mesh = known.box(1, -1, 1)
    first = link(mesh, lambda x: x, ("labels.nii", "labels.nii (target)"), (A, B))
    second = link(mesh, lambda x: x, ("labels.nii", "labels.nii (target)"), (B, C))
    assert MapChain((first, second)).target_sha256 == C


@pytest.mark.parametrize(
    ("names", "digests", "told"),
    [
        (("visit 1", "visit 2"), (C, A), ["visit 1 (digest cccccccccccc)", "visit 1 (digest bbbbbbbbbbbb)"]),
        (("other", "visit 2"), ("", ""), ["other (digest not known)", "visit 1 (digest bbbbbbbbbbbb)"]),
        (("other", "visit 2"), ("", C), ["other (digest not known)"]),
    ],
    ids=["same name, other digest", "other name, no digest", "other name, half the digests"],
)
def test_a_chain_that_does_not_join_is_refused(known, names, digests, told):
    mesh = known.box(1, -1, 1)
    first = link(mesh, lambda x: x, digests=(A, B))
    with pytest.raises(InputError) as fault:
        MapChain((first, link(mesh, lambda x: x, names, digests)))
    assert fault.value.refused
    for words in told:
        assert words in fault.value.sentence


def test_names_join_maps_whose_digests_nobody_knows(known):
    mesh = known.box(1, -1, 1)
    chain = MapChain((link(mesh, lambda x: x, digests=(A, B)), link(mesh, lambda x: x, ("visit 1", "end"))))
    assert chain.target == "end"


def test_an_empty_chain_is_no_chain():
    with pytest.raises(InputError, match="at least one map"):
        MapChain(())


def test_a_chain_survives_pickling(affine_chain):
    again = pickle.loads(pickle.dumps(affine_chain))
    np.testing.assert_array_equal(again.maps[1].images, affine_chain.maps[1].images)
    assert not again.maps[0].images.flags.writeable
