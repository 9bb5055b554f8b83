"""Charge blocks in flat buffers: where every block of a site tensor and of an environment lies.

A bond is a pair of arrays (charges, dims): distinct integers (the sum of S + m over the sites to its left) in any
order, and how many states carry each. A site has one integer charge per local state. The block (i, s) of a site tensor
joins left charge i and local state s to the right charge charges[i] + local[s]; a block whose right charge is not on
the bond does not exist.

Layout `by left` of a site tensor: for every left charge one row-major matrix, rows its states, columns (s, right
states). Layout `by right`: for every right charge one matrix, rows (s, left states), columns its states.

An environment holds one matrix E[a][bra, ket] per operator channel a of charge delta[a], non-zero where bra = ket +
delta[a]. Layout `by bra`: for every bra charge one matrix, rows (a, ket states), columns bra states; `by ket`: rows (a,
bra states), columns ket states. One channel, whose matrix is the identity by orthonormality, is skipped and never
stored.

Looking from the other end of the chain (`mirror`) replaces every bond charge q by total - q, keeping the order of the
arrays: the environments need no copy then, site tensors are transposed block by block. So sweeps are written for one
direction only.
"""

import numpy as np

from manybody.quantum.compiled import compiled, inlined


@inlined
def copy(target, goal, goal_stride, origin, source, source_stride, rows, columns):
    """Copy a block. Slices of whole rows let the compiler use the processor's vectors, which offsets that might be
    negative forbid; a call would cost more than the copy."""
    for x in range(rows):
        u = origin[source + x * source_stride : source + x * source_stride + columns]
        v = target[goal + x * goal_stride : goal + x * goal_stride + columns]
        for y in range(columns):
            v[y] = u[y]


@inlined
def copy_transposed(target, goal, goal_stride, origin, source, source_stride, rows, columns):
    """Copy the transpose of a block of these rows and columns."""
    for y in range(columns):
        v = target[goal + y * goal_stride : goal + y * goal_stride + rows]
        for x in range(rows):
            v[x] = origin[np.uint64(source + x * source_stride + y)]


@compiled
def lookup(charges):
    """Table and lowest charge such that table[q - low] is the index of charge q, -1 where absent."""
    low = charges.min()
    table = np.full(charges.max() - low + 1, -1, np.int64)
    for index in range(charges.size):
        table[charges[index] - low] = index
    return table, low


@compiled
def find(table, low, charge):
    position = charge - low
    if position < 0 or position >= table.size:
        return -1
    return table[position]


@compiled
def by_left(left, left_dims, right, right_dims, local):
    """Layout by left: right charge index and first column per (i, s), width and first element per i, total size."""
    table, low = lookup(right)
    target = np.full((left.size, local.size), -1, np.int64)
    column = np.zeros((left.size, local.size), np.int64)
    width = np.zeros(left.size, np.int64)
    start = np.zeros(left.size, np.int64)
    size = 0
    for i in range(left.size):
        start[i] = size
        for s in range(local.size):
            j = find(table, low, left[i] + local[s])
            if j >= 0:
                target[i, s] = j
                column[i, s] = width[i]
                width[i] += right_dims[j]
        size += left_dims[i] * width[i]
    return target, column, width, start, size


@compiled
def by_right(left, left_dims, right, local):
    """Layout by right: first row per (i, s), -1 where absent, and height per right charge."""
    table, low = lookup(left)
    row = np.full((left.size, local.size), -1, np.int64)
    height = np.zeros(right.size, np.int64)
    for j in range(right.size):
        for s in range(local.size):
            i = find(table, low, right[j] - local[s])
            if i >= 0:
                row[i, s] = height[j]
                height[j] += left_dims[i]
    return row, height


