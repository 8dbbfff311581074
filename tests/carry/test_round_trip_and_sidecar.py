"""Round trip, field error and the words beside a field."""

import json

import numpy as np
import pytest

from volmap.carry import backward_field, field_error, field_sidecar, forward_field, round_trip, sample_field
from volmap.types import Grid, GridField, InputError
from volmap.types.notice import caution


def _grid(n, low, high) -> Grid:
    affine = np.diag([(high - low) / (n - 1)] * 3 + [1.0])
    affine[:3, 3] = low
    return Grid((n, n, n), affine)


def test_affine_round_trip_is_rounding_only(known):
    """Law: both fields of an affine map are linear, so trilinear sampling makes no error."""
    volume_map = known.mapped(known.box(3, -5, 5), lambda x: x @ np.diag([1.3, 0.8, 1.1]) + 2)
    forward = forward_field(volume_map, _grid(12, -5.5, 5.5))
    trip = round_trip(forward, backward_field(volume_map, _grid(18, -6, 10)))
    assert trip.max_mm < 5e-6
    assert trip.n_voxels > 0.5 * forward.support.sum()
    assert trip.coverage == trip.n_voxels / forward.support.sum()


def test_round_trip_is_two_samplings(known):
    """Slow twin: the same journey by `sample_field`, on grids with unequal, turned and mirrored axes."""
    volume_map = known.mapped(known.box(6, -0.6, 0.6), known.shears)
    turn = np.linalg.qr(np.random.default_rng(6).normal(size=(3, 3)))[0]
    affine, onto = np.eye(4), np.eye(4)
    affine[:3, :3], onto[:3, :3] = turn * [0.1, -0.12, 0.09], turn.T * [-0.11, 0.08, 0.1]
    affine[:3, 3], onto[:3, 3] = (
        -affine[:3, :3] @ [7, 6, 8],
        known.shears(np.zeros(3)) - onto[:3, :3] @ [9, 9, 9],
    )
    forward = forward_field(volume_map, Grid((15, 13, 17), affine))
    backward = backward_field(volume_map, Grid((19, 19, 19), onto))
    x = forward.grid.to_world(np.argwhere(forward.support))
    u, _ = sample_field(forward, x)
    v, home = sample_field(backward, x + u)
    distance = np.linalg.norm(u + v, axis=1)[home]
    trip = round_trip(forward, backward)
    assert trip.n_voxels == home.sum() > 100
    assert trip.coverage == home.mean() < 1
    found = [trip.mean_mm, trip.p95_mm, trip.max_mm]
    np.testing.assert_allclose(
        found, [distance.mean(), np.percentile(distance, 95), distance.max()], rtol=1e-4
    )


def test_round_trip_measures_a_planted_error(known):
    """Closed form: a constant error in one field is the distance of every voxel from home."""
    volume_map = known.mapped(known.box(3, -5, 5), lambda x: x + 1)
    forward = forward_field(volume_map, _grid(11, -5, 5))
    backward = backward_field(volume_map, _grid(13, -5, 7))
    wrong = GridField(backward.grid, backward.displacement + np.float32([0.3, 0, -0.4]), "target", "source")
    trip = round_trip(forward, wrong)
    np.testing.assert_allclose([trip.mean_mm, trip.p95_mm, trip.max_mm], 0.5, atol=1e-6)
    assert trip.coverage == 1.0  # every image is a voxel centre
    assert trip.n_voxels == 11**3


def test_the_worst_place_is_named(known):
    volume_map = known.mapped(known.box(3, -5, 5), lambda x: x)
    forward = forward_field(volume_map, _grid(11, -5, 5))
    spoilt = forward.displacement.copy()
    spoilt[3, 7, 2] += 0.25
    trip = round_trip(GridField(forward.grid, spoilt), backward_field(volume_map, forward.grid))
    assert trip.worst_mm == pytest.approx((-2, 2, -3))
    assert trip.max_mm == pytest.approx(0.25 * np.sqrt(3))


