"""Measurements through a map: places, numbers by their rules, both ways, and who is left out."""

import numpy as np
import pytest

from volmap.carry import carry, gradients_at, move_points
from volmap.types import Measurements, Quantity, Rule, VolumeMap

AFFINE = np.array([[1.5, 0.4, 0.0], [0.0, 0.8, 0.1], [0.2, 0.0, 1.2]])


@pytest.fixture(scope="module")
def affine(known) -> VolumeMap:
    return known.mapped(known.jittered(known.box(4, -1, 1), 0.15), lambda x: x @ AFFINE.T + [3, 0, -1])


def measured(points) -> Measurements:
    n = len(points)
    random = np.random.default_rng(1)
    tensors = random.normal(size=(n, 3, 3))
    return Measurements(
        tuple(f"p{i}" for i in range(n)),
        points,
        (
            Quantity("t1", "ms", random.normal(size=n), Rule.VALUE),
            Quantity("dose", "Gy", random.normal(size=n), Rule.DENSITY),
            Quantity("fibre", "1", random.normal(size=(n, 3)), Rule.TURN),
            Quantity("flow", "mm_per_s", random.normal(size=(n, 3)), Rule.FLUX),
            Quantity("d", "mm2_per_s", tensors + tensors.swapaxes(1, 2), Rule.LINE),
        ),
        {"site": tuple("lr"[i % 2] for i in range(n))},
    )


def test_every_quantity_by_its_own_rule(affine):
    """Closed forms of an affine map, written out here."""
    thing = measured(np.random.default_rng(0).uniform(-0.9, 0.9, (50, 3)))
    carried = carry(thing, affine)
    t1, dose, fibre, flow, d = (q.values for q in thing.quantities)
    J = np.linalg.det(AFFINE)
    S2, V = np.linalg.eigh(AFFINE.T @ AFFINE)
    R = AFFINE @ V @ np.diag(S2**-0.5) @ V.T
    expected = [t1, dose / J, fibre @ R.T, flow @ AFFINE.T / J, AFFINE @ d @ AFFINE.T]
    np.testing.assert_allclose(carried.thing.points, thing.points @ AFFINE.T + [3, 0, -1], atol=1e-12)
    for quantity, values in zip(carried.thing.quantities, expected, strict=True):
        np.testing.assert_allclose(quantity.values, values, atol=1e-12, err_msg=quantity.name)
    assert carried.thing.texts == thing.texts
    assert not carried.findings
    told = {q["name"]: (q["rule"], q["meaning"]) for q in carried.facts["quantities"]}
    assert told["flow"][0] == "flux"
    assert told["dose"][1].startswith("divided by the volume ratio J")


def test_there_and_back_is_nothing(known):
    """Law: the inverse undoes places to 1e-9 mm and numbers to rounding, where the map bends."""
    bent = known.mapped(known.jittered(known.box(5, -0.7, 0.7), 0.15), known.shears)
    thing = measured(np.random.default_rng(2).uniform(-0.69, 0.69, (500, 3)))
    there = carry(thing, bent).thing
    back = carry(there, bent, reverse=True).thing
    np.testing.assert_allclose(back.points, thing.points, atol=1e-9)
    for here, again in zip(thing.quantities, back.quantities, strict=True):
        np.testing.assert_allclose(again.values, here.values, atol=1e-11)
    moved = move_points(bent, thing.points)
    lines = (gradients_at(bent, moved) @ thing.quantities[4].values) @ gradients_at(bent, moved).swapaxes(
        1, 2
    )
    np.testing.assert_allclose(there.quantities[4].values, lines, atol=1e-12)


