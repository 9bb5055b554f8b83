"""Lowest eigenvector of the effective operator of a site or bond from a few Lanczos vectors (Lanczos 1950)."""

import numpy as np

from manybody.quantum.blocks import to_ket
from manybody.quantum.compiled import compiled, room
from manybody.quantum.contraction import apply, plan

CHUNK = 2048
"""Elements of every vector that are worked on together: they stay in the innermost cache."""


@compiled
def lowest(
    tensor, before, after, left, left_dims, right, right_dims, local, delta_left, delta_right, start, end, entries,
    weights, vectors, tolerance, scratch,
):  # fmt: skip
    """Lowest Ritz value, its normalized vector, estimated residual norm, products used, scratch elements needed.

    tensor: start by left (any norm). before, after: both environments by bra; the bonds and the operator as in
    contraction.plan. At most `vectors` products with the operator; stops early once the residual is below `tolerance`.
    """
    steps = plan(
        left, left_dims, right, right_dims, local, delta_left, delta_right, start, end, -1, entries, weights, right,
        right_dims,
    )  # fmt: skip
    sizes = steps[6]
    size = tensor.size
    vectors = min(vectors, size)
    a = before.size
    b, c, d = a + sizes[4], a + sizes[4] + sizes[2], a + sizes[4] + sizes[2] + sizes[3]
    needed = d + (vectors + 1) * size
    work = room(scratch, needed)
    by_ket, buffers = work[:a], (work[a:b], work[b:c], work[c:d])
    basis = work[d:needed].reshape(vectors + 1, size)
    to_ket(before, left, left_dims, delta_left, start, by_ket)

    projected = np.zeros((vectors, vectors))
    overlaps = np.zeros(vectors, tensor.dtype)
    basis[0] = tensor / np.sqrt(np.vdot(tensor, tensor).real)
    used = 0
    value = 0.0
    residual = 0.0
    norm = 0.0
    ritz = np.ones(1)
    for k in range(vectors):
        product = basis[k + 1]
        apply(basis[k], product, by_ket, after, steps, buffers)
        used = k + 1
        diagonal = np.vdot(basis[k], product).real
        norm = orthogonalize(basis, used, diagonal, norm, overlaps)
        projected[k, k] = diagonal + overlaps[k].real
        if used == 1:
            value, ritz = projected[0, 0], np.ones(1)
        else:
            values, states = np.linalg.eigh(projected[:used, :used])
            value, ritz = values[0], np.ascontiguousarray(states[:, 0])
        residual = norm * abs(ritz[-1])
        if residual <= tolerance or used == vectors or norm < 1e-13 * (abs(value) + 1e-300):
            break
        projected[k, k + 1] = norm
        projected[k + 1, k] = norm
        product /= norm
    result = combination(basis, ritz)
    result /= np.sqrt(np.vdot(result, result).real)
    return value, result, residual, used, needed


@compiled
def orthogonalize(basis, used, diagonal, before, overlaps):
    """Make basis[used] orthogonal to the earlier rows; its norm then.

    First the two of the Lanczos recurrence are subtracted, diagonal * basis[used - 1] + before * basis[used - 2], then
    the overlaps, returned in place, with all of them: one round leaves errors that the next products multiply by
    |energy| / norm, two are enough.
    """
    size = basis.shape[1]
    overlaps[:used] = 0
    for first in range(0, size, CHUNK):
        last = min(first + CHUNK, size)
        piece = basis[used, first:last]
        subtract(piece, diagonal, basis[used - 1, first:last])
        if used > 1:
            subtract(piece, before, basis[used - 2, first:last])
        for j in range(used):
            overlaps[j] += np.vdot(basis[j, first:last], piece)
    total = 0.0
    for first in range(0, size, CHUNK):
        last = min(first + CHUNK, size)
        piece = basis[used, first:last]
        for j in range(used):
            subtract(piece, overlaps[j], basis[j, first:last])
        total += np.vdot(piece, piece).real
    return np.sqrt(total)


@compiled
def combination(basis, factors):
    """Sum of factors[j] * basis[j]."""
    size = basis.shape[1]
    result = np.zeros(size, basis.dtype)
    for first in range(0, size, CHUNK):
        last = min(first + CHUNK, size)
        for j in range(factors.size):
            subtract(result[first:last], -factors[j], basis[j, first:last])
    return result


@compiled
def subtract(target, factor, vector):
    """target -= factor * vector in place."""
    for x in range(target.size):
        target[x] -= factor * vector[x]
