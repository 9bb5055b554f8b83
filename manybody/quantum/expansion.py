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
from manybody.quantum.variance import residual_halves

NEGLIGIBLE = 1e-14
"""Share of the residual's squared norm, relative to the operator's scale, below which a direction is rounding."""


def expand(chain: Chain, site: int, fraction: float, limit: int, rng: np.random.Generator) -> None:
    """Add about `fraction` of its dimension (at least 4 states) to the bond after the centre, at most up to `limit`.
    The state itself is unchanged: the centre gets zeros."""
    wanted = min(max(4, math.ceil(fraction * chain.bonds[site + 1].dimension)), limit - chain.bonds[site + 1].dimension)
    if wanted <= 0:
        return
    near, far, own, groups, turned_groups, dims, reach = residual_halves(chain, site)
    left, after, local = chain.bonds[site], chain.bonds[site + 2], chain.local[site : site + 2]
    rows, turned_rows = groups[:, 0], turned_groups[:, 0]
    probes = np.ceil(1.2 * fraction * dims).astype(np.int64) + 2
    probes = np.maximum(np.minimum(probes, np.minimum(rows, turned_rows - dims)), 0)
    noise = rng.standard_normal(int((probes * rows).sum())).astype(chain.dtype)
    found, added = directions(near, far, own, groups, turned_groups, dims, probes, noise, wanted, NEGLIGIBLE)
    if added.any():
        larger = dims + added
        stay = larger > 0
        new = Bond(reach[stay], larger[stay])
        grouped = append(own, found, turned_rows, dims, added)
        centre = blocks.gather_right(chain.tensor(site), *left.pair, reach, dims, local[0])
        centre = append(centre, np.zeros(int((rows * added).sum()), chain.dtype), rows, dims, added)
        chain.bonds[site + 1] = new
        chain.put(site, blocks.scatter_left(centre, *left.pair, *new.pair, local[0]))
        pairs = (*after.mirrored(chain.total).pair, *new.mirrored(chain.total).pair)
        chain.tensors[site + 1] = blocks.scatter_left(grouped, *pairs, local[1])
        chain.turned[site + 1] = True
        chain.right[site + 1] = None
    if chain.right[site + 1] is None:
        chain.retreat(site + 1)


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
                for _ in range(2):
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
    o_place, s_place, goal = 0, 0, 0
    for g in range(count):
        r, k, d, a = turned_groups[g, 0], probes[g], dims[g], added[g]
        if a > 0:
            z = np.ascontiguousarray(samples[s_place : s_place + r * k].reshape(r, k)[:, k - a :])
            q, _ = np.linalg.qr(z)
            if d > 0:
                b = own[o_place : o_place + r * d].reshape(r, d)
                q = np.ascontiguousarray(q)
                q -= np.dot(b, np.dot(conjugate(b).T, q))
                q, _ = np.linalg.qr(q)
            found[goal : goal + r * a] = np.ascontiguousarray(q).reshape(r * a)
        o_place += r * d
        s_place += r * k
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
