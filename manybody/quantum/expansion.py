"""Enlarging the bond ahead of a one-site step by the directions along which the energy falls.

The two-site residual H psi on sites l, l + 1, projected outside the present right space, is sampled with random vectors over its left
index: no object of the cost of a two-site step appears. Controlled bond expansion: Gleis, Li, von Delft 2023, Phys. Rev. Lett. 130,
246402; random sampling in its place: McCulloch, Osborne 2024, arXiv:2403.00562. Both citations from memory.
"""

import math

import numpy as np

from manybody.quantum import blocks, contraction
from manybody.quantum.chain import Bond, Chain
from manybody.quantum.compiled import compiled

NEGLIGIBLE = 1e-14
"""Share of the residual's squared norm, relative to the operator's scale, below which a direction is rounding."""


def expand(chain: Chain, site: int, fraction: float, limit: int, rng: np.random.Generator) -> None:
    """Add about `fraction` of its dimension (at least 4 states) to the bond after the centre, at most up to `limit`. The state itself is
    unchanged: the centre gets zeros."""
    left, bond, after = chain.bonds[site : site + 3]
    local = chain.local[site : site + 2]
    turned_bond, turned_after = bond.mirrored(chain.total), after.mirrored(chain.total)
    reach = blocks.reachable(left.charges, after.charges, *local)
    place = np.searchsorted(reach, bond.charges)
    dims = np.zeros(reach.size, np.int64)
    dims[place] = bond.dims
    bra, turned_bra = Bond(reach, dims), Bond(chain.total - reach, dims)
    here, there = chain.operators[site], chain.other_operators[chain.length - 2 - site]
    steps = chain.plan(here, left, bond, local[0], here.end, here.start, bra)
    turned_steps = chain.plan(there, turned_after, turned_bond, local[1], there.end, there.start, turned_bra)
    tensor = chain.turned_tensor(site + 1)
    near = contraction.half(chain.tensor(site), chain.left_by_ket(site), steps)
    by_ket = blocks.to_ket(chain.right[site + 2], *turned_after.pair, there.delta_left, there.start)
    far = contraction.half(tensor, by_ket, turned_steps)
    own = blocks.gather_right(tensor, *turned_after.pair, *turned_bra.pair, local[1])

    rows, turned_rows = steps[5][:, 0], turned_steps[5][:, 0]
    wanted = max(4, math.ceil(fraction * bond.dimension))
    wanted = min(wanted, limit - bond.dimension)
    if wanted <= 0:
        return
    probes = np.minimum(np.ceil(1.2 * fraction * dims).astype(np.int64) + 2, np.minimum(rows, turned_rows - dims))
    probes = np.maximum(probes, 0)
    noise = rng.standard_normal(int((probes * rows).sum())).astype(chain.dtype)
    found, added = directions(near, far, own, steps[5], turned_steps[5], dims, probes, noise, wanted, NEGLIGIBLE)
    if not added.any():
        return
    larger = dims + added
    stay = larger > 0
    new = Bond(reach[stay], larger[stay])
    turned_new = new.mirrored(chain.total)
    grouped = append(own, found, turned_rows, dims, added)
    centre = blocks.gather_right(chain.tensor(site), *left.pair, *bra.pair, local[0])
    centre = append(centre, np.zeros(int((rows * added).sum()), chain.dtype), rows, dims, added)
    chain.bonds[site + 1] = new
    chain.put(site, blocks.scatter_left(centre, *left.pair, *new.pair, local[0]))
    chain.tensors[site + 1] = blocks.scatter_left(grouped, *turned_after.pair, *turned_new.pair, local[1])
    chain.turned[site + 1] = True
    chain.retreat(site + 1)


@compiled
def directions(near, far, own, groups, turned_groups, dims, probes, noise, wanted, negligible):
    """Orthonormal new states per charge (rows x added, group after group), outside the columns of `own`; at most `wanted` in all."""
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
                    z -= np.dot(b, np.dot(np.conj(b).T, z))
            gram = np.dot(np.conj(z).T, z)
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
                q -= np.dot(b, np.dot(np.conj(b).T, q))
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
