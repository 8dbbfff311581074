"""Rules: closed forms, what each rule keeps, laws of composition, reversal and rigid motion."""

import numpy as np
import pytest

from volmap.carry import apply_rule, rule_factors
from volmap.kernels.polar import rotations
from volmap.types import InputError, Quantity, Rule
from volmap.types.quantities import rules_of_rank

CASES = [(rank, rule) for rank in (0, 1, 2) for rule in rules_of_rank(rank)]
AFFINE = np.array([[2.0, 1.0, 0.0], [0.0, 1.0, 0.0], [0.0, 0.0, 0.5]])  # det 1
PLAIN = np.array([[2.0, 0.0, 0.0], [0.0, 3.0, 0.0], [0.0, 0.0, 4.0]])  # det 24


def _gradients(n: int, seed: int = 0) -> np.ndarray:
    """Random matrices with determinant above 0, condition up to about 10."""
    random = np.random.default_rng(seed)
    turn = np.linalg.qr(random.normal(size=(2, n, 3, 3)))[0]
    turn *= np.sign(np.linalg.det(turn))[..., None, None]
    return turn[0] * np.exp(random.uniform(-1.1, 1.1, (n, 1, 3))) @ turn[1]


def _values(rank: int, n: int, seed: int = 1) -> np.ndarray:
    values = np.random.default_rng(seed).normal(size=(n, *(3,) * rank))
    return values + values.swapaxes(1, 2) if rank == 2 else values


def test_stretches_along_the_axes_by_hand():
    """F = diag(2, 3, 4), J = 24: every rule worked out by hand."""
    F, v, T = PLAIN[None], np.ones((1, 3)), np.ones((1, 3, 3))
    assert apply_rule("value", np.array([6.0]), F).tolist() == [6.0]
    assert apply_rule("density", np.array([6.0]), F)[0] == pytest.approx(0.25, rel=1e-15)
    vectors = {"turn": [1, 1, 1], "line": [2, 3, 4], "gradient": [1 / 2, 1 / 3, 1 / 4],
               "flux": [2 / 24, 3 / 24, 4 / 24]}  # fmt: skip
    for rule, expected in vectors.items():
        np.testing.assert_allclose(apply_rule(rule, v, F)[0], expected, atol=1e-15)
    tensors = {"turn": np.ones((3, 3)), "line": np.outer([2, 3, 4], [2, 3, 4]),
               "gradient": np.outer([1 / 2, 1 / 3, 1 / 4], [1 / 2, 1 / 3, 1 / 4]),
               "flux": np.outer([2, 3, 4], [2, 3, 4]) / 24}  # fmt: skip
    for rule, expected in tensors.items():
        np.testing.assert_allclose(apply_rule(rule, T, F)[0], expected, atol=1e-14)


def test_a_known_affine_that_is_not_symmetric():
    """F = [[2, 1, 0], [0, 1, 0], [0, 0, 1/2]], F^-1 = [[1/2, -1/2, 0], [0, 1, 0], [0, 0, 2]], by hand."""
    F = AFFINE[None]
    v = np.array([[1.0, 2.0, 3.0]])
    np.testing.assert_allclose(apply_rule("line", v, F)[0], [4, 2, 1.5])
    np.testing.assert_allclose(apply_rule("gradient", v, F)[0], [0.5, 1.5, 6])
    T = np.diag([1.0, 2.0, 3.0])[None]
    np.testing.assert_allclose(apply_rule("line", T, F)[0], [[6, 2, 0], [2, 2, 0], [0, 0, 0.75]])
    np.testing.assert_allclose(
        apply_rule("gradient", T, F)[0], [[0.25, -0.25, 0], [-0.25, 2.25, 0], [0, 0, 12]], atol=1e-15
    )


@pytest.mark.parametrize("k", [0.0, 0.3, 1.0, 5.0])
def test_rotation_of_simple_shear(k):
    """x + k y: R turns by -atan(k/2) in the plane of shear (Truesdell & Noll 1965, section 22; from memory,
    and checked here by what defines R: R^T F is symmetric and positive)."""
    F = np.array([[1, k, 0], [0, 1, 0], [0, 0, 1.0]])
    c, s = 2 / np.hypot(2, k), k / np.hypot(2, k)
    R = rotations(F[None])[0]
    np.testing.assert_allclose(R, [[c, s, 0], [-s, c, 0], [0, 0, 1]], atol=1e-15)
    U = R.T @ F
    np.testing.assert_allclose(U, U.T, atol=1e-15)
    assert np.linalg.eigvalsh(U).min() > 0


