"""Weights and directions of many matrices at once, one per charge: eigenvalues of the Gram matrix of the smaller side.

Where only the largest weights of all matrices will be kept, a Gram matrix G is first replaced by the product of a few
columns, G = F^T conj(F) + E, by Cholesky's method with the largest remaining diagonal element of all matrices as the
next pivot (Higham 1990, in Reliable Numerical Computation, 161, from memory). E is positive, so no weight changes by
more than its trace, and what a cut discards exceeds the least possible by no more than that.
"""

import numpy as np

from manybody.quantum.compiled import compiled, conjugate
from manybody.quantum.eigenproblem import eigenvectors
from manybody.quantum.products import ADJOINT, PLAIN, product

WORTHWHILE = 12
"""Sides from which on the columns of a Gram matrix are reduced; smaller eigenproblems are not worth it."""
MOST = 0.7
"""Share of the columns that makes an eigenproblem of all of them the cheaper way."""
MISSED = 0.1
"""Trace of E over the weight that may be discarded, or over the trace left by as many pivots as states may stay."""


@compiled
def spectra(matrices, shapes, limit, allowed):
    """Squared singular values (ascending per group and one group after the other, `ranks` of each), the vectors behind
    them, ranks (n,), the weight missing from them.

    matrices: row-major matrices one after the other, shapes (n, 2). vectors: per group one in each row, rank x side,
    orthogonal only up to rounding over weight where rank < side = min(shape). All weights where allowed =
    0; otherwise those that matter to split.choose with the same limit and share. Weights below about 1e-16 of the
    largest are rounding. Raises FloatingPointError where all is zero or something is no number.
    """
    count = shapes.shape[0]
    sides = np.minimum(shapes[:, 0], shapes[:, 1])
    grams = np.empty((sides * sides).sum(), matrices.dtype)
    first, place = 0, 0
    for g in range(count):
        m, n = shapes[g]
        side = sides[g]
        if m <= n:
            product(grams, place, matrices, first, matrices, first, m, n, m, PLAIN, ADJOINT)
        else:
            product(grams, place, matrices, first, matrices, first, n, m, n, ADJOINT, PLAIN)
        first += m * n
        place += side * side
    norm = np.vdot(matrices, matrices).real
    if not 0 < norm < np.inf:
        raise FloatingPointError("the tensor to cut is zero or has overflowed")
    if allowed > 0 and sides.max() >= WORTHWHILE:
        ranks, missing, factors = columns(grams, sides, limit, allowed)
    else:
        ranks, missing, factors = sides.copy(), 0.0, grams
    weights = np.empty(ranks.sum())
    vectors = np.empty((sides * ranks).sum(), matrices.dtype)
    place, first, goal = 0, 0, 0
    for g in range(count):
        side, rank = sides[g], ranks[g]
        states = vectors[goal : goal + rank * side].reshape(rank, side)
        found = weights[first : first + rank]
        if 0 < rank == side:
            eigenvectors(grams[place : place + side * side].reshape(side, side), found, states)
        elif rank > 0:
            overlap, turn = np.empty((rank, rank), grams.dtype), np.empty((rank, rank), grams.dtype)
            product(overlap, 0, factors, place, factors, place, rank, side, rank, PLAIN, ADJOINT)
            turned(overlap)  # QL wants the small elements first
            eigenvectors(conjugate(overlap), found, turn)
            for r in range(rank):
                turned(turn[r : r + 1])
            product(vectors, goal, turn, 0, factors, place, rank, rank, side)
            for r in range(rank):
                if found[r] > 0:
                    states[r] *= 1 / np.sqrt(found[r])
        found[:] = np.maximum(found, 0.0)
        place += side * side
        first += rank
        goal += side * rank
    return weights, vectors, ranks, missing


@compiled
def turned(matrix):
    """Reverse the order of rows and columns in place."""
    flat = matrix.reshape(matrix.size)
    for x in range(flat.size // 2):
        y = flat.size - 1 - x
        flat[x], flat[y] = flat[y], flat[x]


@compiled
def columns(grams, sides, limit, allowed):
    """Ranks per group, trace of E over all groups, and the rows of F per group, side * side elements apart."""
    count = sides.size
    start = np.zeros(count, np.int64)
    first = np.zeros(count, np.int64)
    for g in range(1, count):
        start[g] = start[g - 1] + sides[g - 1] ** 2
        first[g] = first[g - 1] + sides[g - 1]
    factors = np.empty_like(grams)
    rest = np.empty(sides.sum())  # diagonal elements of E
    traces, largest = np.zeros(count), np.zeros(count)
    pivot = np.zeros(count, np.int64)
    ranks = np.zeros(count, np.int64)
    for g in range(count):
        for x in range(sides[g]):
            element = grams[start[g] + x * (sides[g] + 1)].real
            rest[first[g] + x] = element
            traces[g] += element
            if element > largest[g]:
                largest[g] = element
                pivot[g] = x
    total = missing = traces.sum()
    enough = MISSED * allowed * total
    states = 0
    while missing > enough:
        g = np.argmax(largest)
        if largest[g] <= 1e-17 * total:
            break
        side, rank = sides[g], ranks[g]
        own = rest[first[g] : first[g] + side]
        if rank == side:  # the rest is rounding
            traces[g], largest[g] = 0.0, 0.0
            continue
        states += 1
        i = pivot[g]
        factor = factors[start[g] : start[g] + side * side].reshape(side, side)
        row = factor[rank]
        row[:] = conjugate(grams[start[g] + i * side : start[g] + (i + 1) * side])
        r = 0
        while r + 4 <= rank:  # four at a time: the row is read and written once
            a, b, c, d = factor[r], factor[r + 1], factor[r + 2], factor[r + 3]
            p, q, s, t = np.conj(a[i]), np.conj(b[i]), np.conj(c[i]), np.conj(d[i])
            for x in range(side):
                row[x] -= (p * a[x] + q * b[x]) + (s * c[x] + t * d[x])
            r += 4
        while r < rank:
            share, earlier = np.conj(factor[r, i]), factor[r]
            for x in range(side):
                row[x] -= share * earlier[x]
            r += 1
        scale = 1 / np.sqrt(largest[g])
        trace, most = 0.0, 0.0
        for x in range(side):
            row[x] *= scale
            own[x] -= row[x].real ** 2 + row[x].imag ** 2
            trace += own[x]
            if own[x] > most:
                most = own[x]
                pivot[g] = x
        traces[g], largest[g] = trace, most
        missing = traces.sum()
        ranks[g] = rank + 1
        if states == limit:
            enough = max(enough, MISSED * missing)
    for g in range(count):
        if ranks[g] > 0 and (sides[g] < WORTHWHILE or ranks[g] > MOST * sides[g]):
            ranks[g] = sides[g]
            traces[g] = 0.0
    return ranks, np.maximum(traces, 0.0).sum(), factors
