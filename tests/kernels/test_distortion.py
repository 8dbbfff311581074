"""Distortion kernels: published eigenvalues, closed forms, finite differences, laws."""

import tomllib
from importlib.resources import files

import numpy as np
import pytest

from volmap.kernels import distortion, steps
from volmap.kernels import energies as densities
from volmap.kernels import tets as tet_kernels
from volmap.kernels.compiled import kernel
from volmap.kernels.distortion import derivatives, energies
from volmap.kernels.energies import ENERGIES
from volmap.kernels.steps import step_bounds

density = kernel(densities.density.py_func)
first_root = kernel(steps.first_root.py_func)
symmetrised = kernel(distortion.symmetrised.py_func)

UNIT_TET = np.array([[0.0, 0, 0], [1, 0, 0], [0, 1, 0], [0, 0, 1]])
ONE = np.array([[0, 1, 2, 3]])


def random_tets(n, seed, bend=0.35):
    rng = np.random.default_rng(seed)
    points = (UNIT_TET[None] + 0.2 * rng.normal(size=(n, 4, 3))).reshape(-1, 3)
    tets = np.arange(4 * n).reshape(-1, 4)
    flip = tet_kernels.signed_volumes(points, tets) < 0
    tets[flip] = tets[flip][:, [0, 2, 1, 3]]
    images = points + bend * rng.normal(size=points.shape)
    keep = tet_kernels.signed_volumes(images, tets) > 0.02
    return points, images, np.ascontiguousarray(tets[keep])


def plain(code, s):
    g, h = np.empty(3), np.empty((3, 3))
    return density(code, s, g, h), g, h


def symmetric(code, s):
    g, h = np.empty(3), np.empty((3, 3))
    return symmetrised(code, s, g, h, np.empty(3), np.empty(3), np.empty((3, 3))), g, h


def hessian_eigenvalues(s, g, h):
    """The nine eigenvalues of d2W/dF2 (Smith, de Goes & Kim 2019): the stretch block, flips and twists."""
    values = list(np.linalg.eigvalsh(h))
    for i, j in ((0, 1), (0, 2), (1, 2)):
        values += [(g[i] - g[j]) / (s[i] - s[j]), (g[i] + g[j]) / (s[i] + s[j])]
    return np.sort(values)


PUBLISHED = tomllib.loads(files("volmap_shared").joinpath("values/published.toml").read_text())["energies"]
OFFSET = {"symmetric-dirichlet": 3.0, "conformal": 1.0}  # what makes ours 0 where nothing is distorted


@pytest.mark.parametrize("name", ["symmetric-dirichlet", "arap", "log-strain", "neo-hookean", "conformal"])
def test_published_values_and_eigenvalues(name):
    s = np.array(PUBLISHED["stretches"])
    value, g, h = plain(ENERGIES[name], s)
    assert value + OFFSET.get(name, 0.0) == pytest.approx(PUBLISHED[name][0], abs=1e-6)
    np.testing.assert_allclose(hessian_eigenvalues(s, g, h), PUBLISHED[name][1:], atol=2e-6)


def test_published_symmetrised_arap():
    s = np.array(PUBLISHED["stretches"])
    value, g, h = symmetric(ENERGIES["arap"], s)
    assert value == pytest.approx(PUBLISHED["symmetrised-arap"][0])
    np.testing.assert_allclose(hessian_eigenvalues(s, g, h), PUBLISHED["symmetrised-arap"][1:], atol=2e-6)


def test_soft_tissue_has_the_moduli_of_its_poisson_ratio():
    """Linear elasticity: W'' at s = 1 is lambda everywhere plus 2 mu on the diagonal."""
    _, _, h = plain(ENERGIES["soft-tissue"], np.ones(3))
    lame = h[0, 1]
    assert h[0, 0] - lame == pytest.approx(2.0)
    assert lame / (2 * (lame + 1)) == pytest.approx(0.45)


@pytest.mark.parametrize("scale", [0.001, 0.4, 2.5])
def test_symmetrised_arap_of_a_uniform_scale(scale):
    """Closed form: 1.5 (s - 1)^2 (1 + s)."""
    value, _, _ = symmetric(ENERGIES["arap"], np.full(3, scale))
    assert value == pytest.approx(1.5 * (scale - 1) ** 2 * (1 + scale), rel=1e-12)