def test_a_smooth_map_comes_home_within_a_tenth_of_a_voxel(known):
    """Rate: halving the voxels (and the mesh) cuts the mean round trip about fourfold."""
    means = []
    for n in (12, 24):
        volume_map = known.mapped(known.box(n, -0.6, 0.6), known.shears)
        centre = known.shears(np.zeros(3))
        forward = forward_field(volume_map, _grid(2 * n + 1, -0.6, 0.6))
        target = _grid(3 * n + 1, -0.9, 0.9)
        affine = target.affine.copy()
        affine[:3, 3] += centre
        trip = round_trip(forward, backward_field(volume_map, Grid(target.shape, affine)))
        means.append(trip.mean_mm)
        assert trip.mean_mm < 0.1 * forward.grid.voxel_mm
        assert trip.coverage > 0.7
    assert np.log2(means[0] / means[1]) == pytest.approx(2, abs=0.5)


def test_nothing_to_measure_is_not_zero(known):
    volume_map = known.mapped(known.box(2, 0, 1), lambda x: x)
    empty = forward_field(volume_map, _grid(3, 50, 60))
    trip = round_trip(empty, backward_field(volume_map, _grid(3, 0, 1)))
    assert trip.n_voxels == 0
    assert trip.coverage == 0
    assert np.isnan(trip.mean_mm)
    assert np.isnan(field_error(empty, volume_map).max_mm)


def test_two_forward_fields_are_no_pair(known):
    field = forward_field(known.mapped(known.box(2, 0, 1), lambda x: x), _grid(3, 0, 1))
    with pytest.raises(InputError, match="not a pair"):
        round_trip(field, field)


def test_field_error_of_a_hand_made_kink():
    """Closed form: u = |x| sampled at x = -0.5 and 0.5 is 0.5 between them, off by 0.5 at the kink."""
    from volmap.types import TetMesh, VolumeMap

    points, tets = [], []
    for end in (-1.0, 1.0):  # two wedges of three tets that meet in the plane x = 0
        base = len(points)
        points += [[0, 0, 0], [0, 9, 0], [0, 0, 9], [end, 0, 0], [end, 9, 0], [end, 0, 9]]
        tets += [[base + c for c in t] for t in ([0, 1, 2, 3], [1, 2, 3, 4], [2, 3, 4, 5])]
    points, tets = np.array(points, float), np.array(tets)
    mesh = TetMesh(points, tets, np.ones(len(tets), int))
    exact = VolumeMap(mesh, points + np.abs(points) * [1, 0, 0])
    affine = np.eye(4)
    affine[:3, 3] = [-0.5, 0.0, 0.0]
    error = field_error(forward_field(exact, Grid((2, 10, 10), affine)), exact)
    assert error.max_mm == pytest.approx(0.5, abs=1e-6)
    assert error.n_points > 1000
    # between the samples the error is 0.5 - |x|, uniform: mean 0.25, apart from the few planted places
    assert error.mean_mm == pytest.approx(0.25, abs=0.005)


@pytest.fixture(scope="module")
def documents(known):
    """Map, fields and both sidecars of phi(x) = 2x."""
    volume_map = known.mapped(known.box(4, -10, 10), lambda x: 2 * x)
    forward = forward_field(volume_map, _grid(21, -12, 12))
    backward = backward_field(volume_map, _grid(25, -24, 24))
    one = field_sidecar(
        forward,
        volume_map,
        direction="forward",
        grid_sha256="a" * 64,
        points_into_sha256="b" * 64,
        points_into_grid=backward.grid,
        paired_file="backward.nii.gz",
        paired=round_trip(forward, backward),
    )
    two = field_sidecar(
        backward,
        volume_map,
        direction="backward",
        grid_sha256="b" * 64,
        points_into_sha256="a" * 64,
        points_into_grid=forward.grid,
        paired_file="forward.nii.gz",
        paired=round_trip(backward, forward),
    )
    return volume_map, forward, backward, one, two


