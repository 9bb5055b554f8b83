import numpy as np
import pytest
from dense import polynomial_value, random_polynomial, seeds, sphere_rule, unit_vectors
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.special import sph_harm_y
from scipy.stats import special_ortho_group

from manybody.model import harmonics as module
from manybody.model.harmonics import expand_function, expand_polynomial, harmonics


@pytest.mark.parametrize("rank", [0, 1, 2, 3, 7, 20])
def test_values_against_scipy(rank):
    # scipy's complex harmonics: orthonormal, with the Condon-Shortley sign
    n = unit_vectors(1, 20)
    polar, azimuth = np.arccos(n[:, 2]), np.arctan2(n[:, 1], n[:, 0])
    norm = np.sqrt(4 * np.pi / (2 * rank + 1))
    expected = np.empty((20, 2 * rank + 1))
    for q in range(rank + 1):
        value = norm * (-1) ** q * sph_harm_y(rank, q, polar, azimuth)
        expected[:, rank + q] = value.real * (np.sqrt(2) if q else 1)
        if q:
            expected[:, rank - q] = value.imag * np.sqrt(2)
    np.testing.assert_allclose(harmonics(rank, n), expected, atol=1e-13)


@pytest.mark.parametrize("rank", [1, 2, 5, 9])
def test_derivatives_against_complex_step_free_differences(rank):
    n, step = np.random.default_rng(2).normal(size=(6, 3)), 1e-5
    for axis in range(3):
        shift = step * np.eye(3)[axis]
        numeric = (harmonics(rank, n + shift) - harmonics(rank, n - shift)) / (2 * step)
        exact = harmonics(rank - 1, n) @ module.derivative(rank)[axis].T
        np.testing.assert_allclose(numeric, exact, atol=1e-8 * np.abs(exact).max())


@pytest.mark.parametrize("rank", [1, 2, 3, 6])
def test_rotation_matrices_and_generators(rank):
    n = unit_vectors(3, 8)
    rotation = special_ortho_group(3, seed=4).rvs()
    matrix = module.rotation_matrix(rank, rotation)
    np.testing.assert_allclose(harmonics(rank, n @ rotation.T), harmonics(rank, n) @ matrix.T, atol=1e-13)
    np.testing.assert_allclose(matrix @ matrix.T, np.eye(2 * rank + 1), atol=1e-13)
    # [G_x, G_y] = -G_z: the generators act on functions of n, the representation of R -> C(R n)
    g = module.generators(rank)
    np.testing.assert_allclose(abs(g[0] @ g[1] - g[1] @ g[0]), abs(g[2]), atol=1e-12)


@settings(max_examples=40, deadline=None)
@given(seed=seeds, degree=st.integers(0, 6))
def test_polynomials_are_expanded_exactly(seed, degree):
    polynomial = random_polynomial(np.random.default_rng(seed), degree)
    n = unit_vectors(seed, 10)
    total = sum(harmonics(rank, n) @ vector for (rank, _), vector in expand_polynomial(polynomial).items())
    np.testing.assert_allclose(total, polynomial_value(polynomial, n), atol=1e-12)


def test_degree_is_remembered_and_cancelled_parts_vanish():
    assert list(expand_polynomial({(2, 0, 0): 1.0, (0, 2, 0): 1.0, (0, 0, 2): 1.0})) == [(0, 2)]
    assert set(expand_polynomial({(0, 0, 4): 1.0})) == {(0, 4), (2, 4), (4, 4)}
    with pytest.raises(ValueError, match="non-negative integers"):
        expand_polynomial({(-1, 0, 0): 1.0})


def test_functions_that_are_not_polynomials():
    # exp(t z) = sum_k (2k+1) i_k(t) P_k(z), i_k the modified spherical Bessel functions (Abramowitz and Stegun 10.2.36)
    from scipy.special import spherical_in

    parts = expand_function(lambda n: np.exp(1.5 * n[:, 2]), 6)
    for k, part in enumerate(parts):
        assert part[k] == pytest.approx((2 * k + 1) * spherical_in(k, 1.5), abs=1e-13)


def test_quadrature_integrates_its_degree():
    points, weights = module.sphere_quadrature(6)
    other, other_weights = sphere_rule(6)
    for exponents in [(0, 0, 6), (2, 2, 2), (4, 0, 2), (1, 2, 3)]:
        average = other_weights @ np.prod(other ** np.array(exponents), axis=1)
        assert weights @ np.prod(points ** np.array(exponents), axis=1) == pytest.approx(average, abs=1e-15)
