"""Both branches on one energy function: the ladder (Lieb 1973; Berezin 1972; Anderson 1951) and its parts."""

import numpy as np
import pytest
from dense import dense_operator, ground_energy, random_polynomial, seeds, spins, unit_vectors
from hypothesis import assume, given, settings
from hypothesis import strategies as st
from reference import reference

from manybody import pairing
from manybody.model.couplings import anisotropy, antisymmetric, biquadratic, exchange, field, product
from manybody.model.energy import EnergyFunction
from manybody.model.quantization import RULES, UndefinedQuantization, quantize, undefined_reason
from manybody.quantum.result import QuantumSettings

QUICK = pairing.ClassicalSettings(starts=16)


def solve(f, spin, rule, observables=()):
    asked = QuantumSettings(observables=observables)
    classical = pairing.classical_part(f, QUICK)
    harmonic = pairing.harmonic_part(f, rule, classical)
    quantum = pairing.quantum_part(f, spin, rule, asked, classical, harmonic)
    bounds = pairing.bounds_part(f, spin, rule, asked, classical, harmonic)
    return pairing.assemble(spin, classical, harmonic, quantum, bounds)


def random_model(seed, sites):
    rng = np.random.default_rng(seed)
    pairs = [(i, j) for i in range(sites) for j in range(i) if rng.random() < 0.7] or [(0, 1)]
    f = exchange(sites, pairs, rng.normal(size=(3, 3))) + field(sites, range(sites), rng.normal(size=3))
    f = f + antisymmetric(sites, pairs, rng.normal(size=3)) + anisotropy(sites, [0], rng.normal(size=3), rng.normal())
    kind = rng.integers(3)
    if kind == 1:
        f = f + biquadratic(sites, pairs, rng.normal())
    if kind == 2:
        f = f + product(sites, [[0, 1]], [random_polynomial(rng, 3), random_polynomial(rng, 2)])
    return f + float(rng.normal())


@settings(max_examples=12, deadline=None)
@given(seed=seeds, sites=st.integers(2, 3), spin=spins, rule=st.sampled_from(RULES))
def test_ladder_of_random_models(seed, sites, spin, rule):
    f = random_model(seed, sites)
    assume(undefined_reason(f, spin, rule) is None)
    record = solve(f, spin, rule)
    exact = ground_energy(dense_operator(quantize(f, spin, rule)))
    slack = 1e-9 * (1 + abs(exact) + f.largest_coefficient)
    assert record["quantum_energy"] == pytest.approx(exact, abs=slack)
    assert record["cluster_bound"] <= exact + slack
    assert record["upper_symbol_energy"] <= exact + slack
    assert exact <= record["product_energy"] + slack
    assert record["product_energy"] <= record["coherent_energy"] + slack
    assert record["classical_energy_bound"] <= record["classical_energy"] + slack
    gap = exact - record["classical_energy"]
    if rule == "toeplitz":
        assert gap >= -slack
    if rule == "wick":
        assert gap <= slack


@pytest.mark.parametrize(
    ("row", "pairs"), [("A050", [(i, i + 1) for i in range(4)]), ("A043", [(i, (i + 1) % 6) for i in range(6)])]
)
def test_energies_times_s_squared_are_those_of_the_literature(row, pairs):
    row = reference(row)
    record = solve(exchange(row.sites, pairs, 1.0), row.spin, "substitution")
    assert row.digits(record["quantum_energy"] * row.spin**2) > 10


def test_ferromagnet_has_no_gap_under_wick():
    # exact: the aligned state is an eigenstate, and wick keeps its classical energy
    record = solve(exchange(4, [(0, 1), (1, 2), (2, 3)], -1.0), 1.5, "wick")
    assert record["quantum_energy"] == pytest.approx(-3.0, abs=1e-12)
    assert record["classical_energy"] == pytest.approx(-3.0, abs=1e-12)
    assert record["harmonic_coefficient"] == pytest.approx(0.0, abs=1e-12)
    assert record["product_energy"] == pytest.approx(-3.0, abs=1e-12)


def test_symbols_of_a_dimer():
    # pair exchange under substitution, exact: upper symbol ((S+1)/S)^2 n.n', lower symbol n.n'
    record = solve(exchange(2, [(0, 1)], 1.0), 1.5, "substitution")
    assert record["coherent_energy"] == pytest.approx(-1.0, rel=1e-12)
    assert record["upper_symbol_energy"] == pytest.approx(-((2.5 / 1.5) ** 2), rel=1e-9)
    assert record["upper_symbol_certified"]
    assert record["cluster_bound"] == pytest.approx(record["quantum_energy"], rel=1e-10)


@pytest.mark.parametrize("rule", RULES)
def test_symbols_that_are_multiples_need_no_search_and_give_the_same(rule):
    f = exchange(3, [(0, 1), (1, 2), (2, 0)], [1.0, 0.7, 1.2]) + 0.4
    op = quantize(f, 1.5, rule)
    for symbol in (op.lower_symbol(), op.upper_symbol()):
        factor, shift, slack = pairing._multiple(f, symbol)
        n = unit_vectors(3, 50, 3)
        np.testing.assert_allclose(factor * f.value(n) + shift, symbol.value(n), rtol=0, atol=slack)
        assert slack < 1e-13
    # a field scales differently from exchange, except where the symbol is f itself
    both = f + field(3, [0], [0.1, 0.2, 0.3])
    same = pairing._multiple(both, quantize(both, 1.5, rule).upper_symbol()) is not None
    assert same == (rule == "toeplitz")


