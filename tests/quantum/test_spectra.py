"""Eigenproblems, cuts and random vectors of single steps against numpy.linalg."""

import numba
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from manybody.quantum import eigenproblem, expansion, spectra, split


@numba.njit
def eigenvectors(matrix, values, rows):
    eigenproblem.eigenvectors(matrix, values, rows)


def solved(matrix):
    n = len(matrix)
    values, rows = np.empty(n), np.empty_like(matrix)
    eigenvectors(matrix.copy(), values, rows)
    return values, rows


def check(matrix):
    values, rows = solved(matrix)
    size = np.abs(matrix).max() + 1e-300
    np.testing.assert_allclose(values / size, np.linalg.eigvalsh(matrix) / size, atol=1e-14 * len(matrix))
    np.testing.assert_allclose(rows @ rows.conj().T, np.eye(len(matrix)), atol=1e-14 * len(matrix))
    np.testing.assert_allclose((rows.T * values) @ rows.conj() / size, matrix / size, atol=1e-14 * len(matrix))


def graded(rng, rows, columns, decay, kind):
    """A matrix with singular values decay^0, decay^1, ..."""

    def random(n, k):
        x = rng.standard_normal((n, k))
        x = x + 1j * rng.standard_normal((n, k)) if kind is complex else x
        return np.linalg.qr(x)[0]

    k = min(rows, columns)
    return np.ascontiguousarray((random(rows, k) * decay ** np.arange(k)) @ random(columns, k).conj().T)


@settings(max_examples=60, deadline=None)
@given(
    st.integers(0, 2**32 - 1),
    st.integers(1, 60),
    st.floats(0.2, 1.0),
    st.sampled_from([1e-90, 1e-3, 1.0, 1e90]),
    st.sampled_from([float, complex]),
)
def test_eigenvectors_against_lapack(seed, n, decay, size, kind):
    x = graded(np.random.default_rng(seed), n, n, decay, kind)
    check(size * (x @ x.conj().T))


@pytest.mark.parametrize("n", [1, 2, 3, 7, 20])
def test_eigenvectors_of_special_matrices(n):
    rng = np.random.default_rng(n)
    check(np.zeros((n, n)))
    check(np.eye(n))
    check(np.diag(rng.integers(0, 3, n).astype(float)))
    check(np.ones((n, n)))
    check(np.eye(n) + np.diag(np.full(n - 1, 1e-9), 1) + np.diag(np.full(n - 1, 1e-9), -1))
    signs = np.sign(rng.standard_normal((n, n)))
    check(signs + signs.T)


@pytest.mark.parametrize("power", [*range(-166, -148, 2), -200, -300])
@pytest.mark.parametrize("kind", [float, complex])
def test_eigenvectors_stay_orthonormal_beside_elements_whose_squares_vanish(power, kind):
    x = graded(np.random.default_rng(1), 8, 10, 0.8, kind)
    x[0] *= 10.0**power
    check(x @ x.conj().T)
    steep = np.diag(10.0 ** -np.linspace(0, 300, 8)).astype(kind)
    steep[2, 5] = steep[5, 2] = 10.0**power
    check(steep)


@pytest.mark.parametrize("bad", [np.inf, np.nan])
def test_eigenproblem_ends_with_overflowed_numbers(bad):
    matrix = np.eye(5)
    matrix[1, 2] = matrix[2, 1] = bad
    values, _ = solved(matrix)
    assert not np.isfinite(values).all()


def cut(matrices, limit, allowed, reduced):
    """(share lost truly, told, states per matrix, ranks) of a cut of several matrices."""
    flat = np.concatenate([x.ravel() for x in matrices])
    shapes = np.array([x.shape for x in matrices])
    weights, vectors, ranks, missing = spectra.spectra(
        flat, shapes, limit if reduced else 0, allowed if reduced else 0.0
    )
    kept, told = split.choose(weights, ranks, missing, limit, allowed)
    q, c = split.parts(flat, shapes, vectors, ranks, kept)
    lost, q_place, c_place = 0.0, 0, 0
    for x, k in zip(matrices, kept, strict=True):
        m, n = x.shape
        isometry = q[q_place : q_place + m * k].reshape(m, k)
        carry = c[c_place : c_place + k * n].reshape(k, n)
        q_place, c_place = q_place + m * k, c_place + k * n
        np.testing.assert_allclose(isometry.conj().T @ isometry, np.eye(k), atol=1e-12)
        lost += np.linalg.norm(x - isometry @ carry) ** 2
    return lost / np.vdot(flat, flat).real, told, kept, ranks


