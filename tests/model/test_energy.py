import pickle

import numpy as np
import pytest
from dense import seeds, sphere_rule, unit_vectors
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.stats import special_ortho_group

from manybody.model.couplings import (
    anisotropy,
    antisymmetric,
    biquadratic,
    exchange,
    field,
    product,
    site_function,
)
from manybody.model.energy import EnergyFunction, Group

PAIRS = np.array([[0, 1], [2, 1], [3, 4], [4, 0], [1, 3]])
AXIS = np.array([1.0, 2.0, 0.5])


def sample(seed=0):
    """An energy function with every kind of term on five sites, and the same written out by hand."""
    rng = np.random.default_rng(seed)
    matrices, vector, fields = rng.normal(size=(5, 3, 3)), rng.normal(size=3), rng.normal(size=(5, 3))
    f = (
        exchange(5, PAIRS, matrices)
        + antisymmetric(5, PAIRS, vector)
        + biquadratic(5, PAIRS, 0.7)
        + field(5, range(5), fields)
        + anisotropy(5, [0, 2], AXIS, 0.3)
        + product(
            5, [[0, 1, 2], [4, 3, 1]], [{(1, 0, 0): 1, (0, 2, 1): 0.3}, {(0, 0, 2): 1}, {(1, 1, 1): 2, (0, 0, 0): 0.5}]
        )
        + site_function(5, [1], lambda n: n[:, 2] ** 3 - n[:, 0] * n[:, 1], 3)
        + 1.3
    )

    def by_hand(n):
        total = 1.3 + n[1, 2] ** 3 - n[1, 0] * n[1, 1] - (fields * n).sum()
        for (i, j), matrix in zip(PAIRS, matrices, strict=True):
            total += n[i] @ matrix @ n[j] + vector @ np.cross(n[i], n[j]) + 0.7 * (n[i] @ n[j]) ** 2
        axis = AXIS / np.linalg.norm(AXIS)
        total += 0.3 * ((n[0] @ axis) ** 2 + (n[2] @ axis) ** 2)
        for i, j, k in [[0, 1, 2], [4, 3, 1]]:
            total += (n[i, 0] + 0.3 * n[i, 1] ** 2 * n[i, 2]) * n[j, 2] ** 2 * (2 * n[k].prod() + 0.5)
        return total

    return f, by_hand


def geodesic(n, v, t):
    speed = np.linalg.norm(v, axis=-1, keepdims=True)
    return np.cos(speed * t) * n + np.sin(speed * t) * v / speed


def test_values_against_the_formula_written_out():
    f, by_hand = sample()
    n = unit_vectors(1, 7, 5)
    np.testing.assert_allclose(f.value(n), [by_hand(m) for m in n], atol=1e-12)
    assert f.value(n[0]).shape == () and f.value(n.reshape(7, 1, 5, 3)).shape == (7, 1)


@settings(max_examples=15, deadline=None)
@given(seed=seeds)
def test_gradient_and_hessian_along_geodesics(seed):
    f, _ = sample(seed)
    n = unit_vectors(seed, 3, 5)
    v = np.random.default_rng(seed + 1).normal(size=n.shape)
    v -= n * (n * v).sum(-1, keepdims=True)
    step = 1e-4
    ahead, behind, here = (f.value(geodesic(n, v, t)) for t in (step, -step, 0.0))
    scale = np.abs(here).max() + (v**2).sum() * f.largest_coefficient
    np.testing.assert_allclose((f.gradient(n) * v).sum((1, 2)), (ahead - behind) / (2 * step), atol=1e-6 * scale)
    hessian = f.hessian(n)
    flat = v.reshape(3, -1)
    curvature = np.einsum("ba,bac,bc->b", flat, hessian, flat)
    np.testing.assert_allclose(curvature, (ahead - 2 * here + behind) / step**2, atol=2e-6 * scale)
    np.testing.assert_allclose(hessian, np.swapaxes(hessian, 1, 2), atol=1e-12 * scale)
    np.testing.assert_allclose(
        np.einsum("bac,bc->ba", hessian, flat), f.hessian_product(n, v).reshape(3, -1), atol=1e-11 * scale
    )
    np.testing.assert_allclose(f.hessian_sparse(n[0]).toarray(), hessian[0], atol=1e-12 * scale)
    normal = np.einsum("bxny,bny->bxn", hessian.reshape(3, 15, 5, 3), n)
    np.testing.assert_allclose(normal, 0, atol=1e-12 * scale)


