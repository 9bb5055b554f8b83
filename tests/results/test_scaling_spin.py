"""Gaps against spin: exact multiplets, and predictions beyond the data against exact diagonalization."""

import functools

import numpy as np
import pytest
from reference import reference
from solvable import KAPPA, PAIR_FACTOR, chain_pairs, classical_ring, first_coefficient, heisenberg, planar, ring_pairs

from manybody.results.scaling_spin import fit_spins, half_integer

SPINS = np.arange(1, 11) / 2
SMALL = np.full(10, 1e-10)


def test_complete_bipartite_gap_is_its_first_term():
    """K_{m,n}: E = -nS(mS+1), m >= n (Lieb and Mattis 1962), so gap = -n/S exactly under wick."""
    result = fit_spins(SPINS[:4], -3 / SPINS[:4], SMALL[:4], 12.0, first=-3.0)
    np.testing.assert_allclose(result.coefficients[:, :2], [[-3, 0]] * 2, atol=1e-8)
    value, error = result.predict([10.0])
    assert value == pytest.approx(-0.3, abs=1e-9) and error < 1e-8


def test_odd_cluster_has_its_extra_term_for_half_integer_spin():
    """Triangle: +3/8 S^0 for half-integer spin in spin normalization (row G017 of the reference values)."""
    extra = reference("G017").value
    gap = -1.5 / SPINS + np.where(half_integer(SPINS), extra / SPINS**2, 0)
    result = fit_spins(SPINS[:4], gap[:4], SMALL[:4], 1.5, first=-1.5, odd_sites=True)
    assert result.parity
    np.testing.assert_allclose(result.coefficients[:, 1], [0, extra], atol=1e-7)
    np.testing.assert_allclose(result.predict(SPINS[4:])[0], gap[4:], atol=1e-8)


def test_even_clusters_find_a_parity_term_only_if_it_is_there():
    plain = -2 / SPINS - 0.1 / SPINS**2
    split = plain + np.where(half_integer(SPINS), 0.2 / SPINS**2, 0)
    assert not fit_spins(SPINS, plain, SMALL, 4.0, first=-2.0).parity
    assert fit_spins(SPINS, split, SMALL, 4.0, first=-2.0).parity


def test_an_odd_cluster_of_one_class_says_nothing_about_the_other():
    result = fit_spins(np.array([1.0, 2, 3]), -1.5 / np.array([1.0, 2, 3]), SMALL[:3], 1.5, first=-1.5, odd_sites=True)
    assert np.isfinite(result.predict([4.0])[0]).all() and np.isnan(result.predict([4.5])[0]).all()


def test_first_coefficient_is_fitted_where_unknown_and_checked_where_known():
    gap = -2 / SPINS + 0.3 / SPINS**2 - 0.05 / SPINS**3
    unknown, known = (fit_spins(SPINS, gap, SMALL, 4.0, first=f) for f in (None, -2.0))
    assert not unknown.first_known and known.first_known
    assert unknown.coefficients[0, 0] == pytest.approx(-2, abs=1e-4)
    assert abs(known.first_free + 2) < 4 * known.first_free_error + 1e-6
    wrong = fit_spins(SPINS, gap, SMALL, 4.0, first=-1.5)
    assert abs(wrong.first_free + 1.5) > 4 * wrong.first_free_error


def test_a_first_coefficient_with_an_error_is_one_more_datum():
    gap = -2 / SPINS + 0.3 / SPINS**2
    noisy = np.full(10, 2e-3)
    data = gap + noisy / 2
    exact, sharp, vague, free = (
        fit_spins(SPINS, data, noisy, 4.0, first=first, first_error=error)
        for first, error in ((-2.0, 0.0), (-2.0, 1e-9), (-2.3, 10.0), (None, 0.0))
    )
    np.testing.assert_allclose(sharp.coefficients, exact.coefficients, atol=1e-6)
    np.testing.assert_allclose(vague.coefficients, free.coefficients, atol=1e-3)
    wrong = fit_spins(SPINS, data, noisy, 4.0, first=-2.001, first_error=1e-3)
    error = np.sqrt(wrong.covariance[0, 0, 0])
    assert wrong.first_known and abs(wrong.coefficients[0, 0] + 2) < error < 3e-3
    assert np.sqrt(sharp.covariance[0, 0, 0]) < 1e-8


def test_statistical_errors_are_propagated():
    random = np.random.default_rng(5)
    truth = -2 / SPINS + 0.3 / SPINS**2
    inside = []
    for _ in range(60):
        error = np.full(10, 0.02)
        # the datum lies above the truth by a part of its one-sided error
        result = fit_spins(SPINS, truth + random.uniform(0, 1, 10) * error, error, 4.0, first=-2.0)
        value, deviation = result.predict([8.0])
        inside.append(abs(value[0] - (-2 / 8 + 0.3 / 64)) < 2 * deviation[0])
    assert np.mean(inside) > 0.9


def test_too_few_spins_give_no_fit():
    assert fit_spins(np.array([0.5]), np.array([-1.0]), np.array([0.0]), 1.0, first=-1.0) is None
    assert fit_spins(np.array([0.5, 1.0]), np.array([-1.0, np.nan]), np.zeros(2), 1.0, first=-1.0) is None


@functools.cache
def exact(kind, sites):
    """(spins, gaps under wick, f_min, vectors) by exact diagonalization, as many spins as are cheap."""
    pairs = ring_pairs(sites) if kind == "ring" else chain_pairs(sites)
    vectors = classical_ring(sites)[1] if kind == "ring" else planar(np.pi * np.arange(sites))
    minimum = sum(vectors[i] @ vectors[j] for i, j in pairs)
    most = {3: 12, 4: 10, 5: 7, 6: 5}[sites]
    spins = np.arange(1, most + 1) / 2
    energies = np.array([heisenberg(s, pairs, sites) for s in spins]) / spins**2
    return spins, energies, minimum, vectors, pairs


def test_predictions_beyond_the_data_are_honest_and_useful():
    """Fits to the smallest spins against exact energies at larger ones: 95 of 100 within two standard errors."""
    ratios = []
    for kind, sites in (("ring", 3), ("ring", 4), ("ring", 5), ("ring", 6), ("chain", 4), ("chain", 5), ("chain", 6)):
        spins, energies, minimum, vectors, pairs = exact(kind, sites)
        for rule in ("wick", "weyl", "toeplitz"):
            gap = energies * PAIR_FACTOR[rule](spins) - minimum
            first = first_coefficient(vectors, pairs, KAPPA[rule])
            for last in range(3, len(spins)):
                for known in (first, None):
                    # 1e-8: what the closed form of e_1 above is good for
                    error = np.full(last, 2e-8)
                    odd = kind == "ring" and sites % 2 == 1
                    result = fit_spins(spins[:last], gap[:last], error, abs(minimum), known, odd, rule)
                    value, deviation = result.predict(spins[last:])
                    ratios += (np.abs(value - gap[last:]) / deviation).tolist()
    ratios = np.array(ratios)
    assert len(ratios) > 500
    assert np.mean(ratios < 2) > 0.95
    assert np.median(1 / np.maximum(ratios, 1e-3)) < 10
