"""Splitting a tensor across a bond: density matrix per charge, one cut by weight over all charges, orthonormal left
part."""

import numpy as np

from manybody.quantum import blocks
from manybody.quantum.compiled import compiled, conjugate


@compiled
def spectra(matrices, shapes):
    """Squared singular values, ascending per group and one group after the other, and the eigenvectors behind them.

    matrices: row-major matrices one after the other, shapes (n, 2). The Gram matrix of the smaller side is
    diagonalized: weights below about 1e-16 of the largest are rounding.
    """
    total = 0
    room = 0
    for g in range(shapes.shape[0]):
        side = min(shapes[g, 0], shapes[g, 1])
        total += side
        room += side * side
    weights = np.empty(total)
    vectors = np.empty(room, matrices.dtype)
    first = 0
    place = 0
    goal = 0
    for g in range(shapes.shape[0]):
        m, n = shapes[g]
        x = matrices[first : first + m * n].reshape(m, n)
        side = min(m, n)
        gram = np.empty((side, side), matrices.dtype)
        if m <= n:
            np.dot(x, conjugate(x).T, gram)
        else:
            np.dot(conjugate(x).T, x, gram)
        if side == 1:
            weights[place] = gram[0, 0].real
            vectors[goal] = 1.0
        else:
            values, states = np.linalg.eigh(gram)
            weights[place : place + side] = np.maximum(values, 0.0)
            vectors[goal : goal + side * side] = np.ascontiguousarray(states).reshape(side * side)
        first += m * n
        place += side
        goal += side * side
    return weights, vectors


@compiled
def choose(weights, shapes, limit, allowed):
    """How many states to keep per group, and the relative weight discarded: the smallest go first while at most `limit`
    states stay or the discarded share stays below `allowed`. At least one stays; weights at rounding level never
    stay."""
    order = np.argsort(weights)
    total = weights.sum()
    least = 1e-16 * total
    discarded = 0.0
    dropped = 0
    while dropped < weights.size - 1:
        weight = weights[order[dropped]]
        if weight > least and weights.size - dropped <= limit and discarded + weight > allowed * total:
            break
        discarded += weight
        dropped += 1
    kept = np.zeros(shapes.shape[0], np.int64)
    cut = np.ones(weights.size, np.bool_)
    cut[order[:dropped]] = False
    place = 0
    for g in range(shapes.shape[0]):
        side = min(shapes[g, 0], shapes[g, 1])
        kept[g] = cut[place : place + side].sum()
        place += side
    return kept, discarded / total


@compiled
def parts(matrices, shapes, vectors, kept):
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
        side = min(m, n)
        k = kept[g]
        if k > 0:
            x = matrices[first : first + m * n].reshape(m, n)
            states = vectors[goal : goal + side * side].reshape(side, side)
            chosen = np.empty((side, k), matrices.dtype)
            for c in range(k):
                chosen[:, c] = states[:, side - 1 - c]
            q_out = isometry[q_place : q_place + m * k].reshape(m, k)
            c_out = carry[c_place : c_place + k * n].reshape(k, n)
            if m <= n:
                q_out[:] = chosen
                np.dot(conjugate(chosen).T, x, c_out)
            else:
                r = orthonormal_columns(np.dot(x, chosen), q_out)
                np.dot(r, conjugate(chosen).T, c_out)
        first += m * n
        goal += side * side
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
    k = x.shape[1]
    lengths = np.zeros(k)
    for row in range(x.shape[0]):
        for c in range(k):
            lengths[c] += abs(x[row, c]) ** 2
    lengths = np.sqrt(lengths)
    if lengths.min() > 0:
        unit = x / lengths
        overlap = np.dot(conjugate(unit).T, unit)
        off = 0.0
        for c in range(k):
            for d in range(k):
                off += abs(overlap[c, d] - (c == d)) ** 2
        if off < 0.01:
            factor = np.linalg.cholesky(overlap)
            np.dot(unit, conjugate(np.ascontiguousarray(np.linalg.inv(factor))).T, q)
            return np.ascontiguousarray(conjugate(factor).T) * lengths
    full, r = np.linalg.qr(x)
    q[:] = full
    return np.ascontiguousarray(r)


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
        if k > 0 and w > 0:
            np.dot(
                carry[c_place : c_place + k * n].reshape(k, n),
                tensor[t_place : t_place + n * w].reshape(n, w),
                result[goal : goal + k * w].reshape(k, w),
            )
        c_place += k * n
        t_place += n * w
        goal += k * w
    return result


@compiled
def cut(tensor, left, left_dims, right, right_dims, local, limit, allowed):
    """Isometry by right, carry, states kept per right charge and relative weight discarded for a site tensor by left
    that is cut at its right bond (see choose, parts)."""
    matrices = blocks.gather_right(tensor, left, left_dims, right, right_dims, local)
    _, height = blocks.by_right(left, left_dims, right, local)
    shapes = np.stack((height, right_dims), axis=1)
    weights, states = spectra(matrices, shapes)
    kept, discarded = choose(weights, shapes, limit, allowed)
    isometry, carry = parts(matrices, shapes, states, kept)
    return isometry, carry, kept, discarded


@compiled
def cut_pair(pair, left, left_dims, right, right_dims, first_local, second_local, limit, allowed):
    """A pair tensor by left cut in the middle: isometry on the first site by left, the normalized rest on the second,
    charges and dims of the new bond, relative weight discarded."""
    middle = blocks.reachable(left, right, first_local, second_local)
    matrices = blocks.cut_pair(pair, middle, left, left_dims, right, right_dims, first_local, second_local)
    shapes = blocks.pair_shapes(middle, left, left_dims, right, right_dims, first_local, second_local)
    weights, states = spectra(matrices, shapes)
    kept, discarded = choose(weights, shapes, limit, allowed)
    isometry, carry = parts(matrices, shapes, states, kept)
    stay = kept > 0
    charges, dims = middle[stay], kept[stay]
    first = blocks.scatter_left(isometry, left, left_dims, charges, dims, first_local)
    carry /= np.sqrt(np.vdot(carry, carry).real)
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
