"""Contraction of a site tensor with its environments: two rounds of matrix products around one round of scaled block
copies.

    T[a, i', s, j] = sum_i L[a][i', i] A[i, s, j]                     one product per left ket charge i
    U[b, i', s', j] = sum_(a, s) W[a, b, s', s] T[a, i', s, j]        block by block
    O[i', s', j'] = sum_(b, j) U[b, i', s', j] R[b][j', j]            one product per right bra charge j'

L is stored by ket, R by bra (see blocks). The channel `start` of the left bond (nothing of an operator yet) and `end`
of the right one (operator finished) have the identity as their environment: A takes the place of T and O that of U. The
first two rounds go through the left charges together, so that the part of T between them stays in the cache. A plan
lists offsets, strides and shapes of every step; it depends only on charges, dimensions and W, and building it costs a
few microseconds per block.
"""

import numpy as np

from manybody.quantum.blocks import by_bra, by_ket, by_left, by_right, find, gather_into, lookup, to_ket
from manybody.quantum.compiled import compiled, conjugate, room
from manybody.quantum.products import PLAIN, TURNED, product

FROM_T, TO_O, ASSIGN = 1, 2, 4
NO_CHANNEL = np.int64(-1)  # typed: for a literal number, functions would be compiled once more


@compiled
def plan(left_bond, right_bond, local, operator, end, skip, bra_bond):
    """Everything `apply`, `clear`, `half` and `close` need to know.

    Bonds: tuples (charges, dims). operator: OperatorSite.arrays in the number type of the tensors. The right channel
    `skip` is left out of U altogether, `end` goes to the result (-1: none). bra_bond: right bond of the result, the ket
    bond itself except where new charges are probed (then `end` must be -1).

    Returns first (n, 8): rows, inner, columns, offsets in L, A, T of the product of every left charge and its first and
    last move; moves (n, 8): flags (sum of FROM_T, TO_O, ASSIGN), offset and stride of the source, in A or in the T of
    this charge, and of the target, in U or in the result by left, rows, columns, place in the factors; factors (n,):
    one for a block that goes to U, one for every column of those that go to the result; second (n, 6): rows,
    inner, columns, offsets in U, R, O; back (n, 7): offset and stride in O, the same in the result, rows, columns,
    ASSIGN or 0; groups (n, 4): rows, columns, offset in U and in O per bra charge; sizes (5,): elements of A, T, U, O
    and of the largest T of one charge; holes (n, 4): offset, stride, rows, columns of the blocks of U that no move
    reaches.
    """
    left, left_dims = left_bond
    right, right_dims = right_bond
    bra, bra_dims = bra_bond
    delta_left, delta_right, start, _, entries, weights = operator
    target, column, width, a_start, a_size = by_left(left, left_dims, right, right_dims, local)
    bra_of, l_row, l_height, l_start, _ = by_ket(left, left_dims, delta_left, start)
    u_row, u_height = by_right(left, left_dims, bra, local)
    _, _, r_height, r_start, _ = by_bra(bra, bra_dims, delta_right, end)
    ket_table, ket_low = lookup(right)
    bra_table, bra_low = lookup(bra)

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

    reached = np.full((left.size, local.size), -1, np.int64)
    for i in range(left.size):
        for s in range(local.size):
            reached[i, s] = find(bra_table, bra_low, left[i] + local[s])
    finishing = 0
    for entry in range(weights.size):
        finishing += entries[entry, 1] == end
    moves = np.empty((weights.size * left.size, 8), np.int64)
    factors = np.empty((weights.size - finishing) * left.size + finishing * right_dims.sum(), weights.dtype)
    written = np.zeros((delta_right.size, left.size, local.size), np.bool_)
    begun = np.zeros((left.size, local.size), np.bool_)
    first = np.empty((left.size, 8), np.int64)
    t_size = 0
    t_largest = 0
    count = 0
    place = 0
    for i in range(left.size):
        first_move = count
        last_bra, last_source, last_goal = -1, -1, -1
        for entry in range(weights.size):
            a, b, out, into = entries[entry, 0], entries[entry, 1], entries[entry, 2], entries[entry, 3]
            j = target[i, into]
            if j < 0 or b == skip:
                continue
            k = i if a == start else bra_of[a, i]
            if k < 0:
                continue
            jb = reached[k, out]
            if jb < 0:
                continue
            columns = right_dims[j]
            if a == start:
                flags = 0
                source = a_start[i] + column[i, into]
            else:
                flags = FROM_T
                source = l_row[a, i] * width[i] + column[i, into]
            if b == end:
                # A letter that finishes an operator moves one local state after the other to the same rows: such
                # neighbours are copied together.
                flags += TO_O
                if not begun[k, out]:
                    flags += ASSIGN
                    begun[k, out] = True
                goal = a_start[k] + column[k, out]
                goal_stride = width[k]
                first_factor = place
                place += columns
                factors[first_factor:place] = weights[entry]
                same = last_bra == k and moves[count - 1, 0] == flags
                if same and source == last_source and goal == last_goal:
                    moves[count - 1, 6] += columns
                    last_source += columns
                    last_goal += columns
                    continue
                last_bra, last_source, last_goal = k, source + columns, goal + columns
            else:
                goal = groups[jb, 2] + u_row[k, out] * groups[jb, 1] + u_column[b, jb]
                goal_stride = groups[jb, 1]
                if not written[b, k, out]:
                    flags += ASSIGN
                    written[b, k, out] = True
                first_factor = place
                factors[place] = weights[entry]
                place += 1
                last_bra = -1
            # One by one: assigning a tuple to a row costs several times as much.
            move = moves[count]
            move[0], move[1], move[2], move[3] = flags, source, width[i], goal
            move[4], move[5], move[6], move[7] = goal_stride, left_dims[k], columns, first_factor
            count += 1
        first[i] = (l_height[i], left_dims[i], width[i], l_start[i], a_start[i], t_size, first_move, count)
        t_size += l_height[i] * width[i]
        t_largest = max(t_largest, l_height[i] * width[i])

    holes = np.empty((written.size, 4), np.int64)
    used = 0
    for k in range(left.size):
        for s in range(local.size):
            j = reached[k, s]
            for b in range(delta_right.size):
                if j >= 0 and u_column[b, j] >= 0 and not written[b, k, s]:
                    columns = right_dims[find(ket_table, ket_low, bra[j] - delta_right[b])]
                    goal = groups[j, 2] + u_row[k, s] * groups[j, 1] + u_column[b, j]
                    hole = holes[used]
                    hole[0], hole[1], hole[2], hole[3] = goal, groups[j, 1], left_dims[k], columns
                    used += 1
    holes = holes[:used]

    second = np.empty((bra.size, 6), np.int64)
    for j in range(bra.size):
        inner = groups[j, 1] if r_height[j] > 0 else 0
        second[j] = (groups[j, 0], inner, bra_dims[j], groups[j, 2], r_start[j], groups[j, 3])

    back = np.empty((left.size * local.size, 7), np.int64)
    used = 0
    for i in range(left.size):
        for s in range(local.size):
            j = reached[i, s]
            if j >= 0 and target[i, s] >= 0:
                source = groups[j, 3] + u_row[i, s] * bra_dims[j]
                piece = back[used]
                piece[0], piece[1], piece[2] = source, bra_dims[j], a_start[i] + column[i, s]
                piece[3], piece[4], piece[5] = width[i], left_dims[i], bra_dims[j]
                piece[6] = 0 if begun[i, s] else ASSIGN
                used += 1
    sizes = np.array([a_size, t_size, u_size, o_size, t_largest])
    return first, moves[:count], factors[:place], second, back[:used], groups, sizes, holes


