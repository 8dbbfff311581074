"""Label volumes by each mode: closed forms, a slow twin, laws."""

import itertools

import numpy as np
import pytest

from volmap.carry import CarrySettings, carry
from volmap.carry.label_volumes import label_shares, pull_labels
from volmap.kernels.nearest import likeliest_labels, nearest_labels
from volmap.types import Grid, InputError, LabelShares, LabelVolume, VolumeMap


def grid_of(shape, spacing, origin) -> Grid:
    affine = np.diag([*np.broadcast_to(spacing, 3), 1.0])
    affine[:3, 3] = origin
    return Grid(shape, affine)


def blocks(grid, seed=0, n=4) -> LabelVolume:
    """Random blocks of three voxels, labels 0 to n - 1."""
    coarse = np.random.default_rng(seed).integers(0, n, [-(-s // 3) for s in grid.shape])
    labels = coarse.repeat(3, 0).repeat(3, 1).repeat(3, 2)[tuple(slice(s) for s in grid.shape)]
    return LabelVolume(grid, labels.astype(np.uint16), {1: "one"}, "blocks")


def _indicator_twin(labels, place):
    """Slow twin: one indicator a label, interpolated by hand, the largest wins by the stated rule."""
    shape = np.array(labels.shape)
    if np.isnan(place).any() or (place < -0.5 + 1e-6).any() or (place > shape - 0.5 + 1e-6).any():
        return 0
    place = np.clip(place, 0, shape - 1)
    low = np.minimum(np.floor(place).astype(int), np.maximum(shape - 2, 0))
    votes = {}
    for step in itertools.product((0, 1), repeat=3):
        weight = np.prod(np.where(step, place - low, 1 - (place - low)))
        corner = tuple(np.minimum(low + step, shape - 1))
        votes[int(labels[corner])] = votes.get(int(labels[corner]), 0.0) + weight
    most = max(votes.values())
    tied = sorted(label for label, vote in votes.items() if vote > most - 1e-9)
    nearest = int(labels[tuple(np.ceil(place - 0.5 - 1e-6).astype(int))])
    return nearest if nearest in tied else tied[0]


def test_likeliest_labels_are_those_of_the_slow_twin():
    random = np.random.default_rng(5)
    labels = random.integers(0, 5, (5, 6, 4)).astype(np.uint16)
    anywhere = random.uniform(-0.8, 6.2, (3000, 3))
    halves = random.integers(-1, 12, (2000, 3)) / 2  # ties
    quarters = random.integers(-2, 24, (2000, 3)) / 4
    places = np.concatenate([anywhere, halves, quarters, [[np.nan] * 3]])
    expected = [_indicator_twin(labels, place) for place in places]
    np.testing.assert_array_equal(likeliest_labels(labels, places), expected)
    assert (nearest_labels(labels, anywhere) != likeliest_labels(labels, anywhere)).mean() > 0.02


def test_ties_keep_the_nearest_label_or_take_the_smaller_number():
    labels = np.array([[[7, 7]], [[3, 3]]], np.uint16)
    assert likeliest_labels(labels, np.array([[0.5, 0, 0.3]])) == 7
    four = np.array([[[9], [5]], [[5], [2]]], np.uint16)
    four = np.concatenate([four, [[[2], [2]]]]).astype(np.uint16)
    # at a quarter past (0, 0) towards (1, 1): 9 has 9/16, 5 has 6/16
    assert likeliest_labels(four, np.array([[0.25, 0.25, 0.0]])) == 9
    # in the middle of 9, 5, 5, 2: 5 alone has half
    assert likeliest_labels(four, np.array([[0.5, 0.5, 0.0]])) == 5


def test_a_smooth_boundary_is_smoother_by_one_hot_than_by_nearest(known):
    """Law: a ball turned by 30 degrees is the same ball; one-hot misses fewer of its voxels."""
    angle = np.pi / 6
    turn = np.array([[np.cos(angle), -np.sin(angle), 0], [np.sin(angle), np.cos(angle), 0], [0, 0, 1]])
    grid = grid_of((25, 25, 25), 1.0, -12)
    centres = grid.to_world(np.indices(grid.shape).reshape(3, -1).T.astype(float))
    ball = (np.linalg.norm(centres, axis=1) < 7.3).reshape(grid.shape)
    volume = LabelVolume(grid, ball.astype(np.uint16))
    turned = known.mapped(known.box(4, -9, 9), lambda x: x @ turn.T)
    wrong = {}
    for mode in ("nearest", "one-hot"):
        carried = pull_labels(volume, turned, grid, mode=mode)[0].labels
        wrong[mode] = np.count_nonzero((carried == 1) != ball)
    assert 0 < wrong["one-hot"] < wrong["nearest"]


@pytest.mark.parametrize("mode", ["nearest", "one-hot", "shares"])
@pytest.mark.parametrize("reverse", [False, True])
def test_the_identity_changes_no_label(known, mode, reverse):
    grid = grid_of((9, 8, 7), 1.0, 0.0)
    volume = blocks(grid)
    volume_map = known.mapped(known.box(3, -0.5, [8.5, 7.5, 6.5]), lambda x: x)
    np.testing.assert_array_equal(
        pull_labels(volume, volume_map.reversed() if reverse else volume_map, grid, mode=mode)[0].labels,
        volume.labels,
    )


def test_shares_of_the_identity_are_whole_voxels(known):
    grid = grid_of((9, 8, 7), [1, 2, 1.5], 0.0)
    volume = blocks(grid)
    low, high = np.array([-0.5, -1, -0.75]), np.array([8.5, 15, 9.75])
    shares = label_shares(volume, known.mapped(known.box(3, low, high), lambda x: x), grid)[0]
    for label in volume.present:
        np.testing.assert_allclose(shares.of_label(label), volume.labels == label, atol=1e-12)
        assert shares.volume_of(label) == pytest.approx((volume.labels == label).sum() * 3.0, rel=1e-12)


def _label_volume_in_box(volume, low, high, label):
    """Closed form: volume of a label's voxels cut with a box along the axes of the grid, mm3."""
    grid = volume.grid
    edges = []
    for d in range(3):
        centre = grid.affine[d, 3] + grid.affine[d, d] * np.arange(grid.shape[d])
        half = grid.affine[d, d] / 2
        edges.append(np.clip(np.minimum(centre + half, high[d]) - np.maximum(centre - half, low[d]), 0, None))
    inside = edges[0][:, None, None] * edges[1][:, None] * edges[2]
    return float(inside[volume.labels == label].sum())


@pytest.mark.parametrize("voxel", [0.6, 1.7])
def test_shares_keep_the_volume_of_an_affine_map(known, voxel):
    """Closed form: det A times the volume of the label in the box; finer and coarser targets."""
    A = np.array([[1.1, 0.2, 0], [-0.1, 0.8, 0.15], [0.1, 0, 1.2]])
    low, high = np.array([1.3, 0.9, 1.1]), np.array([7.6, 9.2, 8.4])
    volume_map = known.mapped(known.box(3, low, high), lambda x: x @ A.T + 2)
    volume = blocks(grid_of((9, 10, 8), [1.0, 1.1, 1.2], 0.0))
    n = int(16 / voxel)
    shares, _ = label_shares(volume, volume_map, grid_of((n, n, n), voxel, 0.0))
    for label in volume.present:
        expected = _label_volume_in_box(volume, low, high, label) * np.linalg.det(A)
        assert shares.volume_of(label) == pytest.approx(expected, rel=1e-12)


def test_shares_of_a_twist_keep_the_volume_tet_by_tet(known):
    """Law: sum of shares = sum over tets of J times what the tet holds of the label, by shares in SOURCE."""
    twisted = known.mapped(known.jittered(known.box(2, -4, 4), 0.2), lambda x: known.twist(x, 0.15))
    volume = blocks(grid_of((8, 8, 8), 1.1, -3.85), seed=3)
    target = grid_of((18, 18, 18), 0.7, -6.0)
    shares, _ = label_shares(volume, twisted, target)
    for label in volume.present:
        expected = 0.0
        for t, ratio in enumerate(twisted.volume_ratio):
            alone = VolumeMap(_single(twisted.mesh, t), twisted.mesh.points[twisted.mesh.tets[t]])
            part, _ = label_shares(volume, alone, grid_of((10, 10, 10), 1.0, -4.5))
            expected += part.volume_of(label) * ratio
        assert shares.volume_of(label) == pytest.approx(expected, rel=1e-11)


def _single(mesh, t):
    return type(mesh)(mesh.points[mesh.tets[t]], [[0, 1, 2, 3]], [1])


def test_how_a_volume_is_stored_changes_no_share(known):
    """Law: the same voxels stored in another order, left-handed, give the same shares in the same places."""
    twisted = known.mapped(known.box(3, -4, 4), lambda x: known.twist(x, 0.2))
    volume = blocks(grid_of((9, 8, 7), 1.1, -4.0), seed=2)
    affine = volume.grid.affine @ [[0, -1, 0, 8], [0, 0, 1, 0], [1, 0, 0, 0], [0, 0, 0, 1]]
    stored = np.transpose(volume.labels, (2, 0, 1))[:, ::-1]
    again = LabelVolume(Grid((7, 9, 8), affine), stored)
    np.testing.assert_allclose(
        again.grid.to_world(np.array([[2.0, 3, 1]])), volume.grid.to_world([[5, 1, 2]])
    )
    assert again.labels[2, 3, 1] == volume.labels[5, 1, 2]
    onto = grid_of((14, 14, 12), 0.8, -5.0)
    shares, others = label_shares(volume, twisted, onto)[0], label_shares(again, twisted, onto)[0]
    for label in volume.present:
        np.testing.assert_allclose(shares.of_label(label), others.of_label(label), atol=1e-7)
        assert shares.volume_of(label) == pytest.approx(others.volume_of(label), rel=1e-12)


def test_a_rigid_motion_of_all_changes_no_share(known):
    """Law: body, map and target grid turned and moved together."""
    angle = 0.7
    turn = np.array([[np.cos(angle), 0, -np.sin(angle)], [0, 1, 0], [np.sin(angle), 0, np.cos(angle)]])
    rigid = np.eye(4)
    rigid[:3, :3], rigid[:3, 3] = turn, [30, -7, 4]
    twisted = known.mapped(known.box(2, -4, 4), lambda x: known.twist(x, 0.2))
    moved = VolumeMap(twisted.mesh, twisted.images @ turn.T + rigid[:3, 3])
    volume = blocks(grid_of((9, 8, 7), 1.1, -4.0), seed=2)
    onto = grid_of((14, 14, 12), 0.8, -5.0)
    shares = label_shares(volume, twisted, onto)[0]
    others = label_shares(volume, moved, Grid(onto.shape, rigid @ onto.affine))[0]
    for label in volume.present:
        np.testing.assert_allclose(shares.of_label(label), others.of_label(label), atol=1e-7)


def test_the_largest_share_wins_and_outside_takes_part():
    """Stated rule: outside wins ties, then the smaller number."""
    voxel, label = np.array([1, 1, 2, 3, 3, 4]), np.array([1, 2, 2, 1, 2, 1])
    share = np.array([0.4, 0.4, 0.5, 0.3, 0.45, 0.6])
    shares = LabelShares(Grid((1, 1, 6), np.eye(4)), (1, 2), [[[2, 0, 0, 0, 0, 0]]], voxel, label, share)
    assert shares.largest().ravel().tolist() == [2, 1, 0, 2, 1, 0]
    assert shares.of_label(2).ravel() == pytest.approx([1, 0.4, 0.5, 0.45, 0, 0])
    assert shares.volume_of(1) == pytest.approx(1.3)
    assert shares.present == (1, 2)


@pytest.mark.parametrize(
    ("voxel", "label", "share"),
    [([2, 1], [1, 1], [0.1, 0.1]), ([1], [3], [0.1]), ([1], [1], [1.5]), ([0], [1], [0.5])],
)
def test_shares_that_make_no_sense_are_refused(voxel, label, share):
    with pytest.raises(InputError, match="shares are not"):
        LabelShares(Grid((1, 1, 3), np.eye(4)), (1, 2), [[[1, 0, 0]]], voxel, label, share)


def test_the_verb_takes_the_mode_and_keeps_names(known):
    grid = grid_of((9, 8, 7), 1.0, 0.0)
    volume_map = known.mapped(known.box(3, -0.5, [8.5, 7.5, 6.5]), lambda x: x)
    carried = carry(blocks(grid), volume_map, onto=grid, settings=CarrySettings(labels="shares"))
    assert isinstance(carried.thing, LabelShares)
    assert carried.thing.names == {1: "one"}
    carried = carry(blocks(grid), volume_map, onto=grid, settings=CarrySettings(labels="one-hot"))
    assert isinstance(carried.thing, LabelVolume)
    assert carried.thing.names == {1: "one"}
