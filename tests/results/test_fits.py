import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from manybody.results.fits import fit


def powers(x, *exponents):
    return np.stack([x**p for p in exponents], axis=1)


@given(st.lists(st.floats(-5, 5), min_size=3, max_size=3), st.integers(5, 9))
@settings(max_examples=40, deadline=None)
def test_exact_data_give_back_their_coefficients(coefficients, n):
    x = 1 / np.arange(2.0, 2 + n)
    columns = powers(x, 0, 1, 2)
    result = fit(columns, columns @ coefficients, np.full(n, 1e-12), x**3)
    np.testing.assert_allclose(result.coefficients, coefficients, atol=1e-8)
    assert result.freedom == n - 3


def test_scaling_the_data_scales_the_answer():
    x = 1 / np.arange(2.0, 9)
    y, columns = np.exp(x), powers(x, 0, 1)
    one, thousand = (fit(columns, s * y, np.full(7, 1e-9 * s), x**2) for s in (1, 1000))
    np.testing.assert_allclose(thousand.coefficients, 1000 * one.coefficients, rtol=1e-9)
    np.testing.assert_allclose(thousand.errors, 1000 * one.errors, rtol=1e-9)


def test_operator_is_the_linear_map_of_the_fit():
    x = 1 / np.arange(2.0, 9)
    result = fit(powers(x, 0, 1), np.exp(x), np.full(7, 1e-6), x**2)
    np.testing.assert_allclose(result.operator @ np.exp(x), result.coefficients)


def test_errors_of_noisy_data_are_one_sigma():
    """Pure noise without truncation: 68 of 100 within one standard error (Gauss), tested over 400 draws."""
    random = np.random.default_rng(3)
    x = 1 / np.arange(2.0, 14)
    columns, sigma = powers(x, 0, 1), np.full(12, 1e-3)
    inside = 0
    for _ in range(400):
        result = fit(columns, columns @ [1.0, 2.0] + sigma * random.standard_normal(12), sigma, x**2)
        inside += abs(result.coefficients[0] - 1) < result.errors[0]
    # the truncation noise is never negative, so the coverage may only be larger
    assert 0.63 < inside / 400 < 0.85


def test_truncation_makes_the_error_large_where_sigma_is_tiny():
    x = 1 / np.arange(4.0, 12)
    result = fit(powers(x, 0, 1), np.exp(x), np.full(8, 1e-14), x**2)
    deviation = abs(result.coefficients[0] - 1)
    # of the order of the truncation, 11 powers of ten above sigma; its one sign is the business of the layers above
    assert result.errors[0] > 0.1 * deviation > 1e-4


def test_criterion_picks_the_right_order():
    random = np.random.default_rng(4)
    x = np.linspace(0.05, 0.5, 14)
    y = 1 + x - 2 * x**2 + 1e-4 * random.standard_normal(14)
    sigma = np.full(14, 1e-4)
    marks = [fit(powers(x, *range(k)), y, sigma, x**k).criterion for k in range(1, 7)]
    assert int(np.argmin(marks)) + 1 == 3


def test_too_few_values_are_refused():
    with pytest.raises(ValueError, match="cannot determine"):
        fit(np.ones((2, 2)), np.ones(2), np.ones(2), np.ones(2))
