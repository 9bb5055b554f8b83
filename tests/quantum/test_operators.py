"""Sparse operators against quimb's spin operators and against Kronecker products written here."""

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from spin_models import dense_site, dense_spin, heisenberg, ring

from manybody.model import couplings
from manybody.model.quantization import quantize
from manybody.quantum.basis import Basis, TooLarge, sector_dimensions
from manybody.quantum.frame import natural_frame
from manybody.quantum.ladder import shifts
from manybody.quantum.operators import entry_count, sparse_operator
from manybody.quantum.split_operator import SplitOperator

SPINS = st.lists(st.sampled_from([0.5, 1.0, 1.5, 2.0]), min_size=1, max_size=4).filter(
    lambda spins: math.prod(2 * s + 1 for s in spins) <= 200
)


def dense(spins, constant=0.0):
    """Start of a dense operator, and S_a at every site over S."""
    dims = [round(2 * s) + 1 for s in spins]
    vectors = [[dense_site(m, i, dims) / s for m in dense_spin(s)] for i, s in enumerate(spins)]
    return constant * np.eye(math.prod(dims), dtype=complex), vectors


@settings(max_examples=40, deadline=None)
@given(SPINS, st.integers(0, 2**32 - 1))
def test_pairs_fields_and_single_site_terms_against_kronecker_products(spins, seed):
    random = np.random.default_rng(seed)
    n = len(spins)
    matrix, v = dense(spins, constant=0.7)
    fields, axis = random.standard_normal((n, 3)), random.standard_normal(3)
    f = couplings.field(n, range(n), fields) + couplings.anisotropy(n, range(n), axis, 1.3) + 0.7
    axis = axis / np.linalg.norm(axis)
    for i in range(n):
        along = sum(axis[a] * v[i][a] for a in range(3))
        matrix += 1.3 * along @ along - sum(fields[i, a] * v[i][a] for a in range(3))
    pairs = [(i, j) for i in range(n) for j in range(n) if i < j and random.random() < 0.8]
    if pairs:
        exchange = random.standard_normal((len(pairs), 3, 3))
        f = f + couplings.exchange(n, pairs, exchange) + couplings.antisymmetric(n, pairs, axis)
        for (i, j), m in zip(pairs, exchange, strict=True):
            matrix += sum(m[a, b] * v[i][a] @ v[j][b] for a in range(3) for b in range(3))
            matrix += sum(
                axis[c] * (v[i][a] @ v[j][b] - v[i][b] @ v[j][a]) for a, b, c in ((0, 1, 2), (1, 2, 0), (2, 0, 1))
            )
    built = sparse_operator(quantize(f, spins)).toarray()
    np.testing.assert_allclose(built, matrix, atol=2e-13)


def test_three_and_four_site_terms():
    spins = [0.5, 1.0, 0.5, 1.5]
    _, v = dense(spins)
    f = couplings.product(4, [(0, 1, 2)], [{(1, 0, 0): 1.0}, {(0, 1, 0): 1.0}, {(0, 0, 1): 1.0}])
    f = f + couplings.product(
        4, [(0, 3, 1, 2)], [{(1, 0, 0): 1.0}, {(0, 0, 2): 1.0}, {(1, 0, 0): 2.0}, {(0, 1, 0): 1.0}]
    )
    matrix = v[0][0] @ v[1][1] @ v[2][2] + 2 * v[0][0] @ v[3][2] @ v[3][2] @ v[1][0] @ v[2][1]
    np.testing.assert_allclose(sparse_operator(quantize(f, spins)).toarray(), matrix, atol=1e-13)


@pytest.mark.parametrize(("n", "spin", "cyclic"), [(4, 0.5, False), (5, 0.5, True), (4, 1, True), (3, 1.5, False)])
def test_heisenberg_chains_of_quimb(n, spin, cyclic):
    import quimb

    pairs = ring(n) if cyclic else ring(n)[:-1]
    sites = [quimb.spin_operator(label, S=spin) for label in "XYZ"]
    dims = [round(2 * spin) + 1] * n
    matrix = sum(quimb.ikron([m, m], dims, [i, j]) for i, j in pairs for m in sites)
    np.testing.assert_allclose(sparse_operator(heisenberg(n, pairs, spin)).toarray(), matrix, atol=1e-13)


@settings(max_examples=40, deadline=None)
@given(SPINS, st.integers(0, 2**32 - 1))
def test_sectors_are_blocks_of_the_whole_and_entries_are_counted(spins, seed):
    random = np.random.default_rng(seed)
    n = len(spins)
    pairs = [(i, j) for i in range(n) for j in range(i) if random.random() < 0.8]
    f = couplings.field(n, range(n), random.standard_normal((n, 1)) * np.array([0, 0, 1.0])) + 0.3
    if pairs:
        f = f + couplings.exchange(n, pairs, random.standard_normal((len(pairs), 1, 1)) * np.diag([1, 1, 0.5]))
        f = (
            f
            + couplings.antisymmetric(n, pairs, [0, 0, random.standard_normal()])
            + couplings.biquadratic(n, pairs, 0.4)
        )
    op = quantize(f, spins)
    whole = sparse_operator(op).toarray()
    parts = shifts(op)
    top, seen = sum(spins), 0
    for k, dimension in enumerate(sector_dimensions(op.spins)):
        basis = Basis(op.spins, top - k)
        assert basis.dimension == dimension
        block = sparse_operator(op, top - k)
        codes = basis.full_codes()
        assert (np.diff(codes) > 0).all()
        np.testing.assert_array_equal(block.toarray(), whole[np.ix_(codes, codes)])
        assert block.nnz == dimension + entry_count(parts, top - k)
        seen += len(codes)
        x = random.standard_normal(len(codes)) + 1j * random.standard_normal(len(codes))
        np.testing.assert_allclose(SplitOperator(parts, basis) @ x, block @ x, atol=1e-12)
    assert seen == len(whole)


