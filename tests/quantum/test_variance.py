"""Energies, variances and single steps of the sweeps against dense linear algebra."""

import sys

import numpy as np
import pytest
from dense import dense_operator, seeds
from hypothesis import given, settings
from hypothesis import strategies as st
from random_operators import random_operator
from spin_models import chain, complete, heisenberg

from manybody.model import couplings
from manybody.model.quantization import quantize
from manybody.quantum import expansion, matrix_product_state, one_site, spin_flip, two_site, variance
from manybody.quantum.chain import Bond
from manybody.quantum.problem import prepare
from manybody.quantum.sectors import start_chain


def started(op, seed, total=None, sweeps=1, bond=6):
    """A chain of few states after a rough sweep, and its problem."""
    rng = np.random.default_rng(seed)
    n = rng.standard_normal((op.sites, 3))
    n /= np.linalg.norm(n, axis=1, keepdims=True)
    problem = prepare(op, n)
    if problem.conserved:
        total = round(problem.spins.sum() + 0.25) if total is None else total
    chain_ = start_chain(problem, problem.directions(n), total or 0)
    for _ in range(sweeps):
        for site in range(chain_.length - 1):
            two_site.step(chain_, site, bond, 0.0, 2, 0.0)
        chain_.mirror()
    return problem, chain_, rng


def dense_state(problem, chain_):
    """Vector in the frame of the operator, site 0 slowest."""
    state = matrix_product_state.of_chain(chain_, problem.order, problem.operator.spins, problem.frames)
    vector = np.ones((1, 1), complex)
    for position in range(state.sites):
        array = state.site_array(position)
        vector = np.einsum("xl,lrs->xsr", vector, array).reshape(-1, array.shape[1])
    spins = problem.operator.spins[problem.order]
    shape = [round(2 * s) + 1 for s in spins]
    return vector.reshape(shape).transpose(np.argsort(problem.order)).reshape(-1)


@settings(max_examples=15, deadline=None)
@given(seeds, st.booleans())
def test_energy_of_the_state_is_that_of_its_vector(seed, conserved):
    op = random_operator(np.random.default_rng(seed), conserved)
    problem, chain_, _ = started(op, seed)
    energy, _ = variance.measure(chain_)
    psi = dense_state(problem, chain_)
    assert abs(np.linalg.norm(psi) - 1) < 1e-12
    matrix = dense_operator(op)
    np.testing.assert_allclose(np.vdot(psi, matrix @ psi).real, energy + problem.constant, atol=1e-10 * problem.norm)


@pytest.mark.parametrize(("n", "spin", "bond"), [(8, 0.5, 4), (5, 1.0, 6), (4, 2.5, 9)])
@pytest.mark.parametrize("conserved", [True, False])
def test_variance_is_exact_for_neighbouring_terms(n, spin, bond, conserved):
    f = couplings.exchange(n, chain(n), 1.0)
    if not conserved:
        f = couplings.exchange(n, chain(n), [1.0, 0.7, 1.3]) + couplings.field(n, range(n), [0.2, 0.3, 0.4])
    op = quantize(f, spin)
    problem, chain_, _ = started(op, 3, sweeps=2, bond=bond)
    energy, spread = variance.measure(chain_)
    psi = dense_state(problem, chain_)
    residual = dense_operator(op) @ psi - (energy + problem.constant) * psi
    assert spread > 1e-6
    np.testing.assert_allclose(spread, np.linalg.norm(residual) ** 2, rtol=1e-8)


def test_variance_is_a_lower_estimate_for_longer_range():
    op = heisenberg(7, complete(7), 0.5, np.random.default_rng(0).standard_normal(21))
    problem, chain_, _ = started(op, 1, bond=3)
    energy, spread = variance.measure(chain_)
    psi = dense_state(problem, chain_)
    true = np.linalg.norm(dense_operator(op) @ psi - (energy + problem.constant) * psi) ** 2
    assert 0.3 * true < spread <= true * (1 + 1e-10)


def expand(chain_, site, most, seed):
    """Enlarge the bond after the centre by half and nothing else."""
    residual = variance.two_site_residual(chain_, site)
    centre, turned, charges, dims, outside, _ = expansion.enlarge(residual, 0.5, most, seed)
    chain_.bonds[site + 1] = Bond(charges, dims)
    chain_.put(site, centre)
    chain_.tensors[site + 1], chain_.turned[site + 1] = turned, True
    chain_.right[site + 1] = outside