@compiled
def by_bra(charges, dims, delta, skip):
    """Environment by bra: ket index and first row per (channel, bra), height and first element per bra, total size."""
    table, low = lookup(charges)
    partner = np.full((delta.size, charges.size), -1, np.int64)
    row = np.zeros((delta.size, charges.size), np.int64)
    height = np.zeros(charges.size, np.int64)
    start = np.zeros(charges.size, np.int64)
    size = 0
    for j in range(charges.size):
        start[j] = size
        for b in range(delta.size):
            k = find(table, low, charges[j] - delta[b])
            if b != skip and k >= 0:
                partner[b, j] = k
                row[b, j] = height[j]
                height[j] += dims[k]
        size += height[j] * dims[j]
    return partner, row, height, start, size


@compiled
def by_ket(charges, dims, delta, skip):
    """Environment by ket: the same as by_bra with bra and ket exchanged."""
    return by_bra(charges, dims, -delta, skip)


@compiled
def to_ket(environment, charges, dims, delta, skip, result):
    """Copy an environment stored by bra into `result`, of the same size, in the layout by ket."""
    _, bra_row, _, bra_start, _ = by_bra(charges, dims, delta, skip)
    ket_partner, ket_row, _, ket_start, _ = by_ket(charges, dims, delta, skip)
    for k in range(charges.size):
        for a in range(delta.size):
            j = ket_partner[a, k]
            if j >= 0:
                source = bra_start[j] + bra_row[a, j] * dims[j]
                target = ket_start[k] + ket_row[a, k] * dims[k]
                copy_transposed(result, target, dims[k], environment, source, dims[j], dims[k], dims[j])


@compiled
def mirror_tensor(tensor, left, left_dims, right, right_dims, local, total):
    """Site tensor (by left) as seen from the other end of a chain with the given total charge (by left there)."""
    target, column, width, start, size = by_left(left, left_dims, right, right_dims, local)
    _, other_column, other_width, other_start, _ = by_left(total - right, right_dims, total - left, left_dims, local)
    result = np.empty(size, tensor.dtype)
    for i in range(left.size):
        for s in range(local.size):
            j = target[i, s]
            if j >= 0:
                source = start[i] + column[i, s]
                goal = other_start[j] + other_column[j, s]
                copy_transposed(result, goal, other_width[j], tensor, source, width[i], left_dims[i], right_dims[j])
    return result


@compiled
def gather_right(tensor, left, left_dims, right, right_dims, local):
    """Site tensor by left -> by right; groups follow each other in the order of the right charges."""
    result = np.empty_like(tensor)
    gather_into(result, tensor, left, left_dims, right, right_dims, local)
    return result


@compiled
def gather_into(result, tensor, left, left_dims, right, right_dims, local):
    target, column, width, start, _ = by_left(left, left_dims, right, right_dims, local)
    row, height = by_right(left, left_dims, right, local)
    first = offsets(height * right_dims)
    for i in range(left.size):
        for s in range(local.size):
            j = target[i, s]
            if j >= 0:
                source = start[i] + column[i, s]
                goal = first[j] + row[i, s] * right_dims[j]
                copy(result, goal, right_dims[j], tensor, source, width[i], left_dims[i], right_dims[j])


@compiled
def scatter_left(grouped, left, left_dims, right, right_dims, local):
    """Site tensor by right -> by left, the inverse of gather_right."""
    target, column, width, start, size = by_left(left, left_dims, right, right_dims, local)
    row, height = by_right(left, left_dims, right, local)
    first = offsets(height * right_dims)
    result = np.empty(size, grouped.dtype)
    for i in range(left.size):
        for s in range(local.size):
            j = target[i, s]
            if j >= 0:
                goal = start[i] + column[i, s]
                source = first[j] + row[i, s] * right_dims[j]
                copy(result, goal, width[i], grouped, source, right_dims[j], left_dims[i], right_dims[j])
    return result


@compiled
def offsets(sizes):
    """First element of each of several pieces that follow each other."""
    first = np.zeros(sizes.size, np.int64)
    for index in range(1, sizes.size):
        first[index] = first[index - 1] + sizes[index - 1]
    return first


