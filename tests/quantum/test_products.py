"""Products of matrices in flat arrays against numpy."""

import numba
import numpy as np
import pytest

from manybody.quantum.products import ADJOINT, PLAIN, TURNED, product

FORMS = {PLAIN: lambda x: x, TURNED: lambda x: x.T, ADJOINT: lambda x: x.conj().T}


@pytest.mark.parametrize("kind", [float, complex])
@pytest.mark.parametrize("left_form", FORMS)
@pytest.mark.parametrize("right_form", FORMS)
def test_every_form_against_numpy(kind, left_form, right_form):
    rng = np.random.default_rng(5)
    for m, k, n in [(1, 1, 1), (5, 7, 3), (2, 1, 9), (40, 33, 57), (150, 120, 130)]:
        shapes = (m, k) if left_form == PLAIN else (k, m), (k, n) if right_form == PLAIN else (n, k)
        a, b = (rng.standard_normal(shape).astype(kind) for shape in shapes)
        if kind is complex:
            a, b = a + 1j * rng.standard_normal(a.shape), b + 1j * rng.standard_normal(b.shape)
        left, right = (np.concatenate([np.full(3, np.nan), x.ravel(), np.full(4, np.nan)]) for x in (a, b))
        target = np.full(m * n + 11, np.nan, kind)
        product(target, 6, left, 3, right, 3, m, k, n, left_form, right_form)
        wanted = FORMS[left_form](a) @ FORMS[right_form](b)
        np.testing.assert_allclose(target[6 : 6 + m * n].reshape(m, n), wanted, rtol=1e-12, atol=1e-12 * k)
        assert np.isnan(target[:6]).all() and np.isnan(target[6 + m * n :]).all()


def test_arrays_with_more_axes_count_as_flat():
    a, b = np.arange(6.0).reshape(2, 3), np.arange(12.0).reshape(3, 4)
    target = np.empty((2, 4))
    product(target, 0, a, 0, b, 0, 2, 3, 4)
    np.testing.assert_array_equal(target, a @ b)


@pytest.mark.parametrize("form", FORMS)
def test_nothing_to_add_up_gives_zeros(form):
    empty = np.empty(0)
    for m, n in [(2, 2), (1, 4), (4, 1)]:
        target = np.array([1, np.nan, np.nan, np.nan, np.nan, 1])
        product(target, 1, empty, 0, empty, 0, m, 0, n, form, form)
        np.testing.assert_array_equal(target, [1, 0, 0, 0, 0, 1])
    full = np.arange(6.0)
    product(target, 0, empty, 0, full, 0, 0, 3, 2, form, form)
    product(target, 0, full, 0, empty, 0, 2, 3, 0, form, form)
    np.testing.assert_array_equal(target, [1, 0, 0, 0, 0, 1])


@pytest.mark.parametrize(
    "arrays",
    [
        (np.zeros(4), np.zeros(4, complex), np.zeros(4)),
        (np.zeros(4, np.float32), np.zeros(4, np.float32), np.zeros(4, np.float32)),
        (np.zeros((2, 4))[:, :2], np.zeros(4), np.zeros(4)),
        (np.frombuffer(bytes(32)), np.zeros(4), np.zeros(4)),
    ],
)
def test_arrays_of_other_kinds_are_refused(arrays):
    target, left, right = arrays
    with pytest.raises(numba.TypingError, match="contiguous arrays of float64 or of complex128"):
        product(target, 0, left, 0, right, 0, 2, 2, 2)
