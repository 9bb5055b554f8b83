"""Lowest eigenvector of the effective operator of a site or bond from a few Lanczos vectors (Lanczos 1950)."""

import numpy as np

from manybody.quantum.blocks import to_ket
from manybody.quantum.compiled import compiled, room
from manybody.quantum.contraction import NO_CHANNEL, apply, clear, plan

CHUNK = 2048
"""Elements of every vector that are worked on together: they stay in the innermost cache."""
SEMIORTHOGONAL = 1e-10
"""Overlaps of a new vector with the earlier ones, relative to its norm, that need no correction: the projected operator
is accurate to rounding as long as they stay below the root of the rounding error (Simon 1984, Math. Comp. 42, 115)."""


@compiled
def lowest(tensor, before, after, left, right, local, operator, vectors, tolerance, scratch):
    """Lowest Ritz value, its normalized vector, estimated residual norm, products used, scratch elements needed.

    tensor: start by left (any norm). before, after: both environments by bra; the bonds and the operator as in
    contraction.plan. At most `vectors` products with the operator; stops early once the residual is below `tolerance`.
    """
    delta_left, start, end = operator[0], operator[2], operator[3]
    steps = plan(left, right, local, operator, end, NO_CHANNEL, right)
    sizes = steps[6]
    size = tensor.size
    vectors = min(vectors, size)
    a = before.size
    b, c, d = a + sizes[4], a + sizes[4] + sizes[2], a + sizes[4] + sizes[2] + sizes[3]
    needed = d + (vectors + 1) * size
    work = room(scratch, needed)
    by_ket, buffers = work[:a], (work[a:b], work[b:c], work[c:d])
    basis = work[d:needed].reshape(vectors + 1, size)
    to_ket(before, left[0], left[1], delta_left, start, by_ket)
    clear(buffers[1], steps)

    diagonal, beside = np.zeros(vectors), np.zeros(vectors)
    overlaps = np.zeros(vectors, tensor.dtype)
    scaled(basis[0], 1 / np.sqrt(np.vdot(tensor, tensor).real), tensor)
    used = 0
    value = 0.0
    residual = 0.0
    norm = 0.0
    ritz = np.ones(1)
    for k in range(vectors):
        product = basis[k + 1]
        apply(basis[k], product, by_ket, after, steps, buffers)
        used = k + 1
        diagonal[k] = np.vdot(basis[k], product).real
        norm = orthogonalize(basis, used, diagonal[k], norm, overlaps)
        diagonal[k] += overlaps[k].real
        value, ritz = lowest_of_tridiagonal(diagonal[:used], beside[:k])
        residual = norm * abs(ritz[k])
        if residual <= tolerance or used == vectors or norm < 1e-13 * (abs(value) + 1e-300):
            break
        beside[k] = norm
        scaled(product, 1 / norm, product)
    result = combination(basis, ritz)
    scaled(result, 1 / np.sqrt(np.vdot(result, result).real), result)
    return value, result, residual, used, needed


@compiled
def orthogonalize(basis, used, diagonal, before, overlaps):
    """Make basis[used] orthogonal to the earlier rows; its norm then.

    First the two of the Lanczos recurrence are subtracted, diagonal * basis[used - 1] + before * basis[used - 2], then
    the overlaps, returned in place, with all of them where they matter.
    """
    size = basis.shape[1]
    overlaps[:used] = 0
    total = 0.0
    for first in range(0, size, CHUNK):
        last = min(first + CHUNK, size)
        piece = basis[used, first:last]
        if used > 1:
            subtract_both(piece, diagonal, basis[used - 1, first:last], before, basis[used - 2, first:last])
        else:
            subtract(piece, diagonal, basis[used - 1, first:last])
        for j in range(used):
            overlaps[j] += np.vdot(basis[j, first:last], piece)
        total += np.vdot(piece, piece).real
    if np.abs(overlaps[:used]).max() <= SEMIORTHOGONAL * np.sqrt(total):
        return np.sqrt(total)
    total = 0.0
    for first in range(0, size, CHUNK):
        last = min(first + CHUNK, size)
        piece = basis[used, first:last]
        for j in range(used):
            subtract(piece, overlaps[j], basis[j, first:last])
        total += np.vdot(piece, piece).real
    return np.sqrt(total)


@compiled
def lowest_of_tridiagonal(diagonal, beside):
    """Lowest eigenvalue of a small symmetric tridiagonal matrix by bisection (Givens 1954), its eigenvector from the
    twisted factorization (Dhillon, Parlett 2004, Linear Algebra Appl. 387, 1; both from memory). Compiled code reaches
    no tridiagonal solver of a library, and the dense one costs more here than a product with a small tensor."""
    n = diagonal.size
    low = diagonal[0]
    high = diagonal[0]
    for i in range(n):
        reach = (abs(beside[i - 1]) if i > 0 else 0.0) + (abs(beside[i]) if i < n - 1 else 0.0)
        low = min(low, diagonal[i] - reach)
        high = min(high, diagonal[i])
    tiny = 1e-30 * (abs(low) + abs(high)) + 1e-300
    forward, backward = np.empty(n), np.empty(n)
    while True:
        middle = 0.5 * (low + high)
        if not low < middle < high:  # also where numbers overflowed
            break
        pivot = 1.0
        below = False
        for i in range(n):
            pivot = diagonal[i] - middle - (beside[i - 1] ** 2 / pivot if i > 0 else 0.0)
            if pivot < 0:
                below = True
                break
            pivot = max(pivot, tiny)
        if below:
            high = middle
        else:
            low = middle
    for i in range(n):
        forward[i] = diagonal[i] - low - (beside[i - 1] ** 2 / forward[i - 1] if i > 0 else 0.0)
        if abs(forward[i]) < tiny:
            forward[i] = tiny
    for i in range(n - 1, -1, -1):
        backward[i] = diagonal[i] - low - (beside[i] ** 2 / backward[i + 1] if i < n - 1 else 0.0)
        if abs(backward[i]) < tiny:
            backward[i] = tiny
    twist = np.argmin(np.abs(forward + backward - diagonal + low))
    vector = np.empty(n)
    vector[twist] = 1.0
    for i in range(twist - 1, -1, -1):
        vector[i] = -beside[i] / forward[i] * vector[i + 1]
    for i in range(twist + 1, n):
        vector[i] = -beside[i - 1] / backward[i] * vector[i - 1]
    return low, vector / np.sqrt(np.sum(vector * vector))


@compiled
def combination(basis, factors):
    """Sum of factors[j] * basis[j]."""
    size = basis.shape[1]
    result = np.empty(size, basis.dtype)
    for first in range(0, size, CHUNK):
        last = min(first + CHUNK, size)
        scaled(result[first:last], factors[0], basis[0, first:last])
        for j in range(1, factors.size):
            subtract(result[first:last], -factors[j], basis[j, first:last])
    return result


@compiled
def scaled(target, factor, vector):
    """target = factor * vector in place."""
    for x in range(target.size):
        target[x] = factor * vector[x]


@compiled
def subtract(target, factor, vector):
    """target -= factor * vector in place."""
    for x in range(target.size):
        target[x] -= factor * vector[x]


@compiled
def subtract_both(target, factor, vector, second, other):
    """target -= factor * vector + second * other in place."""
    for x in range(target.size):
        target[x] -= factor * vector[x] + second * other[x]