def _twist_gradient(x: np.ndarray, a: float) -> np.ndarray:
    """F of (r, t, z) -> (r, t + a z, z) at x, in closed form."""
    c, s = np.cos(a * x[2]), np.sin(a * x[2])
    turn = np.array([[c, -s, 0], [s, c, 0], [0, 0, 1]])
    along_z = a * np.array([-s * x[0] - c * x[1], c * x[0] - s * x[1], 0])
    return turn + np.outer(along_z, [0, 0, 1])


def test_twist():
    """Twist by a z: J = 1; stretches 1 and (sqrt(4 + a^2 r^2) +- a r)/2; a vertical fibre gets length
    sqrt(1 + a^2 r^2) as a line and keeps 1 when turned."""
    a, x = 0.7, np.array([0.6, -0.8, 1.3])
    r = np.hypot(x[0], x[1])
    F = _twist_gradient(x, a)[None]
    root = np.sqrt(4 + (a * r) ** 2)
    stretches = np.linalg.svd(F[0], compute_uv=False)
    np.testing.assert_allclose(stretches, [(root + a * r) / 2, 1, (root - a * r) / 2], atol=1e-14)
    np.testing.assert_allclose(apply_rule("density", np.array([3.0]), F), [3.0], rtol=1e-14)
    fibre = np.array([[0, 0, 1.0]])
    assert np.linalg.norm(apply_rule("line", fibre, F)) == pytest.approx(np.hypot(1, a * r))
    turned = apply_rule("turn", fibre, F)[0]
    assert np.linalg.norm(turned) == pytest.approx(1)
    # U rotated back: half the shear angle of the cylinder's wall remains
    assert turned[2] == pytest.approx(2 / root)
    metric = apply_rule("line", np.eye(3)[None], F)[0]  # F F^T, whose eigenvalues are the squared stretches
    np.testing.assert_allclose(np.linalg.eigvalsh(metric)[::-1], stretches**2, rtol=1e-13)


@pytest.mark.parametrize("p", [0.5, 2.0])
def test_density_under_a_radial_power(p):
    """r -> r^p: J = p r^(3p - 3), density 1 becomes 1 / J; F = r^(p-1) (I + (p - 1) n n^T)."""
    x = np.array([0.3, -0.5, 0.8])
    r = np.linalg.norm(x)
    n = x / r
    F = r ** (p - 1) * (np.eye(3) + (p - 1) * np.outer(n, n))
    carried = apply_rule("density", np.ones(1), F[None])
    assert carried[0] == pytest.approx(1 / (p * r ** (3 * p - 3)), rel=1e-14)
    gradient = apply_rule("gradient", n[None], F[None])[0]
    np.testing.assert_allclose(gradient, n / (p * r ** (p - 1)), rtol=1e-13)


def test_what_each_rule_keeps():
    n = 200
    F, v, w, T = _gradients(n), _values(1, n), _values(1, n, 5), _values(2, n)
    J = np.linalg.det(F)
    turned = apply_rule("turn", v, F)
    np.testing.assert_allclose(np.linalg.norm(turned, axis=1), np.linalg.norm(v, axis=1), rtol=1e-13)
    eigen = np.linalg.eigvalsh
    np.testing.assert_allclose(eigen(apply_rule("turn", T, F)), eigen(T), atol=1e-13)
    covector, line = apply_rule("gradient", v, F), apply_rule("line", w, F)
    np.testing.assert_allclose((covector * line).sum(1), (v * w).sum(1), atol=1e-12)
    form = apply_rule("gradient", T, F)
    np.testing.assert_allclose(
        np.einsum("ni,nij,nj->n", line, form, line), np.einsum("ni,nij,nj->n", w, T, w), atol=1e-11
    )
    edge, other = _values(1, n, 6), _values(1, n, 7)
    area = np.cross(apply_rule("line", edge, F), apply_rule("line", other, F))
    through = (apply_rule("flux", v, F) * area).sum(1)  # flux through the carried parallelogram
    np.testing.assert_allclose(through, (v * np.cross(edge, other)).sum(1), atol=1e-12)
    np.testing.assert_allclose(apply_rule("density", np.ones(n), F) * J, 1, rtol=1e-13)
    np.testing.assert_allclose(apply_rule("line", T, F), F @ T @ F.swapaxes(1, 2), atol=1e-13)


