"""Eigenproblems of the small matrices that a sweep meets by the hundred: for a few rows the calls inside a library's
solver cost more than the arithmetic."""

import numba
import numpy as np
from numba.extending import overload

from manybody.quantum.compiled import compiled

SMALL = 50
"""Rows up to which the solver below was measured to be faster than LAPACK (twice at 4 to 16 rows, by a third at 50)."""

LEAST_SQUARE = 1e-280
"""Sums of squares below this, of elements of a matrix whose largest is 1, have lost their digits and count as zero."""

reordering = numba.njit(cache=True, nogil=True, error_model="numpy", fastmath={"reassoc", "contract"})
"""Sums may be taken in any order, which is what makes short dot products fast."""


def eigenvectors(matrix, values, rows):
    """Eigenvalues, ascending, and eigenvectors, one in each row, of a symmetric or Hermitian matrix, written in place.
    The matrix may be overwritten. For compiled functions."""
    raise NotImplementedError


@compiled
def _by_library(matrix, values, rows):
    found, vectors = np.linalg.eigh(matrix)
    values[:] = found
    rows[:] = vectors.T


def _by_size(matrix, values, rows):
    if matrix.shape[0] > SMALL:
        _by_library(matrix, values, rows)
        return
    if matrix.size == 1:
        values[0] = matrix[0, 0]
        rows[0, 0] = 1.0
        return
    largest = np.abs(matrix).max()
    scale = largest if 0 < largest < np.inf else 1.0
    matrix /= scale
    beside = np.empty(values.size)
    tridiagonal(matrix, values, beside, rows)
    diagonalize(values, beside, rows)
    values *= scale


@overload(eigenvectors)
def _choose(matrix, values, rows):
    if isinstance(matrix.dtype, numba.types.Complex):
        return lambda matrix, values, rows: _by_library(matrix, values, rows)
    return _by_size


@reordering
def tridiagonal(matrix, diagonal, beside, rows):
    """Householder's reduction (Martin, Reinsch, Wilkinson 1968, Numer. Math. 11, 181, from memory): matrix = rows^T T
    rows with T of this diagonal and these elements beside it, the last of them zero. The matrix, whose largest element
    is 1 in size, is overwritten."""
    n = matrix.shape[0]
    images, factors = np.empty(n), np.zeros(n)
    for k in range(n - 2):
        size = n - k - 1
        mirror, image = matrix[k, k + 1 :], images[:size]
        rest = 0.0
        for x in range(1, size):
            rest += mirror[x] * mirror[x]
        diagonal[k] = matrix[k, k]
        beside[k] = mirror[0]
        if rest < LEAST_SQUARE:
            continue
        beside[k] = -np.copysign(np.sqrt(mirror[0] ** 2 + rest), mirror[0])
        factor = 1 - mirror[0] / beside[k]
        scale = 1 / (mirror[0] - beside[k])
        mirror[0] = 1.0
        for x in range(1, size):
            mirror[x] *= scale
        factors[k] = factor
        overlap = 0.0
        for i in range(size):
            row = matrix[k + 1 + i, k + 1 :]
            total = 0.0
            for x in range(size):
                total += row[x] * mirror[x]
            image[i] = factor * total
            overlap += image[i] * mirror[i]
        half = 0.5 * factor * overlap
        for i in range(size):
            image[i] -= half * mirror[i]
        for i in range(size):
            row = matrix[k + 1 + i, k + 1 :]
            a, b = mirror[i], image[i]
            for x in range(size):
                row[x] -= a * image[x] + b * mirror[x]
    if n > 1:
        diagonal[n - 2], beside[n - 2] = matrix[n - 2, n - 2], matrix[n - 2, n - 1]
    diagonal[n - 1], beside[n - 1] = matrix[n - 1, n - 1], 0.0
    rows[:] = 0
    for i in range(n):
        rows[i, i] = 1.0
    for k in range(n - 3, -1, -1):
        if factors[k] == 0.0:
            continue
        mirror = matrix[k, k + 1 :]
        for i in range(k + 1, n):
            row = rows[i, k + 1 :]
            total = 0.0
            for x in range(mirror.size):
                total += row[x] * mirror[x]
            total *= factors[k]
            for x in range(mirror.size):
                row[x] -= total * mirror[x]


@reordering
def negligible(first, second):
    """Size of an element beside these two of the diagonal that counts as zero."""
    return 1.1e-16 * (abs(first) + abs(second)) + np.sqrt(LEAST_SQUARE)


@reordering
def diagonalize(diagonal, beside, rows):
    """Implicit QL steps (Dubrulle, Martin, Wilkinson 1968, Numer. Math. 12, 377, from memory): eigenvalues, ascending,
    in place of the diagonal, and the rows turned along."""
    n = diagonal.size
    for l in range(n):
        for _ in range(60):  # two are usual; more than 60 only where numbers overflowed
            m = l
            while m < n - 1 and not abs(beside[m]) <= negligible(diagonal[m], diagonal[m + 1]):
                m += 1  # also past what is no number: it must not pass for a small one
            if m == l:
                break
            shift = (diagonal[l + 1] - diagonal[l]) / (2 * beside[l])
            shift = diagonal[l] - beside[l] / (shift + np.copysign(np.sqrt(shift * shift + 1), shift))
            g = diagonal[m] - shift
            sine, cosine, moved = 1.0, 1.0, 0.0
            split = False
            for i in range(m - 1, l - 1, -1):
                f, b = sine * beside[i], cosine * beside[i]
                r = np.sqrt(f * f + g * g)
                beside[i + 1] = r
                if r == 0.0:
                    diagonal[i + 1] -= moved
                    beside[m] = 0.0
                    split = True
                    break
                sine, cosine = f / r, g / r
                g = diagonal[i + 1] - moved
                r = (diagonal[i] - g) * sine + 2 * cosine * b
                moved = sine * r
                diagonal[i + 1] = g + moved
                g = cosine * r - b
                u, v = rows[i], rows[i + 1]
                for x in range(n):
                    f = v[x]
                    v[x] = sine * u[x] + cosine * f
                    u[x] = cosine * u[x] - sine * f
            if not split:
                diagonal[l] -= moved
                beside[l] = g
                beside[m] = 0.0
    for i in range(n - 1):
        least = i
        for j in range(i + 1, n):
            if diagonal[j] < diagonal[least]:
                least = j
        if least != i:
            diagonal[i], diagonal[least] = diagonal[least], diagonal[i]
            for x in range(n):
                rows[i, x], rows[least, x] = rows[least, x], rows[i, x]
