"""Enlarging the bond ahead of a one-site step by the directions along which the energy falls.

The two-site residual H psi on sites l, l + 1, projected outside the present right space, is sampled with random vectors
over its left index: no object of the cost of a two-site step appears. Controlled bond expansion: Gleis, Li, von Delft
2023, Phys. Rev. Lett. 130, 246402; random sampling in its place: McCulloch, Osborne 2024, arXiv:2403.00562. Both
citations from memory.
"""

import numpy as np

from manybody.quantum import blocks
from manybody.quantum.compiled import compiled
from manybody.quantum.contraction import environment
from manybody.quantum.eigenproblem import eigenvectors
from manybody.quantum.products import ADJOINT, PLAIN, TURNED, product
from manybody.quantum.split import orthonormal_columns
from manybody.quantum.variance import halves, outside

NEGLIGIBLE = 1e-14
"""Share of the residual's squared norm, relative to the operator's scale, below which a direction is rounding."""


@compiled
def enlarge(residual, fraction, limit, seed):
    """The bond after the centre with about `fraction` more states, at least 4, up to `limit` in all: the centre with
    zeros there, the next tensor, as seen from the far end, with its new states; charges and dims of the bond, its right
    environment; scratch elements needed. The state itself is unchanged. residual: arguments of variance.halves; seed:
    of the random vectors."""
    tensor, _, left, _, local, _, _, after, turned, turned_local, turned_operator, reach, total, scratch = residual
    charges, dims = reach
    near, far, own, groups, turned_groups, needed = halves(*residual)
    probes = samples(fraction, groups[:, 0], turned_groups[:, 0], dims)
    numbers = noise(seed, (probes * groups[:, 0]).sum(), tensor)
    present = dims.sum()
    wanted = max(min(max(4, int(np.ceil(fraction * present))), limit - present), 0)
    found, added = directions(near, far, own, groups, turned_groups, dims, probes, numbers, wanted, NEGLIGIBLE)
    stay = dims + added > 0
    bond = charges[stay], (dims + added)[stay]
    turned_bond = total - bond[0], bond[1]
    centre = padded(tensor, left, reach, local, bond[0], bond[1])
    further = joined(own, found, turned, total - charges, dims, added, turned_bond, turned_local)
    result, more = environment(further, after, turned, turned_bond, turned_local, turned_operator, scratch)
    return centre, further, bond[0], bond[1], result, max(needed, more)


@compiled
def samples(fraction, rows, turned_rows, dims):
    """How many random vectors per charge."""
    result = np.empty(dims.size, np.int64)
    for g in range(dims.size):
        wanted = int(np.ceil(1.2 * fraction * dims[g])) + 2
        result[g] = max(min(wanted, rows[g], turned_rows[g] - dims[g]), 0)
    return result


@compiled
def noise(seed, size, like):
    """Random numbers between -1/2 and 1/2, in the number type of `like` (SplitMix64: Steele, Lea, Flood 2014, from
    memory)."""
    result = np.empty(size, like.dtype)
    state = np.uint64(seed)
    for index in range(size):
        state += np.uint64(0x9E3779B97F4A7C15)
        z = state
        z = (z ^ (z >> np.uint64(30))) * np.uint64(0xBF58476D1CE4E5B9)
        z = (z ^ (z >> np.uint64(27))) * np.uint64(0x94D049BB133111EB)
        z ^= z >> np.uint64(31)
        result[index] = (z >> np.uint64(11)) * 2.0**-53 - 0.5
    return result


@compiled
def padded(tensor, left, right, local, bond, bond_dims):
    """A site tensor by left whose right bond gets more states: zeros there."""
    target, column, width, start, _ = blocks.by_left(left[0], left[1], right[0], right[1], local)
    _, new_column, new_width, new_start, size = blocks.by_left(left[0], left[1], bond, bond_dims, local)
    result = np.zeros(size, tensor.dtype)
    for i in range(left[0].size):
        for s in range(local.size):
            if target[i, s] >= 0:
                columns = right[1][target[i, s]]
                source, goal = start[i] + column[i, s], new_start[i] + new_column[i, s]
                blocks.copy(result, goal, new_width[i], tensor, source, width[i], left[1][i], columns)
    return result


