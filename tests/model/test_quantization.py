"""The quantization facts of Lieb 1973, Berezin 1972 and 1975, and the check values whose ids begin with E."""

import re

import numpy as np
import pytest
from dense import (
    dense_operator,
    ground_energy,
    polynomial_value,
    random_polynomial,
    seeds,
    spins,
    toeplitz_by_quadrature,
    unit_vectors,
)
from hypothesis import assume, given, settings
from hypothesis import strategies as st
from reference import reference, table

from manybody.model.couplings import anisotropy, biquadratic, exchange, field, product, site_function
from manybody.model.quantization import (
    RULES,
    SpinOperator,
    UndefinedQuantization,
    berezin_factor,
    lower_symbol_correction,
    quantize,
    substitution_factor,
    undefined_reason,
)
from manybody.model.spin_matrices import coherent_states, harmonic_operators, spin_matrices

ROWS = {key: row for key, row in table().items() if key.startswith("E")}


FACTORS = ("lower-symbol factor", "upper-symbol factor", "Stratonovich-Weyl factor", "Berezin")


def one_site(polynomial):
    return product(1, [[0]], [polynomial])


def matrix(polynomial, spin, rule="toeplitz"):
    return dense_operator(quantize(one_site(polynomial), spin, rule))


def rows(start):
    return [pytest.param(row, id=row.id) for row in ROWS.values() if row.quantity.startswith(start)]


def close(row, computed):
    assert computed == pytest.approx(row.value, rel=2e-11, abs=2e-11), (
        f"{row.id}: {row.digits(computed):.1f} digits, {row.source}"
    )


# Check values


@pytest.mark.parametrize("row", rows(FACTORS))
def test_factors(row):
    rank, spin = int(re.search(r"k=(\d)", row.model)[1]), row.spin
    substitution = substitution_factor(rank, rank, spin) * spin**rank  # Y_k(S) = w_k W_k
    b = berezin_factor(rank, spin)
    computed = {
        "lower-symbol factor l_k": substitution * np.sqrt(b),
        "upper-symbol factor u_k": substitution / np.sqrt(b) if b else np.nan,
        "Stratonovich-Weyl factor w_k": substitution,
        "Berezin-transform eigenvalue lambda_k": b,
    }
    close(row, computed[row.quantity])


@pytest.mark.parametrize("row", rows("diagonal matrix element"))
def test_moments_of_nz(row):
    power, m = int(re.search(r"n_z\^(\d)", row.model)[1]), float(re.search(r"m=([\d.]+)", row.model)[1])
    index = round(row.spin - m)
    close(row, matrix({(0, 0, power): 1.0}, row.spin)[index, index].real)


@pytest.mark.parametrize("row", rows("eigenvalue of "))
def test_two_site_biquadratic(row):
    rule = "toeplitz" if "T(" in row.quantity else "wick"
    total, spin = int(re.search(r"J=(\d)", row.model)[1]), row.spin
    op = dense_operator(quantize(biquadratic(2, [[0, 1]], 1.0), spin, rule))
    square = spin * (spin + 1)
    pair = dense_operator(quantize(exchange(2, [[0, 1]], 1.0), spin, "substitution")) * spin**2
    states = np.linalg.eigh(pair)[1][:, np.isclose(np.linalg.eigvalsh(pair), total * (total + 1) / 2 - square)]
    np.testing.assert_allclose(np.linalg.eigvalsh(states.conj().T @ op @ states), row.value, rtol=2e-11, atol=2e-11)


@pytest.mark.parametrize("row", rows("ground energy of"))
def test_ground_energies(row):
    if row.model == "two-site Toeplitz":
        f, rule, scale = exchange(2, [[0, 1]], 1.0), "toeplitz", 1.0
    elif "Sx^4" in row.quantity:
        f, rule, scale = one_site({(4, 0, 0): 1, (0, 4, 0): 1, (0, 0, 4): 1}), "substitution", row.spin**4
    else:
        f, scale = one_site({(0, 0, 1): -1, (2, 0, 0): -0.6}), 1.0
        rule = {"Toeplitz": "toeplitz", "lower-symbol": "wick"}.get(row.quantity.split()[3], "weyl")
    close(row, scale * ground_energy(dense_operator(quantize(f, row.spin, rule))))