def test_places_outside_are_left_out_with_their_values(affine):
    points = np.zeros((30, 3))
    points[:15, 0] = 5 + np.arange(15)
    points[20] = 1.05, 0, 0
    thing = measured(points)
    carried = carry(thing, affine)
    assert carried.thing.names == thing.names[15:]
    assert carried.thing.texts["site"] == thing.texts["site"][15:]
    np.testing.assert_array_equal(carried.thing.quantities[0].values, thing.quantities[0].values[15:])
    near, far = carried.findings
    assert (near.code, far.code) == ("outside-carried", "outside-left-out")
    assert far.sentence.startswith(
        "15 of 30 points lie outside the body and were not carried: p14 (18.00 mm)"
    )
    assert far.sentence.endswith("p5 (9.00 mm) and 5 nearer ones")


def test_a_tet_turned_inside_out_gives_no_number_and_says_so(known):
    mesh = known.box(2, -1, 1)
    images = np.array(mesh.points)
    middle = np.flatnonzero((mesh.points == 0).all(axis=1))[0]
    images[middle, 0] = 1.5  # the centre is pushed out of the body
    folded = VolumeMap(mesh, images)
    inside = np.flatnonzero(folded.volume_ratio < 0)
    centres = mesh.points[mesh.tets].mean(axis=1)
    thing = measured(centres)
    carried = carry(thing, folded)
    for quantity in carried.thing.quantities:
        lost = np.isnan(quantity.values.reshape(len(centres), -1)).any(axis=1)
        expected = [] if quantity.rule is Rule.VALUE else inside
        np.testing.assert_array_equal(np.flatnonzero(lost), expected)
    assert [f.code for f in carried.findings] == ["no-answer"] * 4
    assert 0 < len(inside) < len(centres)


def test_missing_values_stay_missing(affine):
    thing = Measurements(
        ("a", "b"), np.zeros((2, 3)), (Quantity("t1", "ms", np.array([np.nan, 2.0]), Rule.DENSITY),)
    )
    carried = carry(thing, affine)
    np.testing.assert_allclose(
        carried.thing.quantities[0].values, [np.nan, 2 / np.linalg.det(AFFINE)], rtol=1e-13
    )
    assert not carried.findings


def test_a_twist_through_finer_and_finer_maps(known):
    """Closed forms (test_rules): J = 1, stretches (sqrt(4 + a^2 r^2) +- a r) / 2, a vertical fibre tilts.

    Rate: the gradient of linear interpolation is first-order, so halving edges halves the error.
    """
    rate = 0.7
    points = np.random.default_rng(4).uniform(-0.69, 0.69, (400, 3))
    n = len(points)
    thing = Measurements(
        tuple(map(str, range(n))),
        points,
        (
            Quantity("fibre", "1", np.tile([0.0, 0, 1], (n, 1)), Rule.TURN),
            Quantity("dose", "Gy", np.ones(n), Rule.DENSITY),
            Quantity("metric", "1", np.tile(np.eye(3), (n, 1, 1)), Rule.LINE),
        ),
    )
    slope = rate * np.hypot(points[:, 0], points[:, 1])
    root = np.sqrt(4 + slope**2)
    stretches = np.stack([((root - slope) / 2) ** 2, np.ones(n), ((root + slope) / 2) ** 2], axis=1)
    errors = []
    for cells in (6, 12, 24):
        volume_map = known.mapped(known.box(cells, -0.7, 0.7), lambda x: known.twist(x, rate))
        fibre, dose, metric = (q.values for q in carry(thing, volume_map).thing.quantities)
        errors.append(
            [
                np.sqrt(np.mean((fibre[:, 2] - 2 / root) ** 2)),
                np.sqrt(np.mean((dose - 1) ** 2)),
                np.sqrt(np.mean((np.linalg.eigvalsh(metric) - stretches) ** 2)),
            ]
        )
    coarse, middle, fine = np.array(errors)
    assert (middle < coarse / 1.7).all()
    assert (fine < middle / 1.7).all()
    assert fine.max() < 0.02
    np.testing.assert_allclose(np.linalg.norm(fibre, axis=1), 1, atol=1e-14)