def test_arithmetic_comparison_and_copies():
    f, _ = sample()
    g, _ = sample(1)
    n = unit_vectors(2, 4, 5)
    np.testing.assert_allclose((2 * f - g / 4 + 1).value(n), 2 * f.value(n) - g.value(n) / 4 + 1, atol=1e-12)
    assert (2 * f) - f == f and f - f == EnergyFunction(5) and f != g and hash(f) == hash(f + 0)
    assert f.allclose(f * (1 + 1e-14)) and not f.allclose(f * 1.001)
    assert pickle.loads(pickle.dumps(f)) == f
    assert exchange(3, [[0, 1], [1, 2]], 1.0) == exchange(3, [[2, 1], [0, 1]], 1.0)
    matrix = np.arange(9.0).reshape(3, 3)
    assert exchange(2, [[0, 1]], matrix) == exchange(2, [[1, 0]], matrix.T)
    with pytest.raises(ValueError, match="5 and 3 sites"):
        f + EnergyFunction(3)


def test_mean_against_quadrature():
    f = biquadratic(2, [[0, 1]], 0.6) + anisotropy(2, [0], [0, 1, 1], 2.0) + exchange(2, [[0, 1]], 1.0) + 0.25
    points, weights = sphere_rule(4)
    n = np.stack([np.repeat(points, len(points), 0), np.tile(points, (len(points), 1))], axis=1)
    assert f.mean == pytest.approx(np.outer(weights, weights).ravel() @ f.value(n), abs=1e-13)


def test_quadratic_form_and_its_refusal():
    f = (
        exchange(5, PAIRS, np.arange(9.0).reshape(3, 3))
        + field(5, [1, 3], [0.1, 0.2, 0.3])
        + anisotropy(5, [2], AXIS, 1.5)
    )
    matrix, vector, constant = f.quadratic_form()
    x = unit_vectors(3, 6, 5).reshape(6, 15)
    value = 0.5 * np.einsum("bx,bx->b", x, (matrix @ x.T).T) - x @ vector + constant
    np.testing.assert_allclose(value, f.value(x.reshape(6, 5, 3)), atol=1e-12)
    assert f.is_quadratic and abs(matrix - matrix.T).max() == 0
    with pytest.raises(ValueError, match="not a quadratic"):
        biquadratic(2, [[0, 1]], 1.0).quadratic_form()


def test_rotations():
    f, _ = sample()
    n = unit_vectors(4, 6, 5)
    common = special_ortho_group(3, seed=5).rvs()
    np.testing.assert_allclose(f.rotated(common).value(n @ common.T), f.value(n), atol=1e-12)
    each = special_ortho_group(3, seed=6).rvs(5)
    np.testing.assert_allclose(f.rotated(each).value(np.einsum("iab,cib->cia", each, n)), f.value(n), atol=1e-12)


def test_symmetry_axes():
    axis = AXIS / np.linalg.norm(AXIS)
    heisenberg = exchange(5, PAIRS, 1.0) + biquadratic(5, PAIRS, -0.2)
    assert len(heisenberg.symmetry_axes()) == 3
    uniaxial = heisenberg + anisotropy(5, range(5), AXIS, 0.3) + antisymmetric(5, PAIRS, 0.4 * axis)
    np.testing.assert_allclose(uniaxial.symmetry_axes(), [axis], atol=1e-9)
    assert len((uniaxial + field(5, [0], [0.1, 0, 0])).symmetry_axes()) == 0
    np.testing.assert_array_equal(exchange(5, PAIRS, [1, 1, 0.5]).symmetry_axes(), [[0, 0, 1]])
    # two breaking terms on one pair that only together conserve the axis
    both = exchange(2, [[0, 1]], [1, 0, 0.3]) + exchange(2, [[1, 0]], [0, 1, 0])
    np.testing.assert_array_equal(both.symmetry_axes(), [[0, 0, 1]])