@settings(max_examples=60, deadline=None)
@given(
    st.integers(0, 2**32 - 1),
    st.integers(1, 120),
    st.sampled_from([1e-4, 1e-8, 1e-12, 1e-15]),
    st.floats(0.3, 0.95),
    st.sampled_from([float, complex]),
)
def test_a_cut_of_reduced_matrices_loses_hardly_more_than_the_best(seed, limit, allowed, decay, kind):
    """The best: the largest singular values of all matrices together (Eckart, Young 1936)."""
    rng = np.random.default_rng(seed)
    shapes = rng.integers(1, 50, (5, 2))
    matrices = [10.0 ** -rng.integers(0, 4) * graded(rng, m, n, decay, kind) for m, n in shapes]
    # Charges that nothing reaches, that carry nothing, and that carry less than they could.
    matrices += [np.zeros((0, 7), kind), np.zeros((20, 4), kind)]
    matrices.append(1e-3 * graded(rng, 30, 3, decay, kind) @ graded(rng, 3, 40, decay, kind))
    weights = np.sort(np.concatenate([np.linalg.svd(x, compute_uv=False) ** 2 for x in matrices]))
    share = np.concatenate([[0.0], np.cumsum(weights)]) / weights.sum()
    for reduced in (False, True):
        lost, told, kept, _ = cut(matrices, limit, allowed, reduced)
        assert 1 <= kept.sum() <= limit
        best = share[weights.size - kept.sum()]
        if few := kept.sum() <= split.FEW:
            # One of every charge stays then, which may replace heavier states of others, all within what may be lost.
            best = max(best, min(allowed, lost))
        # 1e-14: rounding of Gram matrices; 5 %: at most 1.8 % were seen in 8000 such cases.
        assert best - 1e-14 <= lost <= (1.05 if reduced else 1 + 1e-9) * best + 1e-14
        # Told: what was missed counts as lost. 10: pivots leave up to a few times the trace that they could.
        more = spectra.MISSED * max(allowed, 10 * best) if reduced else 1e-9 * best
        assert lost - 1e-14 <= told <= best + more + 1e-14
        # No state more than needed but for one or two of that small excess.
        spare, near = (2, spectra.MISSED) if reduced else (1, 1e-9)
        fewer = share[max(weights.size - kept.sum() + spare, 0) :]
        assert few or kept.sum() == limit or len(fewer) == 0 or fewer[0] + 1e-14 > allowed * (1 - near)


def test_reduction_finds_fewer_columns_where_weights_decay():
    rng = np.random.default_rng(0)
    matrices = [graded(rng, 60, 80, 0.7, float), graded(rng, 45, 45, 0.7, float), graded(rng, 5, 70, 0.7, float)]
    *_, ranks = cut(matrices, 100, 1e-6, True)
    assert ranks[0] < 42 and ranks[1] < 32 and ranks[2] == 5
    *_, ranks = cut([graded(rng, 40, 40, 1.0, float)], 10, 1e-6, True)
    assert ranks[0] == 40


@pytest.mark.parametrize("bad", [0.0, np.inf, np.nan])
def test_what_cannot_be_cut_is_told(bad):
    with pytest.raises(FloatingPointError, match="zero or has overflowed"):
        cut([np.full((3, 4), bad), np.zeros((30, 20))], 10, 1e-6, True)


@settings(max_examples=30, deadline=None)
@given(st.integers(0, 2**32 - 1), st.integers(1, 30), st.sampled_from([float, complex]))
def test_inverse_of_a_lower_triangle(seed, n, kind):
    rng = np.random.default_rng(seed)
    x = graded(rng, n, n, 0.9, kind)
    factor = np.linalg.cholesky(x @ x.conj().T + np.eye(n))
    np.testing.assert_allclose(split.inverse_of_lower(factor), np.linalg.inv(factor), atol=1e-11)


def test_noise_is_uniform_and_differs_between_seeds():
    like = np.empty(1)
    numbers = np.stack([expansion.noise(seed, 4000, like) for seed in range(50)])
    assert np.abs(numbers).max() <= 0.5
    flat = np.sort(numbers.ravel())
    # Kolmogorov-Smirnov: 1.95 / sqrt(n) is passed by chance once in a thousand.
    distance = np.abs(flat - (np.arange(flat.size) / flat.size - 0.5)).max()
    assert distance < 1.95 / np.sqrt(flat.size)
    correlation = np.corrcoef(numbers)[np.triu_indices(50, 1)]
    assert np.abs(correlation).max() < 5 / np.sqrt(4000)
    np.testing.assert_array_equal(expansion.noise(7, 10, like), numbers[7, :10])
    assert expansion.noise(7, 10, np.empty(1, complex)).dtype == complex


def test_few_states_keep_one_of_every_charge_above_rounding():
    weights = np.array([1e-20, 1e-9, 0.3, 1e-7, 0.7])
    ranks = np.array([1, 2, 2])
    # The heaviest of the second and third charge stay anyway, that of the first is rounding.
    kept, discarded = split.choose(weights, ranks, 0.0, 10, 1e-6)
    assert kept.tolist() == [0, 1, 1] and discarded == pytest.approx(1.01e-7, rel=1e-9)
    weights = np.array([1e-8, 0.3, 1e-7, 0.7])
    kept, discarded = split.choose(weights, np.array([1, 1, 2]), 0.0, 10, 1e-6)
    assert kept.tolist() == [1, 1, 1] and discarded == pytest.approx(1e-7, rel=1e-9)
    # Not against the limit, and not where many states stay.
    assert split.choose(weights, np.array([1, 1, 2]), 0.0, 2, 1e-6)[0].tolist() == [0, 1, 1]
    many = np.concatenate([[1e-8], np.full(split.FEW, 1 / split.FEW)])
    assert split.choose(many, np.array([1, split.FEW]), 0.0, 100, 1e-6)[0].tolist() == [0, split.FEW]