@pytest.mark.parametrize("name", ENERGIES)
def test_nothing_costs_nothing(name):
    value, g, _ = symmetric(ENERGIES[name], np.ones(3))
    assert value == pytest.approx(0, abs=1e-14)
    np.testing.assert_allclose(g, 0, atol=1e-14)


@pytest.mark.parametrize(
    ("shear", "angle", "arap_value", "log_value"), [(1.0, 26.565051, 0.527864, 0.463130)]
)
def test_simple_shear(shear, angle, arap_value, log_value):
    """Polar decomposition of simple shear g: angle atan(g/2), s = (sqrt(4 + g^2) +- g)/2, 1 (closed form)."""
    f = np.array([[1.0, shear, 0], [0, 1, 0], [0, 0, 1]])
    a, v = f.copy(), np.empty((3, 3))
    distortion.rotate_to_stretches.py_func(a, v)
    s = np.linalg.norm(a, axis=0)
    np.testing.assert_allclose(a @ v.T, f, atol=1e-15)
    long, short = (np.sqrt(4 + shear**2) + shear) / 2, (np.sqrt(4 + shear**2) - shear) / 2
    np.testing.assert_allclose(np.sort(s), [short, 1, long], atol=1e-14)
    rotation = (a / s) @ v.T
    assert np.degrees(np.arccos((np.trace(rotation) - 1) / 2)) == pytest.approx(angle, abs=1e-6)
    assert plain(ENERGIES["arap"], s)[0] == pytest.approx(arap_value, abs=1e-6)
    assert plain(ENERGIES["log-strain"], s)[0] == pytest.approx(log_value, abs=1e-6)


@pytest.mark.parametrize("name", ENERGIES)
def test_total_does_not_depend_on_the_order_of_the_bodies(name):
    """sum v W_S(F) = sum v' W_S(F^-1), exactly in exact arithmetic."""
    points, images, tets = random_tets(400, seed=1)
    there, back = np.empty(len(tets)), np.empty(len(tets))
    code = ENERGIES[name]
    energies(code, images, tets, tet_kernels.shape_gradients(points, tets), there)
    energies(code, points, tets, tet_kernels.shape_gradients(images, tets), back)
    forward = (tet_kernels.signed_volumes(points, tets) * there).sum()
    backward = (tet_kernels.signed_volumes(images, tets) * back).sum()
    assert forward == pytest.approx(backward, rel=1e-11)


def assembled(code, images, points, tets, clamp):
    m = len(tets)
    out, forces, blocks = np.empty(m), np.empty((m, 4, 3)), np.empty((m, 6, 3, 3))
    gradients = tet_kernels.shape_gradients(points, tets)
    derivatives(code, images, tets, gradients, np.ones(m), clamp, out, forces, blocks)
    return out, forces, blocks


def dense(blocks):
    """The 12x12 second derivative of one tet, from its six blocks (rows sum to zero)."""
    k = np.zeros((4, 4, 3, 3))
    for e, (a, b) in enumerate(tet_kernels.EDGES):
        k[a, b], k[b, a] = blocks[e], blocks[e].T
    for a in range(4):
        k[a, a] = -k[a].sum(axis=0)
    return k.transpose(0, 2, 1, 3).reshape(12, 12)