@pytest.mark.parametrize("uniform", [True, False])
def test_symmetry_axes_of_many_terms(uniform):
    # enough pairs to be read in slices, all of them conserving z; then one more that does not
    sites = 70_001
    pairs = np.stack([np.arange(sites - 1), np.arange(1, sites)], axis=1)
    strength = np.ones(sites - 1) if uniform else np.linspace(1, 2, sites - 1)
    f = exchange(sites, pairs, strength[:, None, None] * np.diag([1.0, 1.0, 0.5]))
    np.testing.assert_array_equal(f.symmetry_axes(), [[0, 0, 1]])
    assert len((f + field(sites, [sites - 1], [0.1, 0, 0])).symmetry_axes()) == 0


def test_components_and_restriction():
    f = exchange(6, [[0, 3], [3, 5], [1, 2]], 1.0) + field(6, [0, 4], [0, 0, 1])
    assert [part.tolist() for part in f.components()] == [[0, 3, 5], [1, 2], [4]]
    assert f.restricted([5, 3, 0]) == exchange(3, [[0, 1], [1, 2]], 1.0) + field(3, [2], [0, 0, 1])


def test_scalar_triple_product():
    # n_0 . (n_1 x n_2), a three-site term that no workflow file has
    letters = [(1, 0, 0), (0, 1, 0), (0, 0, 1)]
    f = EnergyFunction(3)
    for a, b, c, sign in [(0, 1, 2, 1), (1, 2, 0, 1), (2, 0, 1, 1), (0, 2, 1, -1), (2, 1, 0, -1), (1, 0, 2, -1)]:
        f = f + sign * product(3, [[0, 1, 2]], [{letters[a]: 1}, {letters[b]: 1}, {letters[c]: 1}])
    n = unit_vectors(8, 5, 3)
    np.testing.assert_allclose(f.value(n), np.linalg.det(n), atol=1e-13)
    assert len(f.symmetry_axes()) == 3


@pytest.mark.parametrize(
    ("make", "message"),
    [
        (lambda: exchange(3, [[0, 3]], 1.0), "names site 3 of 3"),
        (lambda: exchange(3, [[-1, 0]], 1.0), "names site -1"),
        (lambda: exchange(3, [[1, 1]], 1.0), "same site twice"),
        (lambda: exchange(3, [[0, 1]], np.nan), "finite"),
        (lambda: exchange(3, [[0, 1]], [1, 2]), "exchange must be"),
        (lambda: exchange(3, [[0.5, 1]], 1.0), "integers"),
        (lambda: anisotropy(3, [0], [0, 0, 0], 1.0), "not all zero"),
        (lambda: field(3, [0, 1], [[1, 2, 3]]), "field must be"),
        (lambda: EnergyFunction(0), "at least one site"),
        (lambda: EnergyFunction(2, np.inf), "finite"),
        (lambda: EnergyFunction(2, 0, [Group(((1, 1),), np.array([[0]]), np.ones((1, 2)))]), "shape"),
        (lambda: EnergyFunction(2).value(np.zeros((3, 3))), "shape"),
    ],
)
def test_misuse_is_told(make, message):
    with pytest.raises(ValueError, match=message):
        make()


@given(size=st.integers(2, 6), coupling=st.floats(-1e3, 1e3), shift=st.floats(-10, 10))
@settings(max_examples=25, deadline=None)
def test_exchange_of_aligned_vectors_counts_pairs(size, coupling, shift):
    pairs = [(i, j) for i in range(size) for j in range(i)]
    f = exchange(size, pairs, coupling) + shift
    up = np.tile([0.0, 0.0, 1.0], (size, 1))
    assert f.value(up) == pytest.approx(coupling * len(pairs) + shift, rel=1e-12, abs=1e-9)
