"""Energy and energy variance of a matrix-product state without squaring the operator.

|| (H - E) psi ||^2 is summed over bonds as the squared norm of the part of H psi that leaves the right space of a bond
while staying in the left space times one free site (Hubig, Haegeman, Schollwoeck 2018, Phys. Rev. B 97, 045125): exact
for terms of neighbouring sites, a lower estimate for terms of longer range.
"""

import numpy as np

from manybody.quantum import blocks, contraction
from manybody.quantum.chain import Bond, Chain
from manybody.quantum.compiled import compiled


def measure(chain: Chain) -> tuple[float, float]:
    """(energy, variance), constant left out. Moves the centre to the far end and mirrors the chain; the state does not
    change."""
    energy, variance = at_centre(chain)
    for site in range(chain.length - 1):
        variance += leaving(chain, site)
        chain.shift(site)
        chain.advance(site)
    chain.mirror()
    return energy, variance


def at_centre(chain: Chain) -> tuple[float, float]:
    """Energy and squared residual of site 0, where the centre is."""
    operator, left, right = chain.operators[0], chain.bonds[0], chain.bonds[1]
    steps = chain.plan(operator, left, right, chain.local[0], operator.end, -1)
    tensor = chain.tensor(0)
    product = image(tensor, chain.left_by_ket(0), chain.right[1], steps)
    energy = float(np.vdot(tensor, product).real)
    return energy, float(np.linalg.norm(product - energy * tensor) ** 2)


@compiled
def image(tensor, left, right, steps):
    """H_eff tensor."""
    sizes = steps[6]
    result = np.empty_like(tensor)
    buffers = (np.empty(sizes[1], tensor.dtype), np.zeros(sizes[2], tensor.dtype), np.empty(sizes[3], tensor.dtype))
    contraction.apply(tensor, result, left, right, steps, buffers)
    return result


def leaving(chain: Chain, site: int) -> float:
    """Squared norm of the part of H psi outside the right space of the bond after `site`, where the centre is."""
    near, far, own, groups, turned_groups, dims, _ = residual_halves(chain, site)
    return float(_outside(near, far, own, groups, turned_groups, dims))


def residual_halves(chain: Chain, site: int):
    """The two-site residual on (site, site + 1) in two halves, near and far, to be multiplied per middle charge; the
    right space `own` by right as seen from the far end; (rows, columns, offset) of both; dims of the bond over all
    charges the two sites reach; these."""
    left, bond, after = chain.bonds[site : site + 3]
    local = chain.local[site : site + 2]
    reach = blocks.reachable(left.charges, after.charges, *local)
    if not np.isin(bond.charges, reach).all():
        chain.prune(site + 1, reach)
        bond = chain.bonds[site + 1]
    dims = np.zeros(reach.size, np.int64)
    dims[np.searchsorted(reach, bond.charges)] = bond.dims
    turned_bond, turned_after = bond.mirrored(chain.total), after.mirrored(chain.total)
    bra, turned_bra = Bond(reach, dims), Bond(chain.total - reach, dims)
    here, there = chain.operators[site], chain.other_operators[chain.length - 2 - site]
    steps = chain.plan(here, left, bond, local[0], -1, here.end, bra)
    turned_steps = chain.plan(there, turned_after, turned_bond, local[1], -1, there.start, turned_bra)
    # An operator finished on the left leaves the right space alone; the channel of those not yet begun completes the
    # residual.
    tensor = chain.turned_tensor(site + 1)
    near = contraction.half(chain.tensor(site), chain.left_by_ket(site), steps)
    by_ket = blocks.to_ket(chain.right[site + 2], *turned_after.pair, there.delta_left, there.start)
    far = contraction.half(tensor, by_ket, turned_steps)
    own = blocks.gather_right(tensor, *turned_after.pair, *turned_bra.pair, local[1])
    return near, far, own, steps[5], turned_steps[5], dims, reach


@compiled
def _outside(near, far, own, groups, turned_groups, dims):
    total = 0.0
    place = 0
    for g in range(dims.size):
        m, columns, u, _ = groups[g]
        r, v = turned_groups[g, 0], turned_groups[g, 2]
        d = dims[g]
        if m > 0 and r > d and columns > 0:
            x = far[v : v + r * columns].reshape(r, columns)
            if d > 0:
                b = own[place : place + r * d].reshape(r, d)
                x = x - np.dot(b, np.dot(np.conj(b).T, x))
            y = np.dot(near[u : u + m * columns].reshape(m, columns), np.ascontiguousarray(x.T))
            total += np.sum((y * np.conj(y)).real)
        place += r * d
    return total
