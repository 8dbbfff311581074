"""Planted mistakes of direction: each is caught, and named in one sentence."""

from dataclasses import replace
from itertools import permutations, product

import numpy as np
import pytest

from volmap.carry import (
    backward_field,
    direction_proof,
    field_mistake,
    forward_field,
    grid_mistake,
)
from volmap.carry.sidecar import check_point
from volmap.types import Grid, GridField


@pytest.fixture(scope="module")
def volume_map(known):
    """Three shears, moved: no two components alike, no symmetry, larger outside than any tolerance."""
    return known.mapped(known.box(5, -0.7, 0.7), lambda x: known.shears(x) + np.array([0.5, -0.9, 0.2]))


def grid(shift=(0, 0, 0)):
    affine = np.diag([0.11, 0.13, 0.12, 1.0])
    affine[:3, 3] = [-0.8, -0.9, -0.85]
    affine[:3, 3] += affine[:3, :3] @ shift
    return Grid((15, 14, 15), affine)


@pytest.fixture(scope="module")
def field(volume_map):
    return forward_field(volume_map, grid())


@pytest.fixture(scope="module")
def document(field):
    return {"check_point": check_point(field)}


def changed(field, rule, **other):
    return GridField(other.get("grid", field.grid), rule(np.array(field.displacement)))


def test_a_sound_field_proves_its_direction(field, document, volume_map):
    proof = direction_proof(field, document, name="f.nii.gz", exact=volume_map)
    assert proof.faults == ()
    point = document["check_point"]
    assert f"voxel {tuple(point['voxel'])}" in proof.told
    assert "within 0.001 mm" in proof.told
    assert "the exact map agrees" in proof.told


SIGN = "the vectors have their sign turned (the negative of a field is not its inverse)"
LPS = "the vectors have x and y turned, as in LPS instead of RAS+"
PLANTED = {
    "negated": (lambda u: -u, SIGN),
    "LPS components": (lambda u: u * np.float32([-1, -1, 1]), LPS),
    "z turned": (lambda u: u * np.float32([1, 1, -1]), "the vectors have z turned"),
    "x and z swapped": (lambda u: u[..., [2, 1, 0]], "their components in the order z, y, x"),
    "rolled components": (lambda u: u[..., [1, 2, 0]], "their components in the order y, z, x"),
    "swapped, and LPS": (
        lambda u: u[..., [1, 0, 2]] * np.float32([-1, -1, 1]),
        f"their components in the order y, x, z, and {LPS}",
    ),
}


@pytest.mark.parametrize(("rule", "named"), PLANTED.values(), ids=PLANTED)
def test_turned_and_swapped_vectors_are_named(field, document, volume_map, rule, named):
    wrong = changed(field, rule)
    (fault,) = direction_proof(wrong, document, name="f.nii.gz", exact=volume_map).faults
    assert fault.startswith("f.nii.gz: the vector at voxel")
    assert fault.endswith(named)
    assert field_mistake(wrong, field).endswith(named)


MOTIONS = {  # displacements that are 0, or the same along two axes, where the body is deepest
    "turn about the middle": lambda x: np.cross([0.1, -0.2, 0.3], x),
    "growth from the middle": lambda x: 0.2 * x,
    "bulge along z": lambda x: np.stack([0 * x[:, 0], 0.1 * x[:, 0], 0.3 - x[:, 2] ** 2], axis=1),
}
TURNINGS = [
    (order, signs)
    for order in permutations(range(3))
    for signs in product((1.0, -1.0), repeat=3)
    if (order, signs) != ((0, 1, 2), (1.0, 1.0, 1.0))
]


@pytest.mark.parametrize("motion", MOTIONS.values(), ids=MOTIONS)
def test_the_check_point_tells_every_turning_and_swapping(motion):
    """Law: any of the 47 turnings and swappings that changes a field changes its check point, though the
    motion is nothing, or alike along two axes, at the middle."""
    affine = np.diag([0.1, 0.1, 0.1, 1.0])
    affine[:3, 3] = -0.7
    middle = Grid((15, 15, 15), affine)
    places = middle.to_world(np.indices(middle.shape).reshape(3, -1).T.astype(float))
    displacement = motion(places).reshape(*middle.shape, 3).astype(np.float32)
    displacement[0, 0, 0] = np.nan
    field = GridField(middle, displacement)
    said = {"check_point": check_point(field)}
    i, j, k = said["check_point"]["voxel"]
    assert min(i, j, k, 14 - i, 14 - j, 14 - k) >= 3  # half as deep as the deepest
    assert direction_proof(field, said, name="f").faults == ()
    alike = motion is MOTIONS["bulge along z"]  # nothing moves along x there, so its sign tells nothing
    for order, signs in TURNINGS:
        if alike and order == (0, 1, 2) and signs == (-1.0, 1.0, 1.0):
            continue
        wrong = changed(field, lambda u: u[..., list(order)] * np.float32(signs))  # noqa: B023
        assert direction_proof(wrong, said, name="f").faults, (order, signs)


