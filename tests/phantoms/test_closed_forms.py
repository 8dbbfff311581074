"""The exact motions against values and laws from outside the project."""

import numpy as np
import pytest
from volmap_phantoms.folded_slab import LONG_MM, THICK_MM, Flexure
from volmap_phantoms.pressure_shell import Inflation


def numeric_ratio(move, points, step=1e-4):
    """Determinant of the central-difference gradient of a motion."""
    columns = [(move(points + step * e) - move(points - step * e)) / (2 * step) for e in np.eye(3)]
    return np.linalg.det(np.stack(columns, axis=2))


def test_shell_outer_radius_is_the_published_one():
    # A=1, B=2, a=1.5 -> b=2.181035 (outside checks, recomputed from r^3 = R^3 + a^3 - A^3)
    motion = Inflation((1.0, 1.5), 2.0)
    assert motion.radius(np.array(2.0), 1) == pytest.approx(2.181035, abs=1e-6)
    assert motion.rest_radius(np.array(2.1810352), 1) == pytest.approx(2.0, abs=1e-6)


def test_shell_keeps_every_volume():
    # law: det of the gradient is 1 for an incompressible body; central differences, error of order step^2
    motion = Inflation()
    direction = np.random.default_rng(1).standard_normal((200, 3))
    direction /= np.linalg.norm(direction, axis=1, keepdims=True)
    points = direction * np.linspace(15.5, 29.5, 200)[:, None]
    for visit in (1, 2):
        assert numeric_ratio(lambda p, v=visit: motion.from_material(p, v), points) == pytest.approx(
            1, abs=1e-6
        )


def test_shell_is_nowhere_in_its_cavity_and_outside():
    motion = Inflation()
    points = np.array([[0.0, 0, 0], [22.4, 0, 0], [22.6, 0, 0], [0, 32.7, 0], [0, 32.8, 0]])
    inside = np.isfinite(motion.to_material(points, 2)).all(axis=1)
    assert inside.tolist() == [False, False, True, True, False]  # b = 32.7155, from 2.181035 x 15


def test_flexure_keeps_every_volume_and_undoes_itself():
    # law: J = 1 (Rivlin 1949); round trip exact
    motion = Flexure()
    points = np.random.default_rng(2).uniform([-12, -54, -20], [12, 54, 20], (300, 3))
    for visit in (0, 1, 2):
        assert numeric_ratio(lambda p, v=visit: motion.bent(p, v), points) == pytest.approx(1, abs=1e-6)
        assert motion.unbent(motion.bent(points, visit), visit) == pytest.approx(points, abs=1e-10)


def test_flexure_leaves_the_curved_faces_free_of_load():
    # closed form, recomputed: radial stress mu/2 (g^2 r^2 + 1/(g^2 r^2)) + constant is equal on both
    motion = Flexure()
    for visit in (0, 1):
        g = np.radians(motion.bend_deg[visit]) / LONG_MM
        stress = [(g * r) ** 2 + (g * r) ** -2 for r in motion.faces_mm(visit)]
        assert stress[0] == pytest.approx(stress[1], rel=1e-12)
        faces = np.array([[-THICK_MM / 2, 0, 0], [THICK_MM / 2, 0, 0]])
        bent = motion.bent(faces, visit)[:, 0] + 1 / g
        assert bent == pytest.approx(motion.faces_mm(visit), rel=1e-12)


def test_flexure_bends_through_the_angle_it_says():
    # definition: the two end faces are planes that meet at the bending angle
    motion = Flexure()
    for visit, degrees in ((0, 150.0), (1, 75.0)):
        ends = [np.array([[-10.0, y, 0], [10.0, y, 0]]) for y in (-LONG_MM / 2, LONG_MM / 2)]
        a, b = (np.diff(motion.bent(end, visit), axis=0)[0] for end in ends)
        cosine = a @ b / np.linalg.norm(a) / np.linalg.norm(b)
        assert np.degrees(np.arccos(cosine)) == pytest.approx(degrees, abs=1e-9)


def test_flexure_tends_to_the_flat_slab():
    # rate: as the angle goes to 0 the bent slab goes to the flat one, linearly in the angle
    points = np.random.default_rng(3).uniform([-12, -54, -20], [12, 54, 20], (100, 3))
    away = [np.abs(Flexure((angle,)).bent(points, 0) - points).max() for angle in (0.2, 0.1, 0.05)]
    assert away[0] / away[1] == pytest.approx(2, rel=0.01)
    assert away[1] / away[2] == pytest.approx(2, rel=0.01)
