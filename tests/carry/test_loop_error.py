"""Round a loop and home again: laws and closed forms."""

import numpy as np
import pytest

from volmap.carry import loop_error
from volmap.types import InputError, MapChain, VolumeMap

A, B, C = "a" * 64, "b" * 64, "c" * 64
FIRST = np.array([[1.2, 0.3, 0.0], [0.0, 0.9, -0.2], [0.1, 0.0, 1.1]])
SECOND = np.array([[0.0, -1.1, 0.1], [0.9, 0.0, 0.0], [0.0, 0.2, 1.0]])
SHIFT = np.array([5.0, -2.0, 1.0])


def triangle(known, *, offset=(0.0, 0.0, 0.0), low=-3.0):
    """A to B, B to C, and C to A by the inverse of both in closed form, plus an offset."""
    ab = known.jittered(known.box(4, -1, 1), 0.15)
    bc = known.jittered(known.box(5, low, 3), 0.15, seed=1)
    ca = known.box(3, -12, 12)
    home = np.linalg.inv(SECOND @ FIRST)
    return MapChain(
        (
            VolumeMap(ab, ab.points @ FIRST.T, "a", "b", A, B),
            VolumeMap(bc, bc.points @ SECOND.T + SHIFT, "b", "c", B, C),
            VolumeMap(ca, (ca.points - SHIFT) @ home.T + offset, "c", "a", C, A),
        )
    )


def test_exact_inverses_close_the_loop(known):
    error = loop_error(triangle(known), reach_mm=0.0, n_random=2000)
    assert error.max_mm < 1e-9
    assert (error.defined, error.continued) == (1.0, 0.0)
    assert error.returned.all()


def test_bent_maps_and_their_inverses_close_the_loop(known):
    """Law: a map, a second on another mesh, and their exact inverses the other way round."""
    ab = known.mapped(known.jittered(known.box(5, -0.7, 0.7), 0.15), known.shears)
    bc = known.box(6, -3, 3)
    bc = VolumeMap(bc, known.twist(np.array(bc.points), 0.2), "target", "third")
    loop = MapChain((ab, bc, bc.reversed(), ab.reversed()))
    error = loop_error(loop, reach_mm=1e-9, n_random=3000)  # rounding may put a hull point just outside
    assert error.max_mm < 1e-9
    assert error.defined + error.continued == 1.0


def test_an_offset_shows_exactly(known):
    """Closed form: the last map is off by (0.3, -0.4, 1.2) everywhere, 1.3 mm."""
    error = loop_error(triangle(known, offset=(0.3, -0.4, 1.2)), reach_mm=0.0, n_random=2000)
    for value in (error.mean_mm, error.p95_mm, error.max_mm):
        assert value == pytest.approx(1.3, abs=1e-9)


def test_a_growing_error_is_largest_where_it_must_be(known):
    """x to x to (1 + c) x: off by c |x|, largest at a corner of the box, c sqrt(3); mean by quadrature."""
    mesh = known.box(4, -1, 1)
    loop = MapChain((VolumeMap(mesh, mesh.points, "a", "b"), VolumeMap(mesh, 1.1 * mesh.points, "b", "a")))
    error = loop_error(loop, reach_mm=0.0, n_random=40_000)
    assert error.max_mm == pytest.approx(0.1 * np.sqrt(3), abs=1e-12)
    assert np.abs(error.worst_mm) == pytest.approx([1, 1, 1])
    # mean distance from the centre of the cube [-1, 1]^3: 2 x 0.480296 (Robbins' half-cube constant, from
    # memory; here by midpoint quadrature, which gives 0.9606)
    nodes = (np.arange(80) + 0.5) / 40 - 1
    mean = np.sqrt(sum(x**2 for x in np.meshgrid(nodes, nodes, nodes))).mean()
    assert error.mean_mm == pytest.approx(0.1 * mean, rel=5e-3)


def test_the_part_that_comes_home_is_told(known):
    """The second body holds x < 0.5 of [-1, 1]: three quarters come home, more with a reach of 0.25."""
    mesh, less = known.box(4, -1, 1), known.box(4, [-1, -1, -1], [0.5, 1, 1])
    loop = MapChain((VolumeMap(mesh, mesh.points, "a", "b"), VolumeMap(less, less.points, "b", "a")))
    error = loop_error(loop, reach_mm=0.0, n_random=20_000)
    assert error.defined == pytest.approx(0.75, abs=0.01)
    assert error.continued == 0
    assert error.max_mm < 1e-12
    error = loop_error(loop, reach_mm=0.25, n_random=20_000)
    assert error.defined == pytest.approx(0.75, abs=0.01)
    assert error.continued == pytest.approx(0.125, abs=0.01)
    assert not error.returned.all()
    assert np.isnan(error.distance_mm[~error.returned]).all()


def test_nothing_that_comes_home_is_no_number(known):
    mesh, away = known.box(1, -1, 1), known.box(1, 5, 6)
    loop = MapChain((VolumeMap(mesh, mesh.points, "a", "b"), VolumeMap(away, away.points, "b", "a")))
    error = loop_error(loop, reach_mm=0.0, n_random=10)
    assert np.isnan([error.mean_mm, error.p95_mm, error.max_mm, *error.worst_mm]).all()
    assert error.defined == 0


def test_the_same_seed_gives_the_same_places(known):
    one, again, other = (loop_error(triangle(known), reach_mm=0.0, n_random=50, seed=s) for s in (1, 1, 2))
    np.testing.assert_array_equal(one.places, again.places)
    assert (one.places != other.places).any()


def test_maps_that_do_not_lead_back_are_refused(known):
    maps = triangle(known).maps
    with pytest.raises(
        InputError, match="do not lead back to where they start, found an end in c "
    ) as caught:
        loop_error(MapChain(maps[:2]), reach_mm=0.0)
    assert "digest aaaaaaaaaaaa" in caught.value.sentence
    with pytest.raises(InputError, match="at least two maps"):
        loop_error(MapChain(maps[:1]), reach_mm=0.0)
