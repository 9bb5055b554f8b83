"""Branch and bound over two or three vectors."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from manybody.classical import small_clusters
from manybody.classical.clusters import cluster_sum, norm_bound
from manybody.classical.minimize import minimize
from manybody.classical.small_clusters import can_be_bounded, lower_bound
from manybody.classical.sphere_product import random_points
from manybody.model.couplings import anisotropy, biquadratic, exchange, field, product

PAIR = [[0, 1]]
TRIANGLE = [[0, 1], [1, 2], [0, 2]]


def tied(f):
    found = minimize(f)
    return found.energy, np.array([m.configuration for m in found.minima if m.energy < found.energy + 1e-9])


EXACT = {
    # Neel 1936, easy axis in a field, the pair share of rows D064 and D065
    "easy axis": (
        exchange(2, PAIR, 1.0) + anisotropy(2, [0, 1], [0, 0, 1], -0.25) + field(2, [0, 1], [0, 0, 0.5]),
        -1.5,
    ),
    "spin flop": (
        exchange(2, PAIR, 1.0) + anisotropy(2, [0, 1], [0, 0, 1], -0.25) + field(2, [0, 1], [0, 0, 1]),
        -5 / 3,
    ),
    # every bond at 120 degrees
    "triangle": (exchange(3, TRIANGLE, 1.0) + biquadratic(3, TRIANGLE, 0.05), 3 * (-0.5 + 0.05 / 4)),
}


@settings(max_examples=15, deadline=None)
@given(st.integers(0, 2**32 - 1))
def test_norms_of_the_terms_bound_from_below(seed):
    generator = np.random.default_rng(seed)
    powers = [{(1, 0, 0): generator.normal(), (0, 0, 2): generator.normal()} for _ in range(3)]
    f = product(3, [[0, 1, 2]], powers) + anisotropy(3, [1], [0, 0, 1], generator.normal()) + generator.normal()
    assert norm_bound(f) <= f.value(random_points(generator, 3, (5000,))).min()
    # one term alone at its own minimum, in any unit
    for size in (1e-300, 1.0, 1e300):
        assert norm_bound(field(1, [0], [0, 0.6 * size, 0.8 * size])) == pytest.approx(-size, rel=1e-11, abs=0)


@pytest.mark.parametrize("name", EXACT)
def test_exact_minima_are_reached(name):
    f, exact = EXACT[name]
    energy, minima = tied(f)
    assert energy == pytest.approx(exact, abs=1e-12)
    assert exact - 2e-9 <= lower_bound(f, minima) <= exact


@settings(max_examples=8, deadline=None)
@given(st.integers(0, 2**32 - 1))
def test_random_pairs_are_bounded(seed):
    generator = np.random.default_rng(seed)
    f = exchange(2, PAIR, generator.standard_normal((1, 3, 3))) + biquadratic(2, PAIR, generator.standard_normal())
    f += field(2, [0, 1], generator.standard_normal((2, 3)))
    energy, minima = tied(f)
    bound = lower_bound(f, minima, 100_000)
    assert bound <= energy
    assert bound <= f.value(random_points(generator, 2, (2000,))).min()
    # even a search that is cut short says something
    assert lower_bound(f, minima, 3000) <= bound + 1e-12


def test_a_missed_minimum_is_not_hidden():
    """Handed only a local minimum, the bound still lies below the global one."""
    f = exchange(2, PAIR, -1.0) + anisotropy(2, [0, 1], [0, 0, 1], -1.0) + field(2, [0, 1], [0, 0, 0.1])
    up = np.tile([0.0, 0.0, 1.0], (2, 1))
    assert f.value(-up) == pytest.approx(-2.8)
    assert lower_bound(f, -up[None]) <= f.value(up) == pytest.approx(-3.2)


def test_the_stretch_of_the_cubed_sphere():
    """No step in the coordinates of a face is longer on the sphere than STRETCH says."""
    u = np.linspace(-np.pi / 4, np.pi / 4, 61)
    xi, eta = np.meshgrid(u, u)
    cut = small_clusters._Slice(("sphere",), np.array([0, 0, 1.0]), np.array([1.0, 0, 0]))

    def points(a, b):
        zero = np.zeros(a.size)
        return small_clusters._points(cut, np.stack([zero, a.ravel(), b.ravel(), zero, zero], axis=1))[:, 0]

    step = 1e-6
    one = (points(xi + step, eta) - points(xi - step, eta)) / (2 * step)
    two = (points(xi, eta + step) - points(xi, eta - step)) / (2 * step)
    metric = np.einsum("ira,jra->rij", np.array([one, two]), np.array([one, two]))
    assert np.linalg.eigvalsh(metric)[:, 1].max() <= small_clusters.STRETCH**2


def test_what_is_too_large():
    generator = np.random.default_rng(0)
    assert can_be_bounded(exchange(2, PAIR, generator.standard_normal((1, 3, 3))))
    assert can_be_bounded(biquadratic(3, TRIANGLE, 1.0))
    assert not can_be_bounded(exchange(3, TRIANGLE, generator.standard_normal((3, 3, 3))))


def test_cluster_sum_shares_every_term_exactly():
    """Open chain, bilinear-biquadratic: all bonds can be at their own minimum, so the sum of bond minima is exact."""
    pairs = [[k, k + 1] for k in range(5)]
    f = exchange(6, pairs, 1.0) + biquadratic(6, pairs, 0.8) + 3.0
    found = cluster_sum(f)
    assert found.rigorous
    # minimum of x + 0.8 x^2 at x = -1/1.6
    assert found.bound == pytest.approx(3.0 - 5 / 3.2, abs=1e-10)


def test_cluster_sum_takes_the_better_covering():
    """Complete graph of four sites: six bonds give -6; four triangles that share every bond in halves give -3; the
    minimum is -2.
    """
    pairs = [[0, 1], [0, 2], [0, 3], [1, 2], [1, 3], [2, 3]]
    found = cluster_sum(exchange(4, pairs, 1.0))
    assert found.kind == "triangles"
    assert found.rigorous
    assert found.bound == pytest.approx(-3.0, abs=1e-9)


def test_three_site_terms():
    z = {(0, 0, 1): 1.0}
    f = product(3, [[0, 1, 2]], [z] * 3)
    assert cluster_sum(f).bound == pytest.approx(-1.0, abs=1e-9)
