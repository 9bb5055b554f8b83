"""Best product states against closed forms and direct minimization over all vectors."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.optimize import minimize
from spin_models import chain, complete, heisenberg, ring, torus

from manybody.model import couplings
from manybody.model.quantization import RULES, UndefinedQuantization, quantize
from manybody.quantum.operators import sparse_operator
from manybody.quantum.product_state import _MeanField, _starts, product_energy


def energy_of(op, amplitudes):
    state = np.ones(1)
    for vector in amplitudes:
        state = np.kron(state, vector)
    return np.vdot(state, sparse_operator(op) @ state).real


@settings(max_examples=8, deadline=None)
@given(st.integers(0, 2**32 - 1), st.sampled_from(RULES))
def test_against_minimization_over_all_vectors(seed, rule):
    random = np.random.default_rng(seed)
    spins = random.choice([0.5, 1.0, 1.5], 3)
    f = couplings.exchange(3, complete(3), random.standard_normal((3, 3, 3)))
    f = f + couplings.anisotropy(3, range(3), random.standard_normal(3), random.standard_normal())
    f = f + couplings.biquadratic(3, [(0, 1)], random.standard_normal())
    f = f + couplings.product(3, [(0, 1, 2)], [{(1, 0, 0): 0.5}, {(0, 1, 0): 1.0}, {(0, 0, 1): 1.0}])
    try:
        op = quantize(f, spins, rule)
    except UndefinedQuantization:
        return
    matrix = sparse_operator(op).toarray()
    dims = [round(2 * s) + 1 for s in spins]

    def objective(x):
        state, at = np.ones(1), 0
        for d in dims:
            vector = x[at : at + d] + 1j * x[at + d : at + 2 * d]
            state, at = np.kron(state, vector / np.linalg.norm(vector)), at + 2 * d
        return np.vdot(state, matrix @ state).real

    direct = min(minimize(objective, random.standard_normal(2 * sum(dims))).fun for _ in range(2))
    found = product_energy(op)
    assert found.converged
    assert found.energy <= direct + 1e-8
    assert abs(energy_of(op, found.amplitudes) - found.energy) < 1e-11
    assert all(abs(np.linalg.norm(vector) - 1) < 1e-12 for vector in found.amplitudes)


def test_easy_plane_spin_one_is_not_coherent():
    # D (S^z)^2 at S = 1, D >> J: every site in m = 0, energy 0; a coherent product pays at least D/2 a site.
    f = couplings.exchange(6, ring(6), 1.0) + couplings.anisotropy(6, range(6), [0, 0, 1], 10.0)
    found = product_energy(quantize(f, 1))
    assert abs(found.energy) < 1e-12 and found.converged
    for vector in found.amplitudes:
        np.testing.assert_allclose(np.abs(vector), [0, 1, 0], atol=1e-6)
    # Mean field in the ordered phase: state a (|+> + |->) + b |0> with moment 2 a b sqrt(2) along a, a^2 = (1 - D/(4
    # z J')) / 4 per site energy D w - z J w (1 - w) 2 ... minimized over the weight w of m = +-1: e = D w - 4 J w (1
    # - w), z = 2.
    for d in (0.5, 2.0, 3.9):
        f = couplings.exchange(6, ring(6), 1.0) + couplings.anisotropy(6, range(6), [0, 0, 1], d)
        weights = np.linspace(0, 1, 200001)
        expected = 6 * np.min(d * weights - 4 * weights * (1 - weights))
        assert abs(product_energy(quantize(f, 1)).energy - expected) < 1e-8


@pytest.mark.parametrize("spin", [0.5, 1, 10])
def test_pair_exchange_gives_the_classical_energy(spin):
    # With ranks up to 1 only, the best product state is coherent and `substitution` has lower symbol f.
    found = product_energy(heisenberg(16, torus(4, 4, [(1, 0), (0, 1)]), spin))
    assert abs(found.energy / spin**2 + 32) < 1e-9 and found.converged
    # Triangle: -3/2.
    assert abs(product_energy(heisenberg(3, ring(3), spin)).energy / spin**2 + 1.5) < 1e-10


def test_energy_never_rises():
    random = np.random.default_rng(4)
    f = couplings.exchange(8, complete(8), random.standard_normal((28, 3, 3)))
    f = f + couplings.anisotropy(8, range(8), [1.0, 0, 1.0], 0.7) + couplings.biquadratic(8, ring(8), -0.6)
    op = quantize(f, random.choice([0.5, 1.0, 2.0], 8))
    field = _MeanField(op)
    amplitudes = _starts(op, field, None, 1, 10)
    values = field.expectations(amplitudes)
    energy = field.energy(values)
    for _ in range(15):
        gain = field.sweep(amplitudes, values)
        new = field.energy(values)
        assert (new <= energy + 1e-12).all()
        np.testing.assert_allclose(energy - new, gain, atol=1e-11)
        energy = new


def test_gradient_against_differences():
    random = np.random.default_rng(4)
    f = couplings.exchange(4, ring(4), random.standard_normal((4, 3, 3))) + couplings.anisotropy(
        4, [0, 2], [1.0, 2.0, 0], 0.7
    )
    field = _MeanField(quantize(f, [0.5, 1, 1.5, 1]))
    x = random.standard_normal(2 * (2 + 3 + 4 + 3))
    _, gradient = field.value_and_gradient(x)
    step = 1e-6
    for k in range(len(x)):
        d = np.zeros(len(x))
        d[k] = step
        slope = (field.value_and_gradient(x + d)[0] - field.value_and_gradient(x - d)[0]) / (2 * step)
        assert abs(slope - gradient[k]) < 1e-8


def test_start_is_never_made_worse_and_repeats():
    random = np.random.default_rng(2)
    f = couplings.exchange(6, chain(6), 1.0) + couplings.anisotropy(6, range(6), [0, 0, 1], -0.2)
    op = quantize(f, 1.5)
    start = random.standard_normal((6, 3))
    start /= np.linalg.norm(start, axis=1, keepdims=True)
    found = product_energy(op, start, random_starts=0)
    assert found.energy <= op.lower_symbol().value(start)
    assert product_energy(op, start).energy == product_energy(op, start).energy


def test_hundreds_of_sites():
    n = 200
    op = quantize(couplings.exchange(n, ring(n), 1.0) + couplings.exchange(n, ring(n, 7), 0.3), 2)
    found = product_energy(op, np.array([[0, 0, (-1.0) ** i] for i in range(n)]), random_starts=4)
    assert found.converged and abs(found.energy + 260) < 1e-8


@pytest.mark.slow
def test_hundreds_of_sites_of_large_spin_with_anisotropy():
    n = 200
    f = couplings.exchange(n, ring(n), 1.0) + couplings.anisotropy(n, range(n), [0, 0, 1], 0.3)
    found = product_energy(quantize(f, 10), random_starts=4)
    assert found.converged


def test_constants_and_free_sites():
    op = quantize(couplings.field(3, [1], [0, 3.0, 4.0]) + 2.0, [0.5, 1, 2])
    found = product_energy(op)
    assert abs(found.energy + 3) < 1e-12 and found.converged
    assert product_energy(quantize(couplings.field(2, [0], [0, 0, 0.0]) + 2.0, 1)).energy == 2.0
    with pytest.raises(ValueError, match=r"\(R, 3, 3\)"):
        product_energy(op, np.zeros((4, 3)))
