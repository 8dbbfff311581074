"""Left and right swapped: told for bodies that have a left and a right, never for the others."""

import itertools
from importlib.resources import files

import numpy as np
import pytest
from hand_made_bodies import ball, cubes, lopsided, rotation

from volmap.io.volumes import read_labels
from volmap.mapping import align, mirror_trial
from volmap.mapping.mirror import CLEARLY_BETTER, mirrored
from volmap.mesh import MeshSettings, mesh
from volmap.types import Surface, TetMesh

TURN = rotation((1, 2, -1), 40.0)


def placed(surface, linear=TURN):
    return Surface(surface.points @ linear.T + [3.0, -8.0, 5.0], surface.triangles, surface.sides)


def trial(source, target):
    return mirror_trial(source, target, align(source, target)[1])


def test_a_mirror_image_keeps_sides_and_volumes():
    """Closed form: a reflection keeps volume, and twice reflected is the body itself."""
    surface = lopsided().interfaces
    for label in (1, 2):
        a, b, c = np.moveaxis(
            mirrored(surface).of_label(label).points[mirrored(surface).of_label(label).triangles], 1, 0
        )
        p, q, r = np.moveaxis(surface.of_label(label).points[surface.of_label(label).triangles], 1, 0)
        inside = np.einsum("ij,ij->", np.cross(a, b), c) / 6
        assert inside == pytest.approx(np.einsum("ij,ij->", np.cross(p, q), r) / 6, rel=1e-12)
        assert inside > 0
    twice = mirrored(mirrored(surface))
    np.testing.assert_allclose(twice.points, surface.points, atol=1e-12)
    np.testing.assert_array_equal(np.sort(twice.triangles), np.sort(surface.triangles))


def test_a_mirrored_body_without_symmetry_is_told():
    """Truth by construction: the mirror image fits to rounding, the body itself does not."""
    body = lopsided().interfaces
    found = trial(body, placed(mirrored(body)))
    assert found.mirrored_mm < 0.02
    assert found.residual_mm > 0.3
    assert found.mirrored_fits_better


def test_the_same_body_turned_is_not():
    body = lopsided().interfaces
    found = trial(body, placed(body))
    assert found.residual_mm < 0.02
    assert not found.mirrored_fits_better


def symmetric_bodies():
    labels = np.ones((8, 4, 3), int)
    labels[6:] = 2
    return {"ball": ball(2), "bar with two ends": cubes(labels), "cube": cubes(np.ones((4, 4, 4), int))}


@pytest.mark.parametrize("name", symmetric_bodies())
@pytest.mark.parametrize("turned_over", [False, True])
def test_a_body_that_is_its_own_mirror_image_is_never_told(name, turned_over):
    """Law: both fit alike, whichever of the two is the scan."""
    body = symmetric_bodies()[name].interfaces
    target = placed(mirrored(body) if turned_over else body)
    found = trial(body, target)
    assert not found.mirrored_fits_better
    assert found.residual_mm == pytest.approx(found.mirrored_mm, abs=0.05)


def test_rounding_is_no_difference():
    """Between residuals of a millionth of a millimetre a factor says nothing."""
    body = cubes(np.ones((4, 4, 4), int)).interfaces
    found = trial(body, body)
    assert found.residual_mm < 1e-6
    assert not found.mirrored_fits_better


@pytest.fixture(scope="module")
def subcortical():
    """Surfaces of the three open subjects, meshed coarsely: left putamen, pallidum and amygdala."""
    place = files("volmap_shared").joinpath("subcortical")
    volumes = [read_labels(place / f"donor-{n}.nii.gz") for n in (10021, 12876, 15697)]
    return [mesh(v, MeshSettings(wanted_tets=5000)).mesh.interfaces for v in volumes]


def test_real_bodies_are_told_from_their_mirror_images(subcortical):
    """Left structures of three people; mirrored, they would be right ones (truth by construction)."""
    for a, b in itertools.combinations(subcortical, 2):
        found = trial(a, b)
        assert not found.mirrored_fits_better
        assert found.residual_mm < found.mirrored_mm / CLEARLY_BETTER
    assert trial(mirrored(subcortical[0]), subcortical[1]).mirrored_fits_better


def test_the_answer_does_not_depend_on_which_is_mirrored():
    body = lopsided()
    other = TetMesh(body.points @ TURN.T * [1.1, 1.0, 0.9], body.tets, body.labels).interfaces
    for a, b in ((body.interfaces, mirrored(other)), (mirrored(body.interfaces), other)):
        assert trial(a, b).mirrored_fits_better
        assert trial(b, a).mirrored_fits_better