def test_product_state_that_is_not_coherent():
    # S = 1 with a large easy plane: the best product state is m = 0 everywhere, exactly (D > 4 J z, by hand)
    f = anisotropy(3, range(3), [0, 0, 1], 10.0) + exchange(3, [(0, 1), (1, 2)], 0.1)
    record = solve(f, 1.0, "substitution")
    assert record["product_energy"] == pytest.approx(0.0, abs=1e-10)
    assert record["coherent_energy"] > 1.0


def test_observables_stand_beside_their_classical_values():
    f = exchange(4, [(0, 1), (1, 2), (2, 3)], [1.0, 1.0, 2.0]) + field(4, [0], [0, 0, 0.5])
    record = solve(f, 2.0, "substitution", ("entanglement", "moments", "correlations"))
    n, moment = record["classical_moment"], record["quantum_moment"]
    assert n.shape == moment.shape == (4, 3) and record["quantum_correlation"].shape == (4, 4)
    assert np.all(np.sign(moment[:, 2]) == np.sign(n[:, 2])) and np.all(np.abs(moment[:, 2]) < 1)
    # <S_i.S_i>/S^2 = 1 + 1/S
    np.testing.assert_allclose(np.diag(record["quantum_correlation"]), 1.5, atol=1e-10)
    assert len(record["entanglement_entropy"]) == 3 and 0 < record["correlation_difference"] < 0.5


@pytest.mark.parametrize(
    "f",
    [
        EnergyFunction(1, 0.5),
        EnergyFunction(3, -2.0),
        field(1, [0], [0.1, 0.2, 0.3]),
        exchange(5, [(0, 1)], 1.0),
        exchange(4, [(0, 1), (2, 3)], 1.0) + field(4, [0, 1], [[0, 0, 1], [0, 0, -1]]),
        1e-300 * exchange(3, [(0, 1), (1, 2)], 1.0),
        1e300 * exchange(2, [(0, 1)], 1.0),
        1e300 * (field(2, [0, 1], [0.3, 0, 0.2]) + anisotropy(2, [0], [1, 1, 0], 0.8) + exchange(2, [(0, 1)], 1.0)),
        exchange(2, [(0, 1)], 1e-300) + anisotropy(2, [0], [0, 0, 1], 1e300),
    ],
    ids=[
        "one site",
        "constant",
        "one spin in a field",
        "lonely sites",
        "two clusters",
        "tiny",
        "huge",
        "all huge",
        "mixed",
    ],
)
def test_small_and_awkward_systems_are_finite(f):
    record = solve(f, 1.0, "toeplitz")
    for name in ("classical_energy", "quantum_energy", "product_energy", "coherent_energy", "upper_symbol_energy"):
        assert np.isfinite(record[name]), name
    assert record["classical_certified"]
    assert record["upper_symbol_energy"] <= record["quantum_energy"] * (1 + 1e-9) + 1e-300 or np.isclose(
        record["upper_symbol_energy"], record["quantum_energy"]
    )


def test_an_upper_symbol_without_exact_clusters_is_bounded_all_the_same():
    # three-site terms without symmetry: nothing minimizes them rigorously but their norms
    z, x = {(0, 0, 1): 1.0}, {(1, 0, 0): 1.0, (0, 1, 0): 0.5}
    f = product(4, [[0, 1, 2], [1, 2, 3]], [z, x, z]) + product(4, [[0, 1, 2, 3]], [x] * 4) + field(4, [0], [0, 0.3, 1])
    record = solve(f, 1.0, "substitution")
    assert record["classical_bound_method"] == "clusters_searched"
    assert record["upper_symbol_energy"] <= record["quantum_energy"]
    assert not record["upper_symbol_certified"]
    assert "norms of its terms" in record["bounds_message"]


def test_a_search_among_ties_cut_short_is_told(monkeypatch):
    from manybody.classical import harmonic

    f = exchange(4, [(i, j) for i in range(4) for j in range(i)], 1.0)
    classical = pairing.classical_part(f, QUICK)
    assert "harmonic_message" not in pairing.harmonic_part(f, "wick", classical)
    short = harmonic.SelectionSettings(evaluations=1)
    monkeypatch.setattr(harmonic, "SelectionSettings", lambda: short)
    part = pairing.harmonic_part(f, "wick", classical)
    assert part["harmonic_coefficient"] == pytest.approx(-2.0, abs=1e-9)
    assert part["harmonic_message"].startswith("only 1 of the configurations")


def test_undefined_and_unstable():
    f = exchange(2, [(0, 1)], 1.0) + anisotropy(2, [0], [0, 0, 1], 1.0)
    classical = pairing.classical_part(f, QUICK)
    with pytest.raises(UndefinedQuantization, match="rank 2"):
        pairing.quantum_part(f, 0.5, "wick", QuantumSettings(), classical, {"selected": classical["configuration"]})
    saddle = classical | {"minima": np.array([[[0, 0, 1.0], [0, 0, 1.0]]])}
    part = pairing.harmonic_part(f, "wick", saddle)
    assert part["harmonic_message"] and "harmonic_coefficient" not in part
    with pytest.raises(ValueError, match="starts"):
        pairing.ClassicalSettings(starts=0)