def test_expansion_leaves_the_state_and_helps_the_energy():
    op = heisenberg(10, chain(10), 1.0)
    problem, chain_, _ = started(op, 2, sweeps=2, bond=5)
    before = dense_state(problem, chain_)
    problem, chain_, _ = started(op, 2, sweeps=2, bond=5)
    bond = chain_.bonds[1].dimension
    expand(chain_, 0, 100, 3)
    assert chain_.bonds[1].dimension > bond
    after = dense_state(problem, chain_)
    assert abs(abs(np.vdot(before, after)) - 1) < 1e-12
    # No more than allowed: at the limit nothing is added, and the state still is the same.
    bond = chain_.bonds[1].dimension
    expand(chain_, 0, bond - 2, 4)
    assert chain_.bonds[1].dimension == bond
    assert abs(abs(np.vdot(before, dense_state(problem, chain_))) - 1) < 1e-12
    # One-site sweeps cannot leave the bonds they were given; with expansion they reach the ground state.
    problem, chain_, _ = started(op, 2, sweeps=2, bond=5)
    for sweep in range(10):
        for site in range(chain_.length - 1):
            energy, _ = one_site.step(chain_, site, 0.5, 200, 10 * sweep + site, 150, 1e-14, 4, 1e-12)
        chain_.mirror()
    exact = -12.894560132211  # reference row A055
    assert abs(energy + problem.constant - exact) < 1e-8


def test_a_neel_state_is_left_by_both_kinds_of_step():
    n, spin = 8, 2.0
    op = heisenberg(n, chain(n), spin)
    up = np.eye(3)[np.full(n, 2)] * ((-1.0) ** np.arange(n))[:, None]
    for pairs in (True, False):
        problem = prepare(op, up)
        chain_ = start_chain(problem, up, round(problem.spins.sum()), sharp=True)
        assert chain_.bond_dimension == 1
        for sweep in range(12):
            for site in range(n - 1):
                if pairs:
                    energy, _ = two_site.step(chain_, site, 60, 1e-12, 6, 1e-12)
                else:
                    energy, _ = one_site.step(chain_, site, 0.5, 80, n * sweep + site, 60, 1e-12, 6, 1e-12)
            chain_.mirror()
        # Anderson's bound per bond lies below, the Neel energy -S^2 (n - 1) far above.
        assert energy < -1.13 * spin**2 * (n - 1)


def test_spin_flip_parts_against_the_dense_operation():
    op = heisenberg(6, chain(6), 1.0)
    problem, chain_, _ = started(op, 5, total=6, sweeps=1, bond=5)
    if chain_.reverse:
        variance.measure(chain_)
    psi = dense_state(problem, chain_)
    # A turn by pi about x maps m to -m at every site, up to one common phase.
    turned = psi.reshape([3] * 6)[(slice(None, None, -1),) * 6].reshape(-1)
    assert abs(spin_flip.overlap(chain_) - np.vdot(psi, turned).real) < 1e-12
    for sign in (1.0, -1.0):
        part = spin_flip.parity_part(chain_, sign, 100, 0.0)
        ours = dense_state(problem, part)
        wanted = psi + sign * turned
        assert abs(abs(np.vdot(ours, wanted)) - np.linalg.norm(wanted)) < 1e-10


@settings(max_examples=12, deadline=None)
@given(seeds, st.booleans())
def test_expansion_returns_the_environment_of_the_larger_bond(seed, conserved):
    op = random_operator(np.random.default_rng(seed), conserved)
    _, chain_, _ = started(op, seed, bond=3)
    for site in range(chain_.length - 1):
        expand(chain_, site, 30, site)
        found = chain_.right[site + 1]
        # Advancing from the other end computes it from the tensors alone.
        chain_.mirror()
        place = chain_.length - 2 - site
        chain_.advance(place)
        own = chain_.left[place + 1]
        chain_.mirror()
        chain_.right[site + 1] = found
        np.testing.assert_allclose(found, own, atol=1e-12 * max(1.0, np.abs(own).max()))
        one_site.step(chain_, site, 0.5, 30, site, 20, 1e-12, 3, 0.0)


@pytest.mark.parametrize("kind", [two_site, one_site])
def test_a_step_on_what_is_no_number_says_so_and_gives_its_memory_back(kind):
    _, chain_, _ = started(heisenberg(6, chain(6), 1.0), 3)
    chain_.scratch.array = np.empty(100_000)
    chain_.put(0, np.full_like(chain_.tensor(0), np.nan))
    given = (0.5, 20, 1) if kind is one_site else ()
    references = sys.getrefcount(chain_.scratch.array)
    told = []
    for _ in range(3):
        try:
            kind.step(chain_, 0, *given, 20, 1e-12, 3, 0.0)
        except FloatingPointError as error:
            told.append(str(error))
    # An assertion would keep the array itself: hence the number.
    left_over = sys.getrefcount(chain_.scratch.array) - references
    assert len(told) == 3 and all("sites 0 and 1" in text for text in told) and left_over == 0