@pytest.mark.parametrize(("rank", "rule"), CASES)
def test_there_and_back_is_nothing(rank, rule):
    F, values = _gradients(100), _values(rank, 100)
    back = apply_rule(rule, apply_rule(rule, values, F), np.linalg.inv(F))
    np.testing.assert_allclose(back, values, atol=1e-11)


@pytest.mark.parametrize(("rank", "rule"), CASES)
def test_two_maps_are_one(rank, rule):
    """Through F then G is through G F, but for `turn`, where it holds when one of them is a rotation."""
    F, G, values = _gradients(100), _gradients(100, 9), _values(rank, 100)
    in_steps = apply_rule(rule, apply_rule(rule, values, F), G)
    at_once = apply_rule(rule, values, G @ F)
    if rule is Rule.TURN:
        assert np.abs(in_steps - at_once).max() > 0.1
        G = rotations(G)
        in_steps = apply_rule(rule, apply_rule(rule, values, F), G)
        at_once = apply_rule(rule, values, G @ F)
    np.testing.assert_allclose(in_steps, at_once, rtol=1e-10, atol=1e-10)


@pytest.mark.parametrize(("rank", "rule"), CASES)
def test_rigid_motion_of_both_worlds(rank, rule):
    """Turn SOURCE by P and TARGET by Q: F becomes Q F P^T, and the carried value is turned by Q alone."""
    n = 50
    F, values = _gradients(n), _values(rank, n)
    P, Q = rotations(_gradients(2, 11))

    def turned(values, by):
        return by @ values @ by.T if rank == 2 else values @ by.T if rank == 1 else values

    moved = apply_rule(rule, turned(values, P), Q @ F @ P.T)
    np.testing.assert_allclose(moved, turned(apply_rule(rule, values, F), Q), atol=1e-11)


@pytest.mark.parametrize(("rank", "rule"), CASES)
def test_gradients_of_tets_or_of_places(rank, rule):
    """The same numbers whether F is given a place, or a tet with the tet of each place; -1 gives NaN."""
    F, values = _gradients(7), _values(rank, 40)
    tet = np.random.default_rng(2).integers(0, 7, 40)
    np.testing.assert_array_equal(apply_rule(rule, values, F[tet]), apply_rule(rule, values, F, tet))
    tet[3] = -1
    carried = apply_rule(rule, values, F, tet)
    assert np.isnan(carried[3]).all()
    assert np.isfinite(np.delete(carried, 3, 0)).all()


def test_a_mirrored_or_flat_gradient_has_no_answer():
    """det F <= 0: no number rather than one of the wrong sign; values are kept all the same."""
    F = np.stack([np.diag([-1.0, 1, 1]), np.diag([0.0, 1, 1]), np.eye(3)])
    for rank, rule in CASES:
        carried = apply_rule(rule, _values(rank, 3), F).reshape(3, -1)
        bad = np.isnan(carried).all(axis=1)
        assert bad.tolist() == ([False] * 3 if rule is Rule.VALUE else [True, True, False])
    assert rule_factors(Rule.VALUE, F) == (None, None)


def test_a_quantity_takes_the_rules_of_its_rank():
    assert Quantity("T", "mm2_per_s", np.eye(3)[None], Rule.TURN).rank == 2
    assert Rule.FLUX.sentence(1).startswith("carried as a flux (F v / J)")
    with pytest.raises(InputError, match="flow: is no rule for a vector, found density, expected turn or"):
        Quantity("flow", "mm_per_s", np.ones((2, 3)), Rule.DENSITY)
    with pytest.raises(InputError, match="is no rule for a scalar, found line, expected value or density"):
        Quantity("age", "1", np.ones(2), Rule.LINE)
    with pytest.raises(InputError, match="not symmetric"):
        Quantity("T", "1", np.arange(9.0).reshape(1, 3, 3), Rule.TURN)
    with pytest.raises(InputError, match="infinite"):
        Quantity("c", "1", np.array([np.inf]), Rule.VALUE)
    with pytest.raises(InputError, match="wrong shape"):
        Quantity("v", "1", np.ones((2, 4)), Rule.TURN)
