"""Contraction of a site tensor with its environments: two rounds of matrix products around one round of scaled block
copies.

    T[a, i', s, j] = sum_i L[a][i', i] A[i, s, j]                     one product per left ket charge i
    U[b, i', s', j] = sum_(a, s) W[a, b, s', s] T[a, i', s, j]        block by block
    O[i', s', j'] = sum_(b, j) U[b, i', s', j] R[b][j', j]            one product per right bra charge j'

L is stored by ket, R by bra (see blocks). The channel `start` of the left bond (nothing of an operator yet) and `end`
of the right one (operator finished) have the identity as their environment: A takes the place of T and O that of U. A
plan lists offsets, strides and shapes of every step; it depends only on charges, dimensions and W, and building it
costs a few microseconds per block.
"""

import numpy as np

from manybody.quantum.blocks import by_bra, by_ket, by_left, by_right, find, lookup
from manybody.quantum.compiled import compiled

FROM_T, TO_O, ASSIGN = 1, 2, 4


@compiled
def plan(
    left,
    left_dims,
    right,
    right_dims,
    local,
    delta_left,
    delta_right,
    start,
    end,
    skip,
    entries,
    weights,
    bra,
    bra_dims,
):
    """Everything `apply`, `half` and `close` need to know.

    entries (n, 4): left channel, right channel, outgoing and incoming local state. The right channel `skip` is left out
    of U altogether (-1: none), `end` goes to O. bra, bra_dims: right bond of the result, the ket bond itself except
    where new charges are probed (then O is meaningless). Returns first (n, 6): rows, inner, columns, offsets in L, A, T
    of every product of the first round; moves (n, 7): flags (sum of FROM_T, TO_O, ASSIGN), source offset and stride,
    target offset and stride, rows, columns; factors (n,); second (n, 6): like first, with U, R, O; back (n, 6): offset
    and stride in O, the same in the layout of A, rows, columns; groups (n, 4): rows, columns, offset in U and in O per
    bra charge; sizes (4,): elements of A, T, U, O.
    """
    target, column, width, a_start, a_size = by_left(left, left_dims, right, right_dims, local)
    bra_of, l_row, l_height, l_start, _ = by_ket(left, left_dims, delta_left, start)
    u_row, u_height = by_right(left, left_dims, bra, local)
    _, _, r_height, r_start, _ = by_bra(bra, bra_dims, delta_right, end)
    ket_table, ket_low = lookup(right)
    bra_table, bra_low = lookup(bra)

    first = np.empty((left.size, 6), np.int64)
    t_start = np.zeros(left.size, np.int64)
    t_size = 0
    used = 0
    for i in range(left.size):
        t_start[i] = t_size
        t_size += l_height[i] * width[i]
        if l_height[i] > 0 and width[i] > 0:
            first[used] = (l_height[i], left_dims[i], width[i], l_start[i], a_start[i], t_start[i])
            used += 1
    first = first[:used]

    u_column = np.full((delta_right.size, bra.size), -1, np.int64)
    groups = np.zeros((bra.size, 4), np.int64)
    u_size = 0
    o_size = 0
    for j in range(bra.size):
        columns = 0
        for b in range(delta_right.size):
            k = find(ket_table, ket_low, bra[j] - delta_right[b])
            if b != end and b != skip and k >= 0:
                u_column[b, j] = columns
                columns += right_dims[k]
        groups[j] = (u_height[j], columns, u_size, o_size)
        u_size += u_height[j] * columns
        o_size += u_height[j] * bra_dims[j]

    moves = np.empty((weights.size * left.size, 7), np.int64)
    factors = np.empty(weights.size * left.size, weights.dtype)
    written = np.zeros((delta_right.size, left.size, local.size), np.bool_)
    count = 0
    for i in range(left.size):
        for entry in range(weights.size):
            a, b, out, into = entries[entry]
            j = target[i, into]
            if j < 0 or b == skip:
                continue
            k = i if a == start else bra_of[a, i]
            if k < 0:
                continue
            jb = find(bra_table, bra_low, left[k] + local[out])
            if jb < 0:
                continue
            flags = 0
            if a == start:
                source = a_start[i] + column[i, into]
            else:
                flags += FROM_T
                source = t_start[i] + l_row[a, i] * width[i] + column[i, into]
            if b == end:
                flags += TO_O
                goal = groups[jb, 3] + u_row[k, out] * bra_dims[jb]
                goal_stride = bra_dims[jb]
            else:
                goal = groups[jb, 2] + u_row[k, out] * groups[jb, 1] + u_column[b, jb]
                goal_stride = groups[jb, 1]
                if not written[b, k, out]:
                    flags += ASSIGN
                    written[b, k, out] = True
            moves[count] = (flags, source, width[i], goal, goal_stride, left_dims[k], right_dims[j])
            factors[count] = weights[entry]
            count += 1

    second = np.empty((bra.size, 6), np.int64)
    used = 0
    for j in range(bra.size):
        if groups[j, 0] > 0 and r_height[j] > 0:
            second[used] = (groups[j, 0], groups[j, 1], bra_dims[j], groups[j, 2], r_start[j], groups[j, 3])
            used += 1
    second = second[:used]

    back = np.empty((left.size * local.size, 6), np.int64)
    used = 0
    for i in range(left.size):
        for s in range(local.size):
            j = find(bra_table, bra_low, left[i] + local[s])
            if j >= 0 and target[i, s] >= 0:
                source = groups[j, 3] + u_row[i, s] * bra_dims[j]
                back[used] = (source, bra_dims[j], a_start[i] + column[i, s], width[i], left_dims[i], bra_dims[j])
                used += 1
    sizes = np.array([a_size, t_size, u_size, o_size])
    return first, moves[:count], factors[:count], second, back[:used], groups, sizes