@pytest.mark.parametrize("row", rows(("distinct eigenvalue", "T(n_x^4")))
def test_cubic_anisotropy(row):
    values = np.linalg.eigvalsh(matrix({(4, 0, 0): 1, (0, 4, 0): 1, (0, 0, 4): 1}, row.spin))
    distinct = values[np.concatenate([[True], np.diff(values) > 1e-9])]
    number = re.search(r"#(\d)", row.quantity)
    assert number or len(distinct) == 1
    close(row, distinct[int(number[1]) - 1 if number else 0])


@pytest.mark.parametrize("row", rows("spectral norm"))
def test_commutators(row):
    name = re.search("g=(.+?),", row.model)[1]
    other, bracket = {
        "n_x n_z": ({(1, 0, 1): 1}, {(0, 1, 2): 2}),
        "n_x^2": ({(2, 0, 0): 1}, {(1, 1, 1): 4}),
        "n_x": ({(1, 0, 0): 1}, {(0, 1, 1): 2}),
    }[name]
    a, b = matrix({(0, 0, 2): 1}, row.spin), matrix(other, row.spin)
    commutator = a @ b - b @ a
    if "{f,g}" in row.quantity:
        commutator = commutator - 1j / (row.spin + 1) * matrix(bracket, row.spin)
    close(row, np.linalg.norm(commutator, 2))