def test_sidecars_say_direction_and_both_uses(documents):
    """The contract's words (shared contract, "A map folder")."""
    _, _, _, one, two = documents
    assert one["formula"].startswith("y = x + u(x): x is the centre of a voxel of this grid")
    here, there = (
        {"shape": [n] * 3, "affine": _grid(n, -e, e).affine.tolist()} for n, e in ((21, 12), (25, 24))
    )
    assert one["grid_space"] == {"role": "SOURCE", "name": "source", "sha256": "a" * 64, "grid": here}
    assert one["points_into"] == {"role": "TARGET", "name": "target", "sha256": "b" * 64, "grid": there}
    assert one["uses"][0].startswith("resamples images of TARGET onto SOURCE's grid")
    assert one["uses"][1].startswith("moves points from SOURCE into TARGET")
    assert two["uses"][0].startswith("resamples images of SOURCE onto TARGET's grid")
    assert two["uses"][1].startswith("moves points from TARGET into SOURCE")
    assert two["paired_file"] == "forward.nii.gz"
    assert one["notice"] == caution()
    assert {"frame", "order", "units", "outside", "interpolation", "against_exact_map"} <= set(one)
    assert json.loads(json.dumps(one, allow_nan=False)) == one


@pytest.mark.parametrize(("which", "factor"), [(3, 2.0), (4, 0.5)])
def test_the_check_point_is_true(documents, which, factor):
    """Closed form: y = 2x forward, y = x/2 backward, at the middle of the body."""
    point = documents[which]["check_point"]
    field = documents[which - 2]
    np.testing.assert_allclose(point["y_mm"], factor * np.array(point["x_mm"]), atol=1e-5)
    np.testing.assert_allclose(np.add(point["x_mm"], point["u_mm"]), point["y_mm"], atol=1e-12)
    voxel = tuple(point["voxel"])
    np.testing.assert_array_equal(field.displacement[voxel], np.float32(point["u_mm"]))
    np.testing.assert_allclose(field.grid.to_world(np.array([voxel]))[0], point["x_mm"], atol=1e-12)
    i, j, k = voxel
    assert field.support[i - 3 : i + 4, j - 3 : j + 4, k - 3 : k + 4].all()


def test_sidecar_numbers_are_the_measured_ones(documents):
    volume_map, forward, backward, one, two = documents
    assert two["against_exact_map"]["max_mm"] == field_error(backward, volume_map.reversed()).max_mm < 1e-5
    assert one["against_exact_map"]["max_mm"] == field_error(forward, volume_map).max_mm
    assert one["round_trip"]["mean_mm"] == round_trip(forward, backward).mean_mm
    assert one["round_trip"]["max_mm"] < 1e-5


def test_sidecar_refuses_paths_and_wrong_directions(documents):
    volume_map, forward, backward, _, _ = documents
    words = {
        "grid_sha256": "",
        "points_into_sha256": "",
        "points_into_grid": backward.grid,
        "paired": round_trip(forward, backward),
    }
    with pytest.raises(InputError, match="path"):
        field_sidecar(forward, volume_map, direction="forward", paired_file="/data/b.nii.gz", **words)
    with pytest.raises(InputError, match="direction"):
        field_sidecar(forward, volume_map, direction="backward", paired_file="f.nii.gz", **words)


def test_an_empty_field_has_no_check_point_and_valid_json(known):
    volume_map = known.mapped(known.box(2, 0, 1), lambda x: x)
    empty = forward_field(volume_map, _grid(3, 50, 60))
    document = field_sidecar(
        empty,
        volume_map,
        direction="forward",
        grid_sha256="",
        points_into_sha256="",
        points_into_grid=empty.grid,
        paired_file="backward.nii.gz",
        paired=round_trip(empty, backward_field(volume_map, _grid(3, 0, 1))),
    )
    assert document["check_point"] is None
    assert document["round_trip"]["mean_mm"] is None
    json.dumps(document, allow_nan=False)