@compiled
def reachable(left, right, first_local, second_local):
    """Charges of the middle bond that both sides can reach: left + first and right - second, ascending."""
    low = left.min() + first_local.min()
    offered = np.zeros(left.max() + first_local.max() - low + 1, np.bool_)
    for i in range(left.size):
        for s in range(first_local.size):
            offered[left[i] + first_local[s] - low] = True
    wanted = np.zeros_like(offered)
    for j in range(right.size):
        for s in range(second_local.size):
            place = right[j] - second_local[s] - low
            if 0 <= place < wanted.size:
                wanted[place] = True
    return low + np.nonzero(offered & wanted)[0]


@compiled
def reach(left, left_dims, bond, bond_dims, right, right_dims, first_local, second_local):
    """Charges `reachable` on the middle bond, states of each on the present bond, whether it has no others."""
    charges = reachable(left, right, first_local, second_local)
    table, low = lookup(charges)
    dims = np.zeros(charges.size, np.int64)
    complete = True
    for index in range(bond.size):
        place = find(table, low, bond[index])
        if place >= 0:
            dims[place] = bond_dims[index]
        else:
            complete = False
    return charges, dims, complete


@compiled
def join_pair(grouped, middle, left, left_dims, right, right_dims, first_local, second_local):
    """Matrices per middle charge, rows (s1, left states), columns (s2, right states) -> pair tensor by left with local
    states s1 * d2 + s2 of charge first_local[s1] + second_local[s2]; blocks whose middle charge is not listed are
    zero."""
    return _regroup(grouped, middle, left, left_dims, right, right_dims, first_local, second_local, True)


@compiled
def cut_pair(pair, middle, left, left_dims, right, right_dims, first_local, second_local):
    """The inverse of join_pair, for any list of middle charges."""
    return _regroup(pair, middle, left, left_dims, right, right_dims, first_local, second_local, False)


@compiled
def pair_charges(first_local, second_local):
    """Charges of the local states s1 * d2 + s2 of two sites."""
    result = np.empty(first_local.size * second_local.size, np.int64)
    for s in range(first_local.size):
        for t in range(second_local.size):
            result[s * second_local.size + t] = first_local[s] + second_local[t]
    return result


@compiled
def pair_shapes(middle, left, left_dims, right, right_dims, first_local, second_local):
    """(n, 2) rows and columns of the matrices of cut_pair."""
    _, height = by_right(left, left_dims, middle, first_local)
    _, _, width, _, _ = by_left(middle, np.ones_like(middle), right, right_dims, second_local)
    return np.stack((height, width), axis=1)


@compiled
def _regroup(source, middle, left, left_dims, right, right_dims, first_local, second_local, joining):
    target, column, width, start, size = by_left(
        left, left_dims, right, right_dims, pair_charges(first_local, second_local)
    )
    row, height = by_right(left, left_dims, middle, first_local)
    _, mid_column, mid_width, _, _ = by_left(middle, np.ones_like(middle), right, right_dims, second_local)
    first = offsets(height * mid_width)
    table, low = lookup(middle)
    if joining:
        result = np.zeros(size, source.dtype)
    else:
        result = np.empty((height * mid_width).sum(), source.dtype)
    for i in range(left.size):
        for s in range(first_local.size):
            m = find(table, low, left[i] + first_local[s])
            if m < 0:
                continue
            for t in range(second_local.size):
                j = target[i, s * second_local.size + t]
                if j < 0:
                    continue
                pair = start[i] + column[i, s * second_local.size + t]
                group = first[m] + row[i, s] * mid_width[m] + mid_column[m, t]
                if joining:
                    copy(result, pair, width[i], source, group, mid_width[m], left_dims[i], right_dims[j])
                else:
                    copy(result, group, mid_width[m], source, pair, width[i], left_dims[i], right_dims[j])
    return result