@compiled
def multiply(tensor, environment, buffer, first):
    """The whole of T."""
    for g in range(first.shape[0]):
        _to_part(tensor, environment, buffer, first[g, 5], first, g)


@compiled
def _to_part(tensor, environment, buffer, start, first, g):
    product(buffer, start, environment, first[g, 3], tensor, first[g, 4], first[g, 0], first[g, 1], first[g, 2])


@compiled
def apply(tensor, result, left, right, steps, buffers):
    """result = H_eff tensor, both by left. buffers = (T of one charge, U, O), U cleared before, contents of no matter
    otherwise."""
    second, back = steps[3], steps[4]
    _, stacked, grouped = buffers
    half(tensor, result, left, steps, buffers[:2])
    for g in range(second.shape[0]):
        product(
            grouped, second[g, 5], stacked, second[g, 3], right, second[g, 4], second[g, 0], second[g, 1], second[g, 2]
        )
    for index in range(back.shape[0]):
        source, source_stride, goal = back[index, 0], back[index, 1], back[index, 2]
        goal_stride, rows, columns = back[index, 3], back[index, 4], back[index, 5]
        for x in range(rows):
            u = grouped[source + x * source_stride : source + x * source_stride + columns]
            v = result[goal + x * goal_stride : goal + x * goal_stride + columns]
            if back[index, 6] == ASSIGN:
                for y in range(columns):
                    v[y] = u[y]
            else:
                for y in range(columns):
                    v[y] += u[y]