@settings(max_examples=20, deadline=None)
@given(SPINS, st.integers(0, 2**32 - 1))
def test_operator_without_matrix_on_the_whole_space(spins, seed):
    random = np.random.default_rng(seed)
    n = len(spins)
    pairs = [(i, j) for i in range(n) for j in range(i)]
    f = couplings.field(n, range(n), random.standard_normal((n, 3)))
    f = f + couplings.anisotropy(n, range(n), random.standard_normal(3), 0.6)
    if pairs:
        f = (
            f
            + couplings.exchange(n, pairs, random.standard_normal((len(pairs), 3, 3)))
            + couplings.biquadratic(n, pairs, 0.4)
        )
    op = quantize(f, spins)
    matrix = sparse_operator(op)
    x = random.standard_normal(matrix.shape[0])
    np.testing.assert_allclose(SplitOperator(shifts(op), Basis(op.spins)) @ x, matrix @ x, atol=1e-12)


def test_real_whenever_the_coefficients_allow():
    xyz = couplings.exchange(4, ring(4), [1.0, 0.7, 0.3])
    assert sparse_operator(quantize(xyz, 1)).dtype == np.float64
    twisted = quantize(xyz + couplings.field(4, [0], [0, 0.4, 0]), 1)
    assert sparse_operator(twisted).dtype == np.complex128
    frame = natural_frame(twisted)
    assert frame.real and sparse_operator(frame.op).dtype == np.float64
    spectrum = np.linalg.eigvalsh(sparse_operator(twisted).toarray())
    np.testing.assert_allclose(np.linalg.eigvalsh(sparse_operator(frame.op).toarray()), spectrum, atol=1e-13)


def test_antisymmetric_exchange_is_turned_away_on_trees_and_kept_on_frustrated_rings():
    pairs = ring(5)
    base = couplings.exchange(5, pairs, 1.0)
    open_chain = quantize(
        base + couplings.antisymmetric(5, pairs[:-1], [0.3, 0.4, 0.5]) - couplings.exchange(5, pairs[-1:], 1.0), 1
    )
    frame = natural_frame(open_chain)
    assert frame.conserved and frame.real
    closed = natural_frame(quantize(base + couplings.antisymmetric(5, pairs, [0, 0, 0.5]), 1))
    assert closed.conserved and not closed.real
    for op, turned in ((open_chain, frame.op),):
        low = np.linalg.eigvalsh(sparse_operator(op).toarray())[:5]
        np.testing.assert_allclose(np.linalg.eigvalsh(sparse_operator(turned).toarray())[:5], low, atol=1e-12)


def test_a_plane_of_fields_and_axes_is_made_real():
    random = np.random.default_rng(3)
    plane = np.linalg.qr(random.standard_normal((3, 3)))[0][:, :2]
    f = couplings.exchange(3, ring(3), 1.0) + couplings.field(3, range(3), random.standard_normal((3, 2)) @ plane.T)
    f = f + couplings.anisotropy(3, [1], plane @ [0.3, 0.9], -0.5)
    frame = natural_frame(quantize(f, 1.5))
    assert not frame.conserved and frame.real


def test_a_scalar_chirality_stays_complex():
    f = couplings.product(3, [(0, 1, 2)], [{(1, 0, 0): 1.0}, {(0, 1, 0): 1.0}, {(0, 0, 1): 1.0}])
    f = f - couplings.product(3, [(0, 1, 2)], [{(0, 1, 0): 1.0}, {(1, 0, 0): 1.0}, {(0, 0, 1): 1.0}])
    assert not natural_frame(quantize(f + couplings.exchange(3, ring(3), 1.0), 0.5)).real


def test_sector_that_does_not_exist_and_operator_without_conservation():
    op = heisenberg(3, ring(3), 0.5)
    with pytest.raises(ValueError, match=r"no sector S\^z = 0"):
        sparse_operator(op, 0)
    with pytest.raises(ValueError, match="not conserved"):
        sparse_operator(quantize(couplings.field(2, [1], [1.0, 0, 0]), 1), 0)
    with pytest.raises(TooLarge):
        Basis(np.full(80, 0.5), 0.0)


def test_large_spin_stays_sparse():
    op = quantize(couplings.exchange(2, [[0, 1]], 1.0) + couplings.biquadratic(2, [[0, 1]], 0.2), 150)
    block = sparse_operator(op, 0)
    # Two spins in sector 0: x = S_1.S_2 / S^2 has the eigenvalues of addition of angular momenta.
    total = np.arange(301)
    x = (total * (total + 1) / 2 - 150 * 151) / 150**2
    square = x**2 + x / (2 * 150**2)
    np.testing.assert_allclose(np.linalg.eigvalsh(block.toarray()), np.sort(x + 0.2 * square), atol=1e-11)
