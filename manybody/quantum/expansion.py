"""Enlarging the bond ahead of a one-site step by the directions along which the energy falls.

The two-site residual H psi on sites l, l + 1, projected outside the present right space, is sampled with random vectors
over its left index: no object of the cost of a two-site step appears. Controlled bond expansion: Gleis, Li, von Delft
2023, Phys. Rev. Lett. 130, 246402; random sampling in its place: McCulloch, Osborne 2024, arXiv:2403.00562. Both
citations from memory.
"""

import math

import numpy as np

from manybody.quantum import blocks
from manybody.quantum.chain import Bond, Chain
from manybody.quantum.compiled import compiled, conjugate
from manybody.quantum.split import orthonormal_columns
from manybody.quantum.variance import residual_halves

NEGLIGIBLE = 1e-14
"""Share of the residual's squared norm, relative to the operator's scale, below which a direction is rounding."""


def expand(chain: Chain, site: int, fraction: float, limit: int, rng: np.random.Generator) -> None:
    """Add about `fraction` of its dimension (at least 4 states) to the bond after the centre, at most up to `limit`.
    The state itself is unchanged: the centre gets zeros."""
    present = chain.bonds[site + 1].dimension
    wanted = min(max(4, math.ceil(fraction * present)), limit - present)
    if wanted <= 0:
        return
    near, far, own, groups, turned_groups, dims, reach = residual_halves(chain, site)
    probes, size = sampling(fraction, groups[:, 0], turned_groups[:, 0], dims)
    noise = (rng.random(size) - 0.5).astype(chain.dtype, copy=False)
    found, added = directions(near, far, own, groups, turned_groups, dims, probes, noise, wanted, NEGLIGIBLE)
    if added.any():
        left, after, local = chain.bonds[site], chain.bonds[site + 2], chain.local[site : site + 2]
        centre, turned, charges, larger = with_directions(
            chain.tensor(site), own, found, left.pair, after.mirrored(chain.total).pair, (reach, dims), added,
            *local, chain.total,
        )  # fmt: skip
        chain.bonds[site + 1] = Bond(charges, larger)
        chain.put(site, centre)
        chain.tensors[site + 1] = turned
        chain.turned[site + 1] = True
        chain.right[site + 1] = None
    if chain.right[site + 1] is None:
        chain.retreat(site + 1)


@compiled
def sampling(fraction, rows, turned_rows, dims):
    """Random vectors per charge and how many random numbers they hold."""
    probes = np.empty(dims.size, np.int64)
    size = 0
    for g in range(dims.size):
        wanted = int(np.ceil(1.2 * fraction * dims[g])) + 2
        probes[g] = max(min(wanted, rows[g], turned_rows[g] - dims[g]), 0)
        size += probes[g] * rows[g]
    return probes, size


@compiled
def with_directions(tensor, own, found, left, turned, reach, added, local, turned_local, total):
    """The centre with zeros and the next tensor, as seen from the far end, with its new states; charges and dims of the
    bond between them."""
    charges, dims = reach
    larger = dims + added
    stay = larger > 0
    bond, bond_dims = charges[stay], larger[stay]
    centre = padded(tensor, left, reach, local, bond, bond_dims)
    _, turned_rows = blocks.by_right(turned[0], turned[1], total - charges, turned_local)
    further = append(own, found, turned_rows, dims, added)
    further = blocks.scatter_left(further, turned[0], turned[1], total - bond, bond_dims, turned_local)
    return centre, further, bond, bond_dims


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
                for x in range(left[1][i]):
                    for y in range(columns):
                        result[goal + x * new_width[i] + y] = tensor[source + x * width[i] + y]
    return result


@compiled
def directions(near, far, own, groups, turned_groups, dims, probes, noise, wanted, negligible):
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
    for g in range(count):
        m, columns, u, _ = groups[g]
        r, v = turned_groups[g, 0], turned_groups[g, 2]
        k, d = probes[g], dims[g]
        if k > 0:
            sketch = np.dot(
                noise[n_place : n_place + k * m].reshape(k, m), near[u : u + m * columns].reshape(m, columns)
            )
            z = samples[s_place : s_place + r * k].reshape(r, k)
            np.dot(far[v : v + r * columns].reshape(r, columns), np.ascontiguousarray(sketch.T), z)
            scale += np.sum((z * np.conj(z)).real)
            if d > 0:
                b = own[o_place : o_place + r * d].reshape(r, d)
                z -= np.dot(b, np.dot(conjugate(b).T, z))
            gram = np.dot(conjugate(z).T, z)
            values, states = np.linalg.eigh(gram)
            z[:] = np.dot(z, np.ascontiguousarray(states))
            weights[w_place : w_place + k] = values / k
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
            if d > 0:
                b = own[o_place : o_place + r * d].reshape(r, d)
                z -= np.dot(b, np.dot(conjugate(b).T, z))
            orthonormal_columns(z, found[goal : goal + r * a].reshape(r, a))
        o_place += r * d
        s_place += r * k
        w_place += k
        goal += r * a
    return found, added


@compiled
def append(old, new, rows, dims, added):
    """Columns `new` after columns `old`, group by group."""
    result = np.empty(old.size + new.size, old.dtype)
    o, n, goal = 0, 0, 0
    for g in range(rows.size):
        r, d, a = rows[g], dims[g], added[g]
        for x in range(r):
            result[goal : goal + d] = old[o + x * d : o + (x + 1) * d]
            result[goal + d : goal + d + a] = new[n + x * a : n + (x + 1) * a]
            goal += d + a
        o += r * d
        n += r * a
    return result