def test_a_field_that_agrees_with_its_own_document_but_not_with_the_map(field, volume_map):
    """Sign turned in both: only the exact map can tell."""
    wrong = changed(field, lambda u: -u)
    said = {"check_point": check_point(wrong)}
    assert direction_proof(wrong, said, name="f.nii.gz").faults == ()
    (fault,) = direction_proof(wrong, said, name="f.nii.gz", exact=volume_map).faults
    assert "the exact map sends the check point" in fault


def test_the_field_of_the_other_direction_is_named(field, volume_map):
    other = backward_field(volume_map, grid())
    wrong = GridField(grid(), np.array(other.displacement))
    assert field_mistake(wrong, field, other) == "it holds the displacements of the other direction"
    assert field_mistake(wrong, field) == ""


@pytest.mark.parametrize("step", [(1, 0, 0), (0, -1, 0), (1, 0, -1)])
def test_a_grid_off_by_a_voxel_is_named(field, document, volume_map, step):
    words = " and ".join(f"{n} voxel along {axis}" for n, axis in zip(step, "ijk", strict=True) if n)
    wrong = GridField(grid(step), np.array(field.displacement))
    proof = direction_proof(wrong, document, name="f.nii.gz", exact=volume_map)
    (fault,) = proof.faults
    back = " and ".join(f"{-n} voxel along {axis}" for n, axis in zip(step, "ijk", strict=True) if n)
    assert fault.endswith(f"its affine is off by {back}")
    assert grid_mistake(grid(step), grid()) == f"its affine is off by {words}"


@pytest.mark.parametrize("step", [(1, 0, 0), (0, -1, 0), (0, 0, 2)])
def test_vectors_laid_down_beside_their_place_are_named(field, step):
    wrong = changed(field, lambda u: np.roll(u, step, (0, 1, 2)))
    moved = [f"{n} voxel{'s' if abs(n) > 1 else ''} along {a}" for n, a in zip(step, "ijk", strict=True) if n]
    assert field_mistake(wrong, field) == f"it is laid down off its place by {moved[0]}"


def test_an_affine_in_lps_is_named():
    affine = np.diag([-1.0, -1.0, 1.0, 1.0]) @ grid().affine
    named = "its affine has x and y turned, as in LPS instead of RAS+"
    assert grid_mistake(Grid(grid().shape, affine), grid()) == named
    affine[0, 0] *= 1.5
    assert grid_mistake(Grid(grid().shape, affine), grid()).startswith("its affine differs by up to")
    assert grid_mistake(Grid((3, 3, 3), np.eye(4)), grid()) == "(3, 3, 3) voxels instead of (15, 14, 15)"


def test_what_is_no_known_mistake_is_not_given_a_name(field, document):
    wrong = changed(field, lambda u: u * np.float32(1.1))
    (fault,) = direction_proof(wrong, document, name="f.nii.gz").faults
    assert fault.endswith(")")
    assert field_mistake(wrong, field) == ""
    assert field_mistake(field, field) == ""


def y_changed(point):
    return point | {"y_mm": [v + 0.01 for v in point["y_mm"]]}


@pytest.mark.parametrize(
    ("change", "words"),
    [
        (y_changed, "is not its x + u"),
        (lambda p: p | {"voxel": [90, 0, 0]}, "lies outside its (15, 14, 15) voxels"),
        (lambda p: p | {"voxel": [0, 0, 0]}, "the vector at voxel (0, 0, 0) is (nan, nan, nan) mm"),
        (lambda p: p | {"u_mm": [1.0]}, "holds no check point"),
        (lambda p: p | {"x_mm": [float("nan")] * 3}, "holds no check point"),
        (lambda p: "gone", "holds no check point"),
        (lambda p: None, "holds no check point"),
    ],
)
def test_a_check_point_that_is_not_one_is_told(field, document, change, words):
    said = {"check_point": change(document["check_point"])}
    assert any(words in fault for fault in direction_proof(field, said, name="f.nii.gz").faults)


def test_a_document_without_a_check_point_proves_nothing(field):
    assert direction_proof(field, {}, name="f.nii.gz").faults
    empty = replace(field, displacement=np.full_like(field.displacement, np.nan))
    assert direction_proof(empty, {"check_point": None}, name="f.nii.gz").faults == ()