@compiled
def directions(near, far, own, groups, turned_groups, dims, probes, numbers, wanted, negligible):
    """Orthonormal new states per charge (rows x added, group after group), outside the columns of `own`; at most
    `wanted` in all."""
    count = dims.size
    sample_size = 0
    for g in range(count):
        sample_size += turned_groups[g, 0] * probes[g]
    samples = np.empty(sample_size, own.dtype)
    weights = np.zeros(probes.sum())
    scale = 0.0
    n_place, o_place, s_place, w_place = 0, 0, 0, 0
    sketch = np.empty((probes * groups[:, 1]).max(), own.dtype)
    for g in range(count):
        m, columns, u = groups[g, 0], groups[g, 1], groups[g, 2]
        r, v = turned_groups[g, 0], turned_groups[g, 2]
        k, d = probes[g], dims[g]
        if k > 0:
            z = np.empty(r * k, own.dtype)
            product(sketch, 0, numbers, n_place, near, u, k, m, columns)
            product(z, 0, far, v, sketch, 0, r, columns, k, PLAIN, TURNED)
            scale += np.vdot(z, z).real
            outside(z, own, o_place, r, d, k)
            overlap, states = np.empty((k, k), own.dtype), np.empty((k, k), own.dtype)
            product(overlap, 0, z, 0, z, 0, k, r, k, ADJOINT, PLAIN)
            eigenvectors(overlap, weights[w_place : w_place + k], states)
            product(samples, s_place, z, 0, states, 0, r, k, k, PLAIN, TURNED)
            weights[w_place : w_place + k] /= k
        n_place += k * m
        o_place += r * d
        s_place += r * k
        w_place += k
    added = np.zeros(count, np.int64)
    if scale == 0.0:
        return np.empty(0, own.dtype), added
    order = np.argsort(-weights)
    chosen = np.zeros(weights.size, np.bool_)
    for index in order[:wanted]:
        if weights[index] > negligible * scale:
            chosen[index] = True
    size = 0
    w_place = 0
    for g in range(count):
        added[g] = chosen[w_place : w_place + probes[g]].sum()
        size += added[g] * turned_groups[g, 0]
        w_place += probes[g]
    found = np.empty(size, own.dtype)
    o_place, s_place, w_place, goal = 0, 0, 0, 0
    for g in range(count):
        r, k, d, a = turned_groups[g, 0], probes[g], dims[g], added[g]
        if a > 0:
            z = np.ascontiguousarray(samples[s_place : s_place + r * k].reshape(r, k)[:, k - a :])
            z /= np.sqrt(k * weights[w_place + k - a : w_place + k])
            # Columns far smaller than before their projection have kept a part of what was projected out.
            outside(z.reshape(r * a), own, o_place, r, d, a)
            orthonormal_columns(z, found[goal : goal + r * a].reshape(r, a))
        o_place += r * d
        s_place += r * k
        w_place += k
        goal += r * a
    return found, added


@compiled
def joined(own, found, left, charges, dims, added, bond, local):
    """Site tensor by left from two by right, with dims and added states of each charge; charges without any are not on
    its right bond."""
    row, height = blocks.by_right(left[0], left[1], charges, local)
    first, further = blocks.offsets(height * dims), blocks.offsets(height * added)
    target, column, width, start, size = blocks.by_left(left[0], left[1], bond[0], bond[1], local)
    place = np.nonzero(dims + added)[0]
    result = np.empty(size, own.dtype)
    for i in range(left[0].size):
        for s in range(local.size):
            if target[i, s] >= 0:
                j = place[target[i, s]]
                goal = start[i] + column[i, s]
                d, a, rows = dims[j], added[j], left[1][i]
                blocks.copy(result, goal, width[i], own, first[j] + row[i, s] * d, d, rows, d)
                blocks.copy(result, goal + d, width[i], found, further[j] + row[i, s] * a, a, rows, a)
    return result
