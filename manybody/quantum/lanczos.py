"""Lowest eigenvector of the effective operator of a site or bond from a few Lanczos vectors (Lanczos 1950)."""

import numpy as np

from manybody.quantum.compiled import compiled
from manybody.quantum.contraction import apply


@compiled
def lowest(tensor, left, right, steps, vectors, tolerance):
    """Lowest Ritz value, its normalized vector, estimated residual norm, products used.

    tensor: start (any norm). At most `vectors` products with the operator; stops early once the residual is below
    `tolerance`. The basis is reorthogonalized against all earlier vectors.
    """
    sizes = steps[6]
    size = tensor.size
    vectors = min(vectors, size)
    basis = np.empty((vectors, size), tensor.dtype)
    product = np.empty(size, tensor.dtype)
    buffers = (np.empty(sizes[1], tensor.dtype), np.zeros(sizes[2], tensor.dtype), np.empty(sizes[3], tensor.dtype))
    projected = np.zeros((vectors, vectors))
    basis[0] = tensor / np.sqrt(np.vdot(tensor, tensor).real)
    used = 0
    value = 0.0
    residual = 0.0
    weights = np.ones(1)
    for k in range(vectors):
        apply(basis[k], product, left, right, steps, buffers)
        projected[k, k] = np.vdot(basis[k], product).real
        used = k + 1
        norm = np.sqrt(np.vdot(product, product).real)
        # One round leaves errors that the next products multiply by |energy| / norm; two are enough.
        for _ in range(2):
            before = norm
            for j in range(used):
                subtract(product, np.vdot(basis[j], product), basis[j])
            norm = np.sqrt(np.vdot(product, product).real)
            if norm > 0.7 * before:
                break
        if used == 1:
            value, weights = projected[0, 0], np.ones(1)
        else:
            values, states = np.linalg.eigh(projected[:used, :used])
            value, weights = values[0], np.ascontiguousarray(states[:, 0])
        residual = norm * abs(weights[-1])
        if residual <= tolerance or used == vectors or norm < 1e-13 * (abs(value) + 1e-300):
            break
        projected[k, k + 1] = norm
        projected[k + 1, k] = norm
        basis[k + 1] = product / norm
    result = np.zeros(size, tensor.dtype)
    for k in range(used):
        subtract(result, -weights[k], basis[k])
    result /= np.sqrt(np.vdot(result, result).real)
    return value, result, residual, used


@compiled
def subtract(target, factor, vector):
    """target -= factor * vector in place."""
    for x in range(target.size):
        target[x] -= factor * vector[x]
