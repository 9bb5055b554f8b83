"""Exact ground energies: published and independently computed rows, closed forms, dense Kronecker constructions."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from reference import table
from spin_models import chain, heisenberg, parts, polynomial_of_pair, reference_operator, ring

from manybody.model import couplings
from manybody.model.quantization import RULES, UndefinedQuantization, quantize
from manybody.quantum import exact
from manybody.quantum.basis import TooLarge
from manybody.quantum.exact import LARGEST_DIMENSION, estimate_exact, exact_ground_state
from manybody.quantum.operators import sparse_operator
from manybody.quantum.result import QuantumSettings

# Rows beyond exact diagonalization (32 sites and more, or 12 sites of spin 2) are left to the matrix-product tests.
TOO_LARGE = {"A032", "A033", "A035", "A036", "A037", "A039", "A112", "A194", "A195", "A204", "A206"}
# More than about half a second each.
LARGE = {"A030", "A110", "A122", "A203", "A236", "A245"}
ROWS = sorted(key for key in table() if key.startswith("A") and key not in TOO_LARGE)


@pytest.mark.parametrize("identifier", [pytest.param(r, marks=pytest.mark.slow if r in LARGE else ()) for r in ROWS])
def test_energies_of_the_reference_table(identifier):
    row = table()[identifier]
    result = exact_ground_state(reference_operator(row))
    # The table rounds to 12 decimals.
    assert abs(result.energy - row.value) <= row.uncertainty + 5e-13 + result.error
    assert result.error < 1e-10
    assert row.digits(result.energy) > 11
    assert result.status == "converged"


def test_every_energy_row_is_known_to_the_model_reader():
    for key in TOO_LARGE:
        assert estimate_exact(reference_operator(table()[key])).dimension > LARGEST_DIMENSION


@st.composite
def operators(draw, sites=(1, 4), spins=(0.5, 1.0, 1.5), conserved=None):
    """A random operator of up to 300 states: exchange matrices, antisymmetric, single-site, biquadratic terms,
    fields.
    """
    n = draw(st.integers(*sites))
    s = np.array([draw(st.sampled_from(spins)) for _ in range(n)])
    while np.prod(2 * s + 1) > 300:
        s = s[:-1]
    n = len(s)
    random = np.random.default_rng(draw(st.integers(0, 2**32 - 1)))
    conserved = draw(st.booleans()) if conserved is None else conserved
    axis = np.array([0, 0, 1.0]) if conserved else random.standard_normal(3)
    pairs = [(i, j) for i in range(n) for j in range(i) if random.random() < 0.7]
    f = couplings.field(n, range(n), random.standard_normal((n, 1)) * axis)
    f = f + couplings.anisotropy(n, range(n), axis, random.standard_normal()) + random.standard_normal()
    if pairs:
        f = f + couplings.exchange(n, pairs, random.standard_normal((len(pairs), 1, 1)))
        f = f + couplings.antisymmetric(n, pairs, random.standard_normal((len(pairs), 1)) * axis)
        f = f + couplings.biquadratic(n, pairs, random.standard_normal())
        if not conserved:
            f = f + couplings.exchange(n, pairs, random.standard_normal((len(pairs), 3, 3)))
    rule = draw(st.sampled_from(RULES))
    try:
        return quantize(f, s, rule)
    except UndefinedQuantization:
        return quantize(f, s, "substitution")


@settings(max_examples=60, deadline=None)
@given(operators())
def test_agrees_with_dense_diagonalization_of_the_whole_space(op):
    result = exact_ground_state(op)
    lowest = np.linalg.eigvalsh(sparse_operator(op).toarray())[0]
    scale = 1 + np.abs(sparse_operator(op).toarray()).sum(axis=1).max()
    assert abs(result.energy - lowest) < 1e-13 * scale
    assert result.error < 1e-12 * scale


@settings(max_examples=25, deadline=None)
@given(operators(conserved=True), st.integers(0, 2**32 - 1))
def test_energy_and_sector_do_not_depend_on_the_frame(op, seed):
    random = np.random.default_rng(seed)
    rotation = np.linalg.qr(random.standard_normal((3, 3)))[0]
    rotation *= np.linalg.det(rotation)
    straight, turned = exact_ground_state(op), exact_ground_state(op.rotated(rotation))
    assert abs(straight.energy - turned.energy) <= straight.error + turned.error
    if len(op.symmetry_axes()) == 1:
        sign = np.sign(turned.sector_axis @ rotation @ straight.sector_axis)
        np.testing.assert_allclose(sign * turned.sector_axis, rotation @ straight.sector_axis, atol=1e-9)
    assert abs(straight.energy_variance) < 1e-20 * (1 + straight.energy**2)


def test_ferromagnet_lies_in_the_polarized_sector_when_asked_for():
    op = heisenberg(6, ring(6), 1, -1.0)
    up = np.tile([0.0, 0.6, 0.8], (6, 1))
    polarized, free = exact_ground_state(op, start=up), exact_ground_state(op)
    assert polarized.sector == 6
    assert abs(polarized.energy + 6) < 1e-13 and abs(free.energy + 6) < 1e-12


def test_field_moves_the_ground_state_through_the_sectors():
    # Ring of four spins 1/2, J = 1: levels -2 (S=0), -1 (S=1), 1 (S=2), from the Casimir form; H = E - h S^z.
    for h, sector, energy in [(0.5, 0, -2.0), (1.5, 1, -2.5), (2.5, 2, -4.0)]:
        f = couplings.exchange(4, ring(4), 0.25) + couplings.field(4, range(4), [0, 0, h / 2])
        result = exact_ground_state(quantize(f, 0.5))
        assert result.sector == sector
        assert abs(result.energy - energy) < 1e-13


def test_field_across_the_axis_is_found_as_its_own_axis():
    f = couplings.exchange(4, ring(4), 0.25) + couplings.field(4, range(4), [0.75 * 0.6, 0, 0.75 * 0.8])
    result = exact_ground_state(quantize(f, 0.5))
    np.testing.assert_allclose(result.sector_axis * np.sign(result.sector), [0.6, 0, 0.8], atol=1e-12)
    assert abs(result.sector) == 1 and abs(result.energy + 2.5) < 1e-12


def test_easy_axis_ferromagnet_and_flipped_start():
    f = couplings.exchange(5, chain(5), [-1, -1, -1.5])
    down = np.tile([0, 0, -1.0], (5, 1))
    for start, sector in ((None, 2.5), (down, 2.5)):
        result = exact_ground_state(quantize(f, 0.5), start=start)
        # All spins along the axis: -1.5 per bond exactly.
        assert abs(result.energy + 6) < 1e-13 and result.sector == sector


@pytest.mark.parametrize("coarse", [0, 10**9])
@pytest.mark.parametrize("led", [False, True])
def test_search_of_large_problems_finds_the_sector(monkeypatch, coarse, led):
    # The limits of the full scan lowered, so that small chains take the way of large ones.
    monkeypatch.setattr(exact, "_SCAN_ALL", 5)
    monkeypatch.setattr(exact, "_SCAN_COARSE", coarse)
    for h in (0.0, 0.4, 0.9, 1.7, 2.6):
        f = couplings.exchange(6, ring(6), [1.0, 1.0, 0.8]) + couplings.field(6, range(6), [0, 0, h])
        op = quantize(f + couplings.anisotropy(6, [0, 3], [0, 0, 1], 0.3), 1)
        start = np.tile([np.sqrt(1 - (h / 4) ** 2), 0, h / 4], (6, 1)) if led else None
        result = exact_ground_state(op, start=start)
        whole = np.linalg.eigvalsh(sparse_operator(op).toarray())[0]
        assert abs(result.energy - whole) < 1e-11
        sectors = [np.linalg.eigvalsh(sparse_operator(op, m).toarray())[0] for m in range(-6, 7)]
        assert sectors[round(result.sector) + 6] - whole < 1e-11


def test_ferrimagnet_has_the_spin_of_lieb_and_mattis():
    # Lieb and Mattis 1962: K_{4,2} has total spin |4 - 2| / 2, star with five leaves 2.
    for sizes in ((4, 2), (1, 5)):
        n = sum(sizes)
        start = np.zeros((n, 3))
        start[:, 2] = np.repeat([1.0, -1.0], sizes)
        result = exact_ground_state(heisenberg(n, parts(*sizes), 0.5), start=start)
        assert result.sector == abs(sizes[0] - sizes[1]) / 2
    mixed = np.array([1.5, 0.5, 1.5, 0.5])
    start = np.array([[0, 0, 1.0], [0, 0, -1.0]] * 2)
    f = couplings.exchange(4, ring(4), 1.0)
    assert exact_ground_state(quantize(f, mixed), start=start).sector == 2


def test_large_spins_on_two_sites():
    # -S(S+1), addition of angular momenta.
    for spin in (10, 200, 400):
        result = exact_ground_state(quantize(couplings.exchange(2, [[0, 1]], 1.0), spin))
        assert abs(result.energy + (spin + 1) / spin) < 1e-11
    f = couplings.exchange(2, [[0, 1]], [1.0, 1.0, 0.3]) + couplings.field(2, [0, 1], [0, 0, 1.0])
    op = quantize(f, 60)
    result = exact_ground_state(op)
    sectors = [np.linalg.eigvalsh(sparse_operator(op, m).toarray())[0] for m in range(-120, 121)]
    assert abs(result.energy - min(sectors)) < 1e-12
    assert result.sector == np.argmin(sectors) - 120


def test_degenerate_ground_states_and_constants():
    # AKLT open chain, fourfold degenerate: -2/3 per bond (Affleck, Kennedy, Lieb, Tasaki 1987).
    assert abs(exact_ground_state(polynomial_of_pair(4, chain(4), 1, 1.0, 1 / 3)).energy + 2) < 1e-12
    flat = couplings.field(3, [0], [0, 0, 0.0]) + 7.25
    result = exact_ground_state(quantize(flat, 1))
    assert result.energy == 7.25 and result.status == "converged" and result.error < 1e-14


def test_couplings_of_extreme_size():
    for size in (1e-300, 1e-12, 1e300):
        f = couplings.exchange(4, ring(4), size)
        result = exact_ground_state(quantize(f, 0.5))
        assert abs(result.energy / size + 8) < 1e-11
        op = quantize(couplings.exchange(4, ring(4), np.diag([1.0, 0.4, 0.7]) * size), 1)
        reference = exact_ground_state(quantize(couplings.exchange(4, ring(4), [1.0, 0.4, 0.7]), 1)).energy
        assert abs(exact_ground_state(op).energy / size - reference) < 1e-11


def test_the_same_seed_gives_the_same_digits():
    op = heisenberg(12, ring(12), 0.5)
    first, second = exact_ground_state(op), exact_ground_state(op)
    assert first.energy == second.energy
    np.testing.assert_array_equal(first.state.vector, second.state.vector)


def test_lanczos_and_dense_agree_on_complex_operators():
    random = np.random.default_rng(5)
    f = couplings.exchange(9, ring(9), random.standard_normal((9, 3, 3)))
    op = quantize(f, 0.5)
    result = exact_ground_state(op)
    assert np.iscomplexobj(result.state.vector)
    assert abs(result.energy - np.linalg.eigvalsh(sparse_operator(op).toarray())[0]) < 1e-12
    residual = sparse_operator(op) @ result.state.to_full() - result.energy * result.state.to_full()
    assert np.linalg.norm(residual) <= result.error * 1.01


def test_too_little_memory_is_told():
    with pytest.raises(TooLarge, match="memory"):
        exact_ground_state(heisenberg(20, ring(20), 0.5), QuantumSettings(memory=2**20))


def test_start_of_the_wrong_shape():
    with pytest.raises(ValueError, match=r"\(4, 3\)"):
        exact_ground_state(heisenberg(4, ring(4), 0.5), start=np.zeros((3, 3)))


def test_memory_limit_leads_to_the_operator_without_matrix():
    op = heisenberg(18, ring(18), 0.5)
    # 20 MiB hold the Lanczos vectors of 48620 states but not the matrix.
    tight = QuantumSettings(memory=20 * 2**20)
    assert not estimate_exact(op).matrix_free and estimate_exact(op, memory=tight.memory).matrix_free
    assert abs(exact_ground_state(op).energy - exact_ground_state(op, tight).energy) < 1e-11
