"""Splitting a tensor across a bond: density matrix per charge, one cut by weight over all charges, orthonormal left
part."""

import numpy as np

from manybody.quantum import blocks
from manybody.quantum.compiled import compiled, conjugate
from manybody.quantum.products import ADJOINT, PLAIN, product
from manybody.quantum.spectra import spectra

FEW = 16
"""States of a bond up to which no charge is cut away for its weight: of many, one that matters comes back."""


@compiled
def choose(weights, ranks, missing, limit, allowed):
    """How many states to keep per group, and the relative weight discarded: the smallest go first while at most `limit`
    states stay or the discarded share stays below `allowed`. At least one stays; weights at rounding level never stay.
    For the first three arguments see spectra.

    Where FEW states or less stay, the heaviest of a charge goes only if the limit asks for it: steps of two sites do
    not bring back a charge that is lost if spins are flipped beyond neighbours.
    """
    order = np.argsort(weights)
    total = weights.sum() + missing
    least = 1e-16 * total
    heaviest = np.zeros(weights.size, np.bool_)
    place = 0
    for g in range(ranks.size):
        place += ranks[g]
        if ranks[g] > 0:
            heaviest[place - 1] = True
    chosen = np.ones(weights.size, np.bool_)
    discarded = missing
    stay = weights.size
    for index in order:
        weight = weights[index]
        if stay == 1:
            break
        if weight > least and stay <= limit:
            if discarded + weight > allowed * total:
                break
            if heaviest[index] and stay <= FEW:
                continue
        discarded += weight
        chosen[index] = False
        stay -= 1
    kept = np.zeros(ranks.size, np.int64)
    place = 0
    for g in range(ranks.size):
        kept[g] = chosen[place : place + ranks[g]].sum()
        place += ranks[g]
    return kept, discarded / total


@compiled
def parts(matrices, shapes, vectors, ranks, kept):
    """Orthonormal parts Q (rows x kept) and carries C (kept x columns), group after group, matrix = Q C up to what was
    cut."""
    q_size = 0
    c_size = 0
    for g in range(shapes.shape[0]):
        q_size += shapes[g, 0] * kept[g]
        c_size += shapes[g, 1] * kept[g]
    isometry = np.empty(q_size, matrices.dtype)
    carry = np.empty(c_size, matrices.dtype)
    first = 0
    goal = 0
    q_place = 0
    c_place = 0
    for g in range(shapes.shape[0]):
        m, n = shapes[g]
        side, rank = min(m, n), ranks[g]
        k = kept[g]
        if k > 0:
            states = vectors[goal : goal + rank * side].reshape(rank, side)
            chosen = np.empty((side, k), matrices.dtype)
            for c in range(k):
                chosen[:, c] = states[rank - 1 - c]
            q_out = isometry[q_place : q_place + m * k].reshape(m, k)
            if m > n:
                image = np.empty((m, k), matrices.dtype)
                product(image, 0, matrices, first, chosen, 0, m, n, k)
                r = orthonormal_columns(image, q_out)
            elif rank == side:
                q_out[:] = chosen
            else:
                orthonormal_columns(chosen, q_out)
            if m > n and rank == side:
                product(carry, c_place, r, 0, chosen, 0, k, k, n, PLAIN, ADJOINT)
            else:
                product(carry, c_place, isometry, q_place, matrices, first, k, m, n, ADJOINT, PLAIN)
        first += m * n
        goal += side * rank
        q_place += m * k
        c_place += k * n
    return isometry, carry


@compiled
def orthonormal_columns(x, q):
    """q r = x with orthonormal columns q, written in place; returns r.

    The columns of x are orthogonal but for rounding, so one Cholesky factor (Stathopoulos, Wu 2002, SIAM J. Sci.
    Comput. 23, 2165, from memory) mends them at a fraction of the cost of Householder reflections, which take over
    where the smallest columns are too far off.
    """
    m, k = x.shape
    overlap = np.empty((k, k), x.dtype)
    product(overlap, 0, x, 0, x, 0, k, m, k, ADJOINT, PLAIN)
    lengths = np.empty(k)
    for c in range(k):
        lengths[c] = np.sqrt(overlap[c, c].real)
    if lengths.min() > 0:
        off = 0.0
        for c in range(k):
            for d in range(k):
                overlap[c, d] /= lengths[c] * lengths[d]
                off += abs(overlap[c, d] - (c == d)) ** 2
        if off < 0.01:
            factor = np.linalg.cholesky(overlap)
            inverse = inverse_of_lower(factor)
            for c in range(k):
                for d in range(c + 1):
                    inverse[c, d] /= lengths[d]
            product(q, 0, x, 0, inverse, 0, m, k, k, PLAIN, ADJOINT)
            return np.ascontiguousarray(conjugate(factor).T) * lengths
    full, r = np.linalg.qr(x)
    q[:] = full
    return np.ascontiguousarray(r)


