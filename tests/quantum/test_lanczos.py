"""Lanczos on the effective operator of a pair: the vector returned has the energy returned, however many products."""

import numpy as np
import pytest
from spin_models import chain, heisenberg

from manybody.quantum import blocks, lanczos, two_site, variance
from manybody.quantum.problem import prepare
from manybody.quantum.sectors import start_chain


@pytest.mark.parametrize("vectors", [1, 2, 5, 16, 40])
def test_energy_belongs_to_the_vector_and_falls_with_products(vectors):
    # A constant far from zero, 30 sites, makes lost orthogonality visible at once.
    op = heisenberg(30, chain(30), 1.0)
    up = np.eye(3)[np.full(30, 2)] * ((-1.0) ** np.arange(30))[:, None]
    problem = prepare(op, up)
    state = start_chain(problem, up, 30, sharp=True)
    for _ in range(4):
        for site in range(29):
            two_site.step(state, site, 40, 1e-10, 3, 0.0)
        state.mirror()
    for site in range(14):
        state.shift(site)
        state.advance(site)
    left, right, local = state.bonds[14], state.bonds[16], state.local[14:16]
    pair = two_site.join(two_site.neighbours(state, 14))
    operator = state.pair_operator(14)
    place = operator, 14, 16, blocks.pair_charges(*local)
    first = np.vdot(pair, variance.image(state, pair, *place)) / np.vdot(pair, pair)
    energy, vector, residual, used, _ = lanczos.lowest(
        pair, state.left[14], state.right[16], left.pair, right.pair, place[3], state.arrays(operator), vectors, 0.0,
        np.empty(0),
    )  # fmt: skip
    image = variance.image(state, vector, *place)
    assert used == min(vectors, pair.size)
    assert abs(np.linalg.norm(vector) - 1) < 1e-13
    np.testing.assert_allclose(np.vdot(vector, image), energy, rtol=1e-13)
    np.testing.assert_allclose(np.linalg.norm(image - energy * vector), residual, rtol=1e-3, atol=1e-11)
    assert energy <= first + 1e-12


@pytest.mark.parametrize("size", [1, 2, 3, 7, 40])
def test_lowest_state_of_a_tridiagonal_matrix(size):
    # against numpy's dense solver, scales of the two diagonals up to eight orders apart
    rng = np.random.default_rng(size)
    for _ in range(200):
        diagonal = rng.standard_normal(size) * 10.0 ** rng.uniform(-3, 5)
        beside = rng.standard_normal(size - 1) * 10.0 ** rng.uniform(-8, 3)
        matrix = np.diag(diagonal) + np.diag(beside, 1) + np.diag(beside, -1)
        value, vector = lanczos.lowest_of_tridiagonal(diagonal, beside)
        scale = np.abs(matrix).max()
        assert abs(value - np.linalg.eigvalsh(matrix)[0]) < 1e-14 * size * scale
        assert np.linalg.norm(matrix @ vector - value * vector) < 1e-13 * size * scale


@pytest.mark.parametrize("wrong", [np.nan, np.inf, -np.inf])
def test_numbers_that_overflowed_end_too(wrong):
    for diagonal in ([1.0, wrong, 2.0], [wrong, 1.0, 2.0]):
        value, vector = lanczos.lowest_of_tridiagonal(np.array(diagonal), np.array([0.5, wrong]))
        assert not (np.isfinite(value) and np.isfinite(vector).all())
