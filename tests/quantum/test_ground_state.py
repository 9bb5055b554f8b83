"""One entry for all operators: clusters, constants, awkward systems, estimates."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from spin_models import chain, complete, heisenberg, ring

from manybody.model import couplings
from manybody.model.quantization import quantize
from manybody.quantum.exact import exact_ground_state
from manybody.quantum.ground_state import estimate, ground_state, without_scalars
from manybody.quantum.operators import sparse_operator
from manybody.quantum.result import QuantumSettings

EVERYTHING = QuantumSettings(observables=("entanglement", "moments", "correlations"))


@settings(max_examples=30, deadline=None)
@given(st.integers(0, 2**32 - 1), st.booleans())
def test_energies_and_sectors_of_separate_clusters_add(seed, conserved):
    random = np.random.default_rng(seed)
    n = 6
    spins = random.choice([0.5, 1.0], n)
    order = random.permutation(n)
    groups = (order[:2], order[2:5], order[5:])
    f = couplings.field(n, range(n), random.standard_normal((n, 3)) * ([0, 0, 1.0] if conserved else 1.0)) - 2.5
    for sites in groups:
        pairs = [(sites[a], sites[b]) for a, b in complete(len(sites))]
        if pairs:
            matrices = random.standard_normal((len(pairs), 1, 1)) * np.eye(3)
            f = f + couplings.exchange(n, pairs, matrices if conserved else random.standard_normal((len(pairs), 3, 3)))
    op = quantize(f, spins)
    whole = ground_state(op)
    separate = [exact_ground_state(op.restricted(sites)) for sites in groups]
    dense = np.linalg.eigvalsh(sparse_operator(op).toarray())[0]
    assert abs(whole.energy - dense) < 1e-12
    assert abs(whole.energy - sum(part.energy for part in separate) + 2.5) < 1e-12
    # The restricted clusters list their sites in another order, which changes the residuals a little.
    np.testing.assert_allclose(whole.error, sum(part.error for part in separate), rtol=0.5)
    if conserved:
        assert whole.sector == sum(part.sector for part in separate)
    else:
        assert np.isnan(whole.sector) and np.isnan(whole.sector_axis).all()


def test_observables_of_clusters_against_the_state_of_the_whole():
    spins = np.array([0.5, 1.0, 0.5, 1.0, 0.5])
    f = couplings.exchange(5, [(0, 3), (1, 4)], [[[1.0]], [[0.8]]]) + couplings.field(5, range(5), [0.5, 0.2, 0.9])
    op = quantize(f, spins)
    apart = ground_state(op, EVERYTHING)
    together = exact_ground_state(op, EVERYTHING)
    assert abs(apart.energy - together.energy) < 1e-13
    for name in ("moments", "moments_squared", "correlations"):
        np.testing.assert_allclose(apart.observables[name], together.observables[name], atol=1e-7)
    assert sorted(apart.observables["entanglement_order"]) == [0, 1, 2, 3, 4]
    # Cuts between clusters carry none; the cut inside the cluster (0, 3) is its own.
    assert list(apart.observables["entanglement_order"]) == [0, 3, 1, 4, 2]
    np.testing.assert_allclose(apart.observables["entanglement"][[1, 3]], 0.0)
    assert abs(apart.observables["coherent_overlap"] - together.observables["coherent_overlap"]) < 1e-6


def test_single_sites():
    # -h.n becomes -h.S/S: energy -|h|, the coherent state along the field.
    for spin in (0.5, 1, 7.5, 300):
        result = ground_state(quantize(couplings.field(1, [0], [1.0, 2.0, 2.0]), spin), EVERYTHING)
        assert abs(result.energy + 3) < 1e-13 and result.method == "exact"
        assert abs(result.sector) == spin
        np.testing.assert_allclose(result.observables["moments"], [[1 / 3, 2 / 3, 2 / 3]], atol=1e-12)
        np.testing.assert_allclose(result.observables["coherent_overlap"], 1.0, atol=1e-9)
        assert result.observables["entanglement"].shape == (0,)
    free = ground_state(quantize(couplings.field(1, [0], [0, 0, 0.0]) + 1.5, 2))
    assert free.energy == 1.5 and free.converged


def test_sites_without_coupling_and_scalar_terms():
    f = couplings.exchange(40, [(3, 9)], 1.0) + couplings.field(40, [20], [0, 0, 2.0])
    # A biquadratic term of spins 1/2 is a number (all ranks above 2S vanish) and must not link sites.
    f = f + couplings.biquadratic(40, ring(40), 0.3)
    op = quantize(f, 0.5)
    assert len(without_scalars(op).symbol.components()) == 39
    result = ground_state(op)
    # Dimer -S(S+1)/S^2 = -3, field -2; the square of S_i.S_j symmetrized at every site has only its scalar part here:
    # S(S+1)/3 per pair of equal components, i.e. X^2 / (3 S^4) = 3 with X = S(S+1) = 3/4.
    assert abs(result.energy - (-3 - 2 + 40 * 0.3 * 3.0)) < 1e-11
    assert result.method == "exact" and result.converged


def test_start_chooses_among_degenerate_sectors():
    up = np.tile([0.0, 0.0, 1.0], (6, 1))
    f = couplings.exchange(6, [(0, 1), (1, 2), (3, 4), (4, 5)], -1.0)
    result = ground_state(quantize(f, 0.5), start=up)
    assert result.sector == 3 and abs(result.energy + 4) < 1e-12


def test_three_spin_chain_with_exact_state():
    # Ground doublet of three spins 1/2: <S_0.S_1> = -1/2, <S_0.S_2> = 1/4; the middle moment -1/3, the outer ones 2/3.
    result = ground_state(
        heisenberg(3, chain(3), 0.5), EVERYTHING, start=np.array([[0, 0, 1.0], [0, 0, -1], [0, 0, 1]])
    )
    total = np.einsum("ijaa->ij", result.observables["correlations"])
    np.testing.assert_allclose(total, [[3, -2, 1], [-2, 3, -2], [1, -2, 3]], atol=1e-12)
    np.testing.assert_allclose(result.observables["moments"][:, 2], [2 / 3, -1 / 3, 2 / 3], atol=1e-12)
    # Schmidt weights 5/6 and 1/6 at both cuts, in the state of S^z = 1/2.
    entropy = -(5 / 6 * np.log(5 / 6) + 1 / 6 * np.log(1 / 6))
    np.testing.assert_allclose(result.observables["entanglement"], entropy, atol=1e-12)


def test_estimate_adds_clusters_and_refuses_what_is_too_large():
    one = estimate(heisenberg(12, ring(12), 0.5))
    two = estimate(
        heisenberg(25, [(i, (i + 1) % 12) for i in range(12)] + [(12 + i, 12 + (i + 1) % 13) for i in range(13)], 0.5)
    )
    assert one.dimension == 924 and two.dimension == 1716
    assert two.seconds > one.seconds and two.bytes > one.bytes
    assert estimate(heisenberg(64, ring(64), 0.5)).seconds == np.inf
    assert np.isfinite(estimate(quantize(couplings.exchange(2, [[0, 1]], [1.0, 0.5, 0.2]), 300)).seconds)


@pytest.mark.slow
def test_estimate_of_time_and_memory():
    import time
    import tracemalloc

    op = heisenberg(20, ring(20), 0.5)
    guess = estimate(op)
    begun = time.perf_counter()
    ground_state(op)
    taken = time.perf_counter() - begun
    assert guess.seconds / 10 < taken < guess.seconds * 10
    tracemalloc.start()
    ground_state(op)
    peak = tracemalloc.get_traced_memory()[1]
    tracemalloc.stop()
    assert peak < 1.5 * guess.bytes


def test_wrong_start():
    with pytest.raises(ValueError, match=r"\(3, 3\)"):
        ground_state(heisenberg(3, ring(3), 0.5), start=np.zeros((2, 3)))