@compiled
def clear(stacked, steps):
    """Zero the blocks of U that no move reaches: once is enough for any number of uses of `half`."""
    holes = steps[7]
    for index in range(holes.shape[0]):
        goal, stride, rows, columns = holes[index, 0], holes[index, 1], holes[index, 2], holes[index, 3]
        for x in range(rows):
            stacked[goal + x * stride : goal + x * stride + columns] = 0


@compiled
def half(tensor, result, left, steps, buffers):
    """U in buffers[1], cleared before, grouped by bra charge as in plan.groups. What goes past the right environment is
    put into `result`, where blocks that nothing reaches stay as they are; any array will do where nothing goes past."""
    first, moves, factors = steps[0], steps[1], steps[2]
    part, stacked = buffers[0], buffers[1]
    for i in range(first.shape[0]):
        _to_part(tensor, left, part, 0, first, i)
        for index in range(first[i, 6], first[i, 7]):
            flags, source, source_stride = moves[index, 0], moves[index, 1], moves[index, 2]
            goal, goal_stride = moves[index, 3], moves[index, 4]
            rows, columns, place = moves[index, 5], moves[index, 6], moves[index, 7]
            origin = part if flags & FROM_T else tensor
            if flags & TO_O:
                scales = factors[place : place + columns]
                for x in range(rows):
                    u = origin[source + x * source_stride : source + x * source_stride + columns]
                    v = result[goal + x * goal_stride : goal + x * goal_stride + columns]
                    if flags & ASSIGN:
                        for y in range(columns):
                            v[y] = scales[y] * u[y]
                    else:
                        for y in range(columns):
                            v[y] += scales[y] * u[y]
                continue
            factor = factors[place]
            if flags & ASSIGN:
                for x in range(rows):
                    u = origin[source + x * source_stride : source + x * source_stride + columns]
                    v = stacked[goal + x * goal_stride : goal + x * goal_stride + columns]
                    for y in range(columns):
                        v[y] = factor * u[y]
            else:
                for x in range(rows):
                    u = origin[source + x * source_stride : source + x * source_stride + columns]
                    v = stacked[goal + x * goal_stride : goal + x * goal_stride + columns]
                    for y in range(columns):
                        v[y] += factor * u[y]


@compiled
def close(stacked, grouped, steps, dims):
    """Environment by bra on the right bond from U and the bra tensor by right (same steps)."""
    groups = steps[5]
    size = 0
    for j in range(dims.size):
        size += groups[j, 1] * dims[j]
    environment = np.empty(size, stacked.dtype)
    goal = 0
    bra = conjugate(grouped)
    for j in range(dims.size):
        m, n, k = groups[j, 0], groups[j, 1], dims[j]
        product(environment, goal, stacked, groups[j, 2], bra, groups[j, 3], n, m, k, TURNED, PLAIN)
        goal += n * k
    return environment


@compiled
def environment(tensor, before, left, right, local, operator, scratch):
    """Environment by bra on the right bond from the one on the left, also by bra, and a site orthonormal towards the
    right; elements of scratch memory needed."""
    delta_left, start = operator[0], operator[2]
    steps = plan(left, right, local, operator, NO_CHANNEL, start, right)
    sizes = steps[6]
    a, b, c = before.size, before.size + sizes[4], before.size + sizes[4] + sizes[2]
    needed = c + tensor.size
    work = room(scratch, needed)
    to_ket(before, left[0], left[1], delta_left, start, work[:a])
    clear(work[b:c], steps)
    half(tensor, tensor, work[:a], steps, (work[a:b], work[b:c]))
    gather_into(work[c:needed], tensor, left[0], left[1], right[0], right[1], local)
    return close(work[b:c], work[c:needed], steps, right[1]), needed
