"""Observables of exact states against dense vectors and direct maximization."""

import numpy as np
import pytest
from scipy.optimize import minimize
from spin_models import chain, dense_site, dense_spin, heisenberg, ring

from manybody.model import couplings
from manybody.model.quantization import quantize
from manybody.model.spin_matrices import coherent_states
from manybody.quantum.exact import exact_ground_state
from manybody.quantum.operators import sparse_operator
from manybody.quantum.result import QuantumSettings

EVERYTHING = QuantumSettings(observables=("entanglement", "moments", "correlations"))
SPINS = np.array([0.5, 1.0, 1.5, 1.0])
DIMS = [2, 3, 4, 3]


def operator(kind):
    random = np.random.default_rng(3)
    pairs = ring(4)
    if kind == "none conserved":
        f = couplings.exchange(4, pairs, random.standard_normal((4, 3, 3)))
        return quantize(f + couplings.field(4, range(4), random.standard_normal(3)), SPINS)
    f = couplings.exchange(4, pairs, [1.0, 1.0, 0.7]) + couplings.antisymmetric(4, pairs, [0, 0, 0.4])
    f = f + couplings.field(4, range(4), [0, 0, 0.6])
    if kind == "axis turned":
        rotation = np.linalg.qr(random.standard_normal((3, 3)))[0]
        f = f.rotated(rotation * np.linalg.det(rotation))
    return quantize(f, SPINS)


@pytest.fixture(params=["axis z", "axis turned", "none conserved"])
def solved(request):
    op = operator(request.param)
    energies, states = np.linalg.eigh(sparse_operator(op).toarray())
    assert energies[1] - energies[0] > 0.01
    return exact_ground_state(op, EVERYTHING).observables, states[:, 0]


def test_moments_and_correlations(solved):
    observables, psi = solved
    vectors = [[dense_site(m, i, DIMS) / s for m in dense_spin(s)] for i, s in enumerate(SPINS)]
    images = np.array([[m @ psi for m in site] for site in vectors])
    np.testing.assert_allclose(observables["moments"], np.einsum("s,ias->ia", psi.conj(), images).real, atol=1e-11)
    second = np.einsum("ias,jbs->ijab", images.conj(), images).real
    np.testing.assert_allclose(observables["correlations"], second, atol=1e-11)
    np.testing.assert_allclose(observables["moments_squared"], second[range(4), range(4)], atol=1e-11)


def test_entanglement(solved):
    observables, psi = solved
    for cut, entropy in enumerate(observables["entanglement"], start=1):
        weights = np.linalg.svd(psi.reshape(int(np.prod(DIMS[:cut])), -1), compute_uv=False) ** 2
        weights = weights[weights > 1e-20]
        assert abs(entropy + weights @ np.log(weights)) < 1e-11


def test_coherent_overlap(solved):
    observables, psi = solved

    def overlap(x):
        product = np.ones(1)
        for n, spin in zip(x.reshape(4, 3), SPINS, strict=True):
            product = np.kron(product, coherent_states(n / np.linalg.norm(n), spin))
        return -(abs(np.vdot(product, psi)) ** 2)

    random = np.random.default_rng(8)
    best = max(-minimize(overlap, random.standard_normal(12)).fun for _ in range(3))
    # Both are local searches: ours may be the better one.
    assert observables["coherent_overlap"] >= best**0.25 - 1e-6
    assert observables["coherent_overlap"] <= 1


def test_singlet_of_two_spins():
    # Two spins in a singlet: every magnetic state once, entropy log(2S+1); overlap^2 of the Neel product is 1/(2S+1).
    for spin in (0.5, 1, 2.5):
        observables = exact_ground_state(heisenberg(2, [(0, 1)], spin), EVERYTHING).observables
        np.testing.assert_allclose(observables["entanglement"], [np.log(2 * spin + 1)], atol=1e-12)
        np.testing.assert_allclose(observables["moments"], 0, atol=1e-12)
        np.testing.assert_allclose(observables["coherent_overlap"], (2 * spin + 1) ** -0.5, atol=1e-7)
        np.testing.assert_allclose(observables["correlations"][0, 1], -np.eye(3) * (spin + 1) / spin / 3, atol=1e-12)


def test_large_sector_in_chunks_agrees_with_the_sum_rule(monkeypatch):
    from manybody.quantum import observables as module

    monkeypatch.setattr(module, "_CHUNK", 1000)
    op = heisenberg(10, chain(10), 0.5)
    result = exact_ground_state(op, EVERYTHING)
    total = np.einsum("ijaa->ij", result.observables["correlations"]) / 4
    assert abs(sum(total[i, i + 1] for i in range(9)) - result.energy) < 1e-11
    # A singlet: the total spin squared is zero.
    assert abs(total.sum()) < 1e-11
