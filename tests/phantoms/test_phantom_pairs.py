"""Pairs made to be mapped: warps against their inverses and finite differences, seeds, topology, truth."""

import numpy as np
import pytest
from scipy.ndimage import label as pieces_of
from skimage.measure import euler_number
from volmap_phantoms.hard_pairs import HARD, make_hard
from volmap_phantoms.random_pairs import KINDS, draw
from volmap_phantoms.warps import Bend, Chain, Place, Stretch, Swell, Twist

from volmap.types import InputError

WARPS = {
    "bend": Bend(30.0),
    "twist": Twist(3.0),
    "stretch": Stretch((1.5, 0.7, 2.0), 0.02),
    "swell": Swell((2.0, -3.0, 1.0), 2.0, 9.0),
    "place": Place((30.0, 100.0, -40.0), (5.0, 6.0, -7.0), 1.7),
    "chain": Chain((Twist(2.0), Stretch((1.2, 1.0, 0.8), -0.01), Bend(40.0), Place((0.0, 90.0, 0.0)))),
}


def places(n=300, seed=2):
    return np.random.default_rng(seed).uniform(-1, 1, (n, 3)) * (15.0, 25.0, 12.0)


@pytest.mark.parametrize("name", WARPS)
def test_a_warp_and_its_inverse(name):
    points = places()
    np.testing.assert_allclose(WARPS[name].back(WARPS[name].there(points)), points, atol=1e-9)


@pytest.mark.parametrize("name", WARPS)
def test_volume_ratio_of_a_warp(name):
    """Truth: determinant of central differences of the warp itself."""
    points, h = places(100), 1e-4
    columns = [
        (WARPS[name].there(points + d) - WARPS[name].there(points - d)) / (2 * h) for d in h * np.eye(3)
    ]
    expected = np.linalg.det(np.stack(columns, axis=2))
    np.testing.assert_allclose(WARPS[name].ratio(points), expected, rtol=1e-5)
    assert (expected > 0).all()


def test_known_places_of_warps():
    """Closed forms by hand: a quarter of a circle; a quarter turn; doubling at the centre of a swelling."""
    quarter = Bend(10.0).there(np.array([[0.0, 5 * np.pi, 3.0]]))
    np.testing.assert_allclose(quarter, [[-10.0, 10.0, 3.0]], atol=1e-12)
    np.testing.assert_allclose(
        Twist(9.0).there(np.array([[1.0, 10.0, 0.0]])), [[0.0, 10.0, -1.0]], atol=1e-12
    )
    near = Swell((0, 0, 0), 1.0, 5.0).there(np.array([[1e-6, 0.0, 0.0]]))
    np.testing.assert_allclose(near, [[2e-6, 0.0, 0.0]], rtol=1e-9)


def topology(volume):
    return {
        v: (pieces_of(volume.labels == v)[1], euler_number(volume.labels == v, connectivity=1))
        for v in volume.present
    }


@pytest.mark.parametrize("kind", KINDS)
def test_a_seed_gives_one_pair_of_one_topology(kind):
    pair, again = draw(5, kind), draw(5, kind)
    assert (pair.source.sha256, pair.target.sha256) == (again.source.sha256, again.target.sha256)
    assert pair.source.sha256 != draw(6, kind).source.sha256
    assert pair.kind == kind
    assert topology(pair.source) == topology(pair.target)
    assert set(pair.source.present) <= {1, 2, 3}
    assert all(pieces == 1 for pieces, _ in topology(pair.source).values())
    assert pair.truth is None
    for volume in (pair.source, pair.target):
        border = np.ones(volume.grid.shape, bool)
        border[1:-1, 1:-1, 1:-1] = False
        assert not volume.labels[border].any()
        ijk = np.argwhere(volume.labels > 0)
        reach = volume.grid.to_world(ijk.astype(float)).std(axis=0).max() / volume.grid.voxel_mm
        assert reach > 5  # a bar of 30 voxels has a standard deviation of 8.7 along itself


def volume_ratio(pair):
    per = [(v.labels > 0).sum() * v.grid.voxel_mm**3 for v in (pair.source, pair.target)]
    return per[1] / per[0]


def test_ratios_of_the_kinds():
    """Twist keeps volumes (closed form, J = 1); growth is at least 1.5 either way in the whole."""
    assert volume_ratio(draw(1, "twist")) == pytest.approx(1.0, abs=0.03)
    for seed in range(3):
        ratio = volume_ratio(draw(seed, "growth"))
        assert 1.5 < max(ratio, 1 / ratio) < 14


def test_unknown_pairs_are_refused():
    with pytest.raises(InputError, match="kind"):
        draw(0, "sideways")
    with pytest.raises(InputError, match="hard pair"):
        make_hard("sideways")


@pytest.mark.parametrize("name", HARD)
def test_hard_pairs_hold_what_they_say(name):
    """Topology differs where the pair is to be refused, and nowhere else; truth carries labels to labels."""
    pair = make_hard(name)
    assert (topology(pair.source) != topology(pair.target)) == bool(pair.refusal)
    assert pair.source.present == pair.target.present
    if pair.truth is not None:
        ijk = np.argwhere(pair.source.labels > 0)[::37]
        here = pair.source.grid.to_world(ijk.astype(float))
        landed = pair.target.grid.to_index(pair.truth.carry(here, 0, 1))
        there = pair.target.labels[tuple(np.rint(landed).astype(int).T)]
        assert (there == pair.source.labels[tuple(ijk.T)]).mean() > 0.85  # rounding at the surface only


def test_ratio_of_ten():
    assert volume_ratio(make_hard("ten-times-the-volume")) == pytest.approx(10.0, rel=0.03)
    assert volume_ratio(make_hard("grown-unevenly")) == pytest.approx(10.0, rel=0.1)