@compiled
def multiply(tensor, environment, buffer, first):
    for g in range(first.shape[0]):
        m, k, n, e, t, o = first[g]
        np.dot(
            environment[e : e + m * k].reshape(m, k),
            tensor[t : t + k * n].reshape(k, n),
            buffer[o : o + m * n].reshape(m, n),
        )


@compiled
def move(tensor, buffer, stacked, result, moves, weights, wanted):
    """The block copies that end in U (wanted = 0) or O (wanted = TO_O)."""
    for index in range(moves.shape[0]):
        flags, source, source_stride, goal, goal_stride, rows, columns = moves[index]
        if (flags & TO_O) != wanted:
            continue
        origin = buffer if flags & FROM_T else tensor
        target = result if wanted != 0 else stacked
        weight = weights[index]
        if flags & ASSIGN:
            for x in range(rows):
                u = origin[source + x * source_stride : source + x * source_stride + columns]
                v = target[goal + x * goal_stride : goal + x * goal_stride + columns]
                for y in range(columns):
                    v[y] = weight * u[y]
        else:
            for x in range(rows):
                u = origin[source + x * source_stride : source + x * source_stride + columns]
                v = target[goal + x * goal_stride : goal + x * goal_stride + columns]
                for y in range(columns):
                    v[y] += weight * u[y]


@compiled
def apply(tensor, result, left, right, steps, buffers):
    """result = H_eff tensor, both by left. buffers = (T, U, O); blocks of U that no move reaches must be zero."""
    first, moves, weights, second, back, _, _ = steps
    middle, stacked, grouped = buffers
    multiply(tensor, left, middle, first)
    move(tensor, middle, stacked, grouped, moves, weights, 0)
    if second.shape[0] < back.shape[0]:
        grouped[:] = 0
    for g in range(second.shape[0]):
        m, k, n, u, r, o = second[g]
        np.dot(
            stacked[u : u + m * k].reshape(m, k),
            right[r : r + k * n].reshape(k, n),
            grouped[o : o + m * n].reshape(m, n),
        )
    move(tensor, middle, stacked, grouped, moves, weights, TO_O)
    for index in range(back.shape[0]):
        source, source_stride, goal, goal_stride, rows, columns = back[index]
        for x in range(rows):
            u = grouped[source + x * source_stride : source + x * source_stride + columns]
            v = result[goal + x * goal_stride : goal + x * goal_stride + columns]
            for y in range(columns):
                v[y] = u[y]


@compiled
def half(tensor, left, steps):
    """The tensor U: environment, tensor and operator of one site contracted, grouped by bra charge as in
    plan.groups."""
    first, moves, weights, _, _, _, sizes = steps
    middle = np.empty(sizes[1], tensor.dtype)
    stacked = np.zeros(sizes[2], tensor.dtype)
    multiply(tensor, left, middle, first)
    move(tensor, middle, stacked, stacked, moves, weights, 0)
    return stacked


@compiled
def close(stacked, grouped, steps, dims):
    """Environment by bra on the right bond from U and the bra tensor by right (same steps)."""
    groups = steps[5]
    size = 0
    for j in range(dims.size):
        size += groups[j, 1] * dims[j]
    environment = np.empty(size, stacked.dtype)
    goal = 0
    bra = np.conj(grouped)
    for j in range(dims.size):
        m, n, u, o = groups[j]
        k = dims[j]
        np.dot(
            stacked[u : u + m * n].reshape(m, n).T,
            bra[o : o + m * k].reshape(m, k),
            environment[goal : goal + n * k].reshape(n, k),
        )
        goal += n * k
    return environment