@compiled
def inverse_of_lower(factor):
    """Inverse of a lower triangular matrix, row by row: a few rows cost less than a call of a library."""
    k = factor.shape[0]
    inverse = np.zeros_like(factor)
    for i in range(k):
        for j in range(i):
            share = factor[i, j]
            for x in range(j + 1):
                inverse[i, x] -= share * inverse[j, x]
        for x in range(i):
            inverse[i, x] /= factor[i, i]
        inverse[i, i] = 1 / factor[i, i]
    return inverse


@compiled
def orthonormal(matrices, shapes):
    """QR of every group without any cut: kept = min(rows, columns)."""
    kept = np.minimum(shapes[:, 0], shapes[:, 1])
    q_size = 0
    c_size = 0
    for g in range(shapes.shape[0]):
        q_size += shapes[g, 0] * kept[g]
        c_size += shapes[g, 1] * kept[g]
    isometry = np.empty(q_size, matrices.dtype)
    carry = np.empty(c_size, matrices.dtype)
    first = 0
    q_place = 0
    c_place = 0
    for g in range(shapes.shape[0]):
        m, n = shapes[g]
        k = kept[g]
        if k > 0:
            q, r = np.linalg.qr(matrices[first : first + m * n].reshape(m, n))
            isometry[q_place : q_place + m * k] = np.ascontiguousarray(q).reshape(m * k)
            carry[c_place : c_place + k * n] = np.ascontiguousarray(r).reshape(k * n)
        first += m * n
        q_place += m * k
        c_place += k * n
    return isometry, carry, kept


@compiled
def carry_over(carry, kept, dims, tensor, widths):
    """carry (kept x dims per charge) times the next tensor by left (dims x width): the new tensor by left, groups with
    kept = 0 left out."""
    size = 0
    for g in range(kept.size):
        size += kept[g] * widths[g]
    result = np.empty(size, tensor.dtype)
    c_place = 0
    t_place = 0
    goal = 0
    for g in range(kept.size):
        k, n, w = kept[g], dims[g], widths[g]
        product(result, goal, carry, c_place, tensor, t_place, k, n, w)
        c_place += k * n
        t_place += n * w
        goal += k * w
    return result


@compiled
def cut(tensor, left, left_dims, right, right_dims, local, limit, allowed):
    """Isometry by right, normalized carry, states kept per right charge and relative weight discarded for a site tensor
    by left that is cut at its right bond (see choose, parts)."""
    matrices = blocks.gather_right(tensor, left, left_dims, right, right_dims, local)
    _, height = blocks.by_right(left, left_dims, right, local)
    shapes = np.stack((height, right_dims), axis=1)
    weights, states, ranks, missing = spectra(matrices, shapes, np.int64(0), 0.0)
    kept, discarded = choose(weights, ranks, missing, limit, allowed)
    isometry, carry = parts(matrices, shapes, states, ranks, kept)
    carry *= 1 / np.sqrt(np.vdot(carry, carry).real)
    return isometry, carry, kept, discarded


@compiled
def cut_pair(pair, left, left_dims, right, right_dims, first_local, second_local, limit, allowed):
    """A pair tensor by left cut in the middle: isometry on the first site by left, the normalized rest on the second,
    charges and dims of the new bond, relative weight discarded."""
    middle = blocks.reachable(left, right, first_local, second_local)
    matrices = blocks.cut_pair(pair, middle, left, left_dims, right, right_dims, first_local, second_local)
    shapes = blocks.pair_shapes(middle, left, left_dims, right, right_dims, first_local, second_local)
    weights, states, ranks, missing = spectra(matrices, shapes, limit, allowed)
    kept, discarded = choose(weights, ranks, missing, limit, allowed)
    isometry, carry = parts(matrices, shapes, states, ranks, kept)
    stay = kept > 0
    charges, dims = middle[stay], kept[stay]
    first = blocks.scatter_left(isometry, left, left_dims, charges, dims, first_local)
    carry *= 1 / np.sqrt(np.vdot(carry, carry).real)
    return first, carry, charges, dims, discarded


@compiled
def join_pair(first, second, left, left_dims, middle, middle_dims, right, right_dims, first_local, second_local):
    """Two neighbouring site tensors by left as one pair tensor by left."""
    grouped = blocks.gather_right(first, left, left_dims, middle, middle_dims, first_local)
    _, height = blocks.by_right(left, left_dims, middle, first_local)
    _, _, widths, _, _ = blocks.by_left(middle, middle_dims, right, right_dims, second_local)
    matrices = carry_over(grouped, height, middle_dims, second, widths)
    return blocks.join_pair(matrices, middle, left, left_dims, right, right_dims, first_local, second_local)


@compiled
def pass_on(
    isometry, carry, kept, tensor, left, left_dims, right, right_dims, after, after_dims, local, next_local
):  # fmt: skip
    """Isometry by left, carry times the next site tensor, charges and dims of the bond between them."""
    _, _, widths, _, _ = blocks.by_left(right, right_dims, after, after_dims, next_local)
    following = carry_over(carry, kept, right_dims, tensor, widths)
    stay = kept > 0
    charges, dims = right[stay], kept[stay]
    return blocks.scatter_left(isometry, left, left_dims, charges, dims, local), following, charges, dims