@pytest.mark.parametrize("name", ENERGIES)
def test_derivatives_against_finite_differences(name):
    points, images, tets = random_tets(12, seed=2)
    code = ENERGIES[name]
    out, forces, blocks = assembled(code, images, points, tets, clamp=False)
    step = 1e-5
    for t in range(len(tets)):
        k = dense(blocks[t])
        for column in range(12):
            moved = []
            for sign in (1, -1):
                x = images.copy()
                x[tets[t, column // 3], column % 3] += sign * step
                moved.append(assembled(code, x, points, tets[t : t + 1], clamp=False))
            slope = (moved[0][0] - moved[1][0]) / (2 * step)
            assert slope[0] == pytest.approx(forces[t].ravel()[column], rel=1e-5, abs=1e-6 * (1 + out[t]))
            curve = (moved[0][1] - moved[1][1]).ravel() / (2 * step)
            np.testing.assert_allclose(curve, k[:, column], rtol=1e-4, atol=1e-5 * np.abs(k).max())


@pytest.mark.parametrize("name", ENERGIES)
def test_clamped_model_is_convex(name):
    points, images, tets = random_tets(60, seed=3)
    _, _, raw = assembled(ENERGIES[name], images, points, tets, clamp=False)
    _, _, clamped = assembled(ENERGIES[name], images, points, tets, clamp=True)
    lowest = [np.linalg.eigvalsh(dense(b)).min() for b in raw]
    assert min(lowest) < -1e-3  # there is something to clamp
    for block in clamped:
        model = np.linalg.eigvalsh(dense(block))
        assert model.min() > -1e-9 * model.max()


@pytest.mark.parametrize("name", [n for n in ENERGIES if n != "conformal"])
def test_clamping_leaves_a_convex_model_alone(name):
    """Near a rigid motion every energy with a stiff volume is convex in all nine directions but rotations."""
    points, _, tets = random_tets(20, seed=3)
    images = 1.02 * points
    raw, clamped = (assembled(ENERGIES[name], images, points, tets, clamp=c)[2] for c in (False, True))
    np.testing.assert_allclose(clamped, raw, atol=1e-9 * np.abs(raw).max())


@pytest.mark.parametrize("name", ENERGIES)
def test_a_rigid_motion_costs_nothing_and_turns_forces(name):
    points, images, tets = random_tets(20, seed=4)
    q, _ = np.linalg.qr(np.random.default_rng(0).normal(size=(3, 3)))
    q *= np.sign(np.linalg.det(q))
    code = ENERGIES[name]
    out, _, _ = assembled(code, points @ q.T + 7.0, points, tets, clamp=True)
    np.testing.assert_allclose(out, 0, atol=1e-12)
    before, after = (assembled(code, x, points, tets, clamp=True) for x in (images, images @ q.T + 3.0))
    np.testing.assert_allclose(after[0], before[0], rtol=1e-10)
    np.testing.assert_allclose(after[1], before[1] @ q.T, atol=1e-9 * np.abs(before[1]).max())


def test_an_inverted_tet_costs_infinity():
    out = np.empty(1)
    energies(0, UNIT_TET[[1, 0, 2, 3]], ONE, tet_kernels.shape_gradients(UNIT_TET, ONE), out)
    assert np.isinf(out[0])


@pytest.mark.parametrize(
    ("df", "expected"),
    [
        (np.diag([-1.0, -2, -4]), 0.25),
        (-np.eye(3), 1.0),
        (np.array([[0.0, -1, 0], [1, 0, 0], [0, 0, -0.5]]), 2.0),
        (np.eye(3), 10.0),
    ],
)
def test_published_step_bounds(df, expected):
    """Closed form roots of det(I + t dF) (recomputed)."""
    out = np.empty(1)
    step_bounds(UNIT_TET, UNIT_TET @ df.T, ONE, 10.0, out)
    assert out[0] <= expected * (1 + 1e-12)
    assert out[0] == pytest.approx(
        expected, rel=1e-4
    )  # a triple root is blurred by the cube root of rounding


def test_root_is_the_first_and_from_the_safe_side():
    """Independent library: numpy's companion-matrix roots."""
    rng = np.random.default_rng(6)
    for _ in range(2000):
        a, b, c = rng.normal(size=3) * 10 ** rng.uniform(-2, 2, 3)
        roots = np.roots([c, b, a, 1.0])
        real = roots.real[(np.abs(roots.imag) < 1e-9 * np.abs(roots)) & (roots.real > 0)]
        truth = min([*real, 5.0])
        found = first_root(a, b, c, 5.0)
        assert found <= truth * (1 + 1e-9)
        assert found == pytest.approx(truth, rel=1e-6)


def test_quality_stays_positive_up_to_the_bound():
    points, images, tets = random_tets(300, seed=8)
    direction = np.random.default_rng(5).normal(size=points.shape)
    out = np.empty(len(tets))
    step_bounds(images, direction, tets, 3.0, out)
    for t, bound in enumerate(out):
        for share in (0.3, 0.7, 0.999):
            x = images + share * bound * direction
            assert tet_kernels.signed_volumes(x, tets[t : t + 1])[0] > 0