@pytest.mark.parametrize("row", rows("Lieb"))
def test_lieb_bounds_of_rings(row):
    ring = exchange(row.sites, [(i, (i + 1) % row.sites) for i in range(row.sites)], 1.0)
    op = quantize(row.spin**2 * ring, row.spin, "wick")
    neel = np.tile([[0, 0, 1.0], [0, 0, -1.0]], (row.sites // 2, 1))
    symbol = op.upper_symbol() if "lower" in row.quantity else op.lower_symbol()
    assert symbol.value(neel) == pytest.approx(row.value, rel=1e-12)


def test_no_check_value_is_forgotten():
    covered = (
        *FACTORS,
        "diagonal matrix element",
        "eigenvalue of ",
        "ground energy of",
        "distinct eigenvalue",
        "T(n_x^4",
        "spectral norm",
        "Lieb",
        "coefficient of 1/S",  # checked with the first quantum correction, tests/classical/test_harmonic.py
    )
    assert [row.id for row in ROWS.values() if not row.quantity.startswith(covered)] == []


# Operators of one site


@pytest.mark.parametrize("spin", [0.5, 1, 1.5, 3, 8])
def test_spin_matrices(spin):
    # textbook: <m+1|S_+|m> = sqrt(S(S+1) - m(m+1)) and the commutation relations
    sx, sy, sz = spin_matrices(spin)
    m = spin - np.arange(round(2 * spin) + 1)
    np.testing.assert_allclose(np.diag(sz), m, atol=1e-13)
    np.testing.assert_allclose(np.diag(sx + 1j * sy, 1), np.sqrt(spin * (spin + 1) - m[1:] * (m[1:] + 1)), atol=1e-12)
    np.testing.assert_allclose(sx @ sy - sy @ sx, 1j * sz, atol=1e-12)


@pytest.mark.parametrize("spin", [0.5, 1, 2, 3.5])
def test_harmonic_operators_against_coherent_state_integrals(spin):
    # T(Y_k) = sqrt(b_k) W_k (Varilly and Gracia-Bondia 1989), T by quadrature over coherent states
    from manybody.model.harmonics import harmonics

    for rank in range(round(2 * spin) + 2):
        for q in range(2 * rank + 1):
            direct = toeplitz_by_quadrature(lambda n, rank=rank, q=q: harmonics(rank, n)[:, q], spin, rank)
            expected = np.sqrt(berezin_factor(rank, spin)) * harmonic_operators(spin, rank)[q]
            np.testing.assert_allclose(direct, expected, atol=1e-12)


def test_coherent_states_point_along_n():
    n = np.concatenate([unit_vectors(1, 6), [[0, 0, 1], [0, 0, -1]]])
    for spin in (0.5, 2, 60):
        states = coherent_states(n, spin)
        np.testing.assert_allclose((abs(states) ** 2).sum(1), 1, atol=1e-10)
        along = np.einsum("na,amk->nmk", n, np.array(spin_matrices(spin)))
        np.testing.assert_allclose(np.einsum("nmk,nk->nm", along, states), spin * states, atol=1e-9)


def test_symmetrized_powers():
    # |S|^4 symmetrized is X^2 - X/3, X = S(S+1); S_z^p symmetrized is S_z^p
    for spin in (0.5, 1, 2.5, 30):
        x = spin * (spin + 1)
        assert substitution_factor(0, 4, spin) * spin**4 == pytest.approx(x * x - x / 3, rel=1e-12)
    for power in range(6):
        direct = np.linalg.matrix_power(spin_matrices(2.5)[2] / 2.5, power)
        np.testing.assert_allclose(matrix({(0, 0, power): 1.0}, 2.5, "substitution"), direct, atol=1e-13)


def test_substitution_symmetrizes_products_of_different_components():
    sx, sy, sz = (s / 1.5 for s in spin_matrices(1.5))
    by_hand = (sx @ sy @ sz + sx @ sz @ sy + sy @ sx @ sz + sy @ sz @ sx + sz @ sx @ sy + sz @ sy @ sx) / 6
    np.testing.assert_allclose(matrix({(1, 1, 1): 1.0}, 1.5, "substitution"), by_hand, atol=1e-13)


def test_large_spins():
    for rule in RULES:
        op = quantize(one_site({(0, 0, 2): 1.0, (1, 0, 0): 0.3}), 400, rule)
        assert ground_energy(dense_operator(op)) == pytest.approx(-0.3, abs=0.01)
        pair = quantize(exchange(2, [[0, 1]], 1.0), 700, rule)
        assert np.isfinite(pair.symbol.largest_coefficient)


def test_the_table_of_the_rules():
    spin = 2.0
    sz = spin_matrices(spin)[2]
    p = sz @ sz - spin * (spin + 1) / 3 * np.eye(5)
    linear = {"wick": spin, "weyl": np.sqrt(spin * (spin + 1)), "toeplitz": spin + 1, "substitution": spin}
    quadratic = {
        "wick": spin * (spin - 0.5),
        "weyl": np.sqrt(spin * (spin - 0.5) * (spin + 1) * (spin + 1.5)),
        "toeplitz": (spin + 1) * (spin + 1.5),
    }
    for rule in RULES:
        np.testing.assert_allclose(matrix({(0, 0, 1): 1}, spin, rule), sz / linear[rule], atol=1e-13)
    for rule, factor in quadratic.items():
        np.testing.assert_allclose(matrix({(0, 0, 2): 1, (0, 0, 0): -1 / 3}, spin, rule), p / factor, atol=1e-13)
    np.testing.assert_allclose(
        matrix({(0, 0, 2): 1, (0, 0, 0): -1 / 3}, spin, "substitution"), sz @ sz / spin**2 - np.eye(5) / 3, atol=1e-13
    )


# Identities and inequalities


@settings(max_examples=30, deadline=None)
@given(seed=seeds, spin=spins, degree=st.integers(0, 5))
def test_toeplitz_is_the_coherent_state_integral_and_positive(seed, spin, degree):
    polynomial = random_polynomial(np.random.default_rng(seed), degree)
    computed = matrix(polynomial, spin)
    direct = toeplitz_by_quadrature(lambda n: polynomial_value(polynomial, n), spin, degree)
    scale = 1 + np.abs(direct).max()
    np.testing.assert_allclose(computed, direct, atol=1e-11 * scale)
    # f >= 0 implies T(f) >= 0: the square of the polynomial, as a function (T(1) = 1 is its case of degree 0)
    square = site_function(1, [0], lambda n: polynomial_value(polynomial, n) ** 2, 2 * degree)
    assert ground_energy(dense_operator(quantize(square, spin, "toeplitz"))) >= -1e-10 * scale**2
    np.testing.assert_allclose(matrix({(0, 0, 0): 1.0}, spin), np.eye(round(2 * spin) + 1), atol=1e-15)


@settings(max_examples=20, deadline=None)
@given(spin=st.integers(1, 60).map(lambda k: k / 2))
def test_commutator_of_components_is_exact(spin):
    x, y, z = (matrix(p, spin) for p in ({(1, 0, 0): 1}, {(0, 1, 0): 1}, {(0, 0, 1): 1}))
    np.testing.assert_allclose(x @ y - y @ x, 1j / (spin + 1) * z, atol=1e-12)


def random_model(seed, sites=2, degree=3):
    """Random terms of degree up to `degree` on up to three sites."""
    rng = np.random.default_rng(seed)
    f = exchange(sites, [(0, 1)], rng.normal(size=(3, 3))) + field(sites, range(sites), rng.normal(size=(sites, 3)))
    f = f + product(sites, [[0, 1]], [random_polynomial(rng, degree), random_polynomial(rng, degree)])
    return f + anisotropy(sites, [0], rng.normal(size=3), rng.normal()) + float(rng.normal())


@settings(max_examples=30, deadline=None)
@given(seed=seeds, spin=spins, rule=st.sampled_from(RULES), other=spins)
def test_symbols_and_averages(seed, spin, rule, other):
    f = random_model(seed)
    pair = np.array([spin, other])
    assume(undefined_reason(f, pair, rule) is None)
    op = quantize(f, pair, rule)
    dense = dense_operator(op)
    scale = np.abs(dense).max()
    n = unit_vectors(seed, 4, 2)
    states = np.einsum("bm,bk->bmk", coherent_states(n[:, 0], spin), coherent_states(n[:, 1], other)).reshape(4, -1)
    expected = np.einsum("bm,mk,bk->b", states.conj(), dense, states)
    np.testing.assert_allclose(op.lower_symbol().value(n), expected.real, atol=1e-11 * scale)
    back = quantize(op.upper_symbol(), pair, "toeplitz")
    np.testing.assert_allclose(dense_operator(back), dense, atol=1e-11 * scale)
    if rule == "wick":
        assert op.lower_symbol().allclose(f, rtol=1e-11) or np.allclose(
            op.lower_symbol().value(n), f.value(n), atol=1e-11 * scale
        )
    if rule != "substitution":
        assert np.trace(dense).real / len(dense) == pytest.approx(f.mean, abs=1e-12 * (1 + scale))


@settings(max_examples=15, deadline=None)
@given(seed=seeds, spin=spins, rule=st.sampled_from(RULES))
def test_symbols_bracket_the_ground_energy(seed, spin, rule):
    # min upper symbol <= E <= lower symbol everywhere (Lieb 1973; Berezin 1972). A minimum not reached can only make
    # the left side too large, so it is descended to.
    f = random_model(seed)
    assume(undefined_reason(f, spin, rule) is None)
    op = quantize(f, spin, rule)
    energy = ground_energy(dense_operator(op))
    lower, upper = op.lower_symbol(), op.upper_symbol()
    n = unit_vectors(seed, 400, 2)
    scale = 1e-9 * (1 + np.abs(lower.value(n)).max())
    assert energy <= lower.value(n).min() + scale
    assert descend(upper, n) <= energy + scale
    if rule == "toeplitz":
        assert descend(f, n) <= energy + scale
    if rule == "wick":
        assert energy <= f.value(n).min() + scale


def descend(f, n):
    """The lowest value found by backtracking descent from the ten best of many points."""
    n = n[np.argsort(f.value(n))[:10]]
    step = np.full(len(n), 0.5 / (1e-300 + f.largest_coefficient))
    value, gradient = f.value_and_gradient(n)
    for _ in range(100):
        moved = n - step[:, None, None] * gradient
        moved /= np.linalg.norm(moved, axis=-1, keepdims=True)
        new, new_gradient = f.value_and_gradient(moved)
        better = new < value
        n, gradient = np.where(better[:, None, None], moved, n), np.where(better[:, None, None], new_gradient, gradient)
        value, step = np.where(better, new, value), np.where(better, 1.3 * step, 0.4 * step)
    return value.min()


@settings(max_examples=15, deadline=None)
@given(seed=seeds, spin=spins)
def test_rotating_function_and_operator_agree(seed, spin):
    from scipy.stats import special_ortho_group

    f = random_model(seed, degree=1)
    rotation = special_ortho_group(3, seed=np.random.default_rng(seed)).rvs()
    before = np.linalg.eigvalsh(dense_operator(quantize(f, spin, "toeplitz")))
    after = np.linalg.eigvalsh(dense_operator(quantize(f.rotated(rotation), spin, "toeplitz")))
    np.testing.assert_allclose(after, before, atol=1e-11 * (1 + np.abs(before).max()))


def test_lower_symbol_correction_is_the_limit():
    f = random_model(3) + biquadratic(2, [[0, 1]], 1.0)
    n = unit_vectors(4, 5, 2)
    limit = lower_symbol_correction(f).value(n)
    slopes = [s * (quantize(f, s, "substitution").lower_symbol().value(n) - f.value(n)) for s in (1000, 2000)]
    np.testing.assert_allclose(2 * slopes[1] - slopes[0], limit, atol=1e-5)


def test_undefined_points_name_their_term():
    f = exchange(3, [[0, 1], [1, 2]], 1.0) + anisotropy(3, [2], [0, 0, 1], 0.5)
    with pytest.raises(UndefinedQuantization, match=r"rank 2 for spin 0.5.*sites \[2\]"):
        quantize(f, 0.5, "wick")
    assert undefined_reason(f, [0.5, 0.5, 1.0], "wick") is None
    for rule in ("toeplitz", "weyl"):
        assert quantize(f, 0.5, rule).symbol.groups[-1].ranks != (2,)
    # at S = 1/2 the single-ion term is the constant K/3 under toeplitz and K under substitution (S_z^2/S^2 = 1)
    assert quantize(f, 0.5, "toeplitz").mean == pytest.approx(0.5 / 3)
    assert quantize(f, 0.5, "substitution").mean == pytest.approx(0.5)


@pytest.mark.parametrize(
    ("spin", "rule", "message"),
    [(0.3, "wick", "multiple of 1/2"), (0, "wick", "positive"), (1, "anti", "unknown quantization rule")],
)
def test_misuse_is_told(spin, rule, message):
    with pytest.raises(ValueError, match=message):
        quantize(exchange(2, [[0, 1]], 1.0), spin, rule)


def test_operators_of_different_spins_do_not_add():
    f = exchange(2, [[0, 1]], 1.0)
    with pytest.raises(ValueError, match="different spins"):
        quantize(f, 1, "wick") + quantize(f, 2, "wick")
    twice = quantize(f, 1, "wick") + 1.0 * quantize(f, 1, "wick")
    assert isinstance(twice, SpinOperator) and twice.symbol.allclose(2 * quantize(f, 1, "wick").symbol)
    assert reference("E126").value == pytest.approx(ground_energy(dense_operator(quantize(f, 0.5, "toeplitz"))))
