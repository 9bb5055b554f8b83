"""Energy and energy variance of a matrix-product state without squaring the operator.

|| (H - E) psi ||^2 is summed over bonds as the squared norm of the part of H psi that leaves the right space of a bond
while staying in the left space times one free site (Hubig, Haegeman, Schollwoeck 2018, Phys. Rev. B 97, 045125): exact
for terms of neighbouring sites, a lower estimate for terms of longer range.
"""

import numpy as np

from manybody.quantum import blocks, contraction
from manybody.quantum.chain import Chain
from manybody.quantum.compiled import compiled, room
from manybody.quantum.matrix_product_operator import OperatorSite
from manybody.quantum.products import ADJOINT, PLAIN, TURNED, product


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
    tensor = chain.tensor(0)
    product = image(chain, tensor, chain.operators[0], 0, 1, chain.local[0])
    energy = float(np.vdot(tensor, product).real)
    return energy, float(np.linalg.norm(product - energy * tensor) ** 2)


def image(chain: Chain, tensor, operator: OperatorSite, left: int, right: int, local) -> np.ndarray:
    """H_eff tensor, everything between two bonds."""
    return _image(
        tensor, chain.left[left], chain.right[right], chain.bonds[left].pair, chain.bonds[right].pair, local,
        chain.arrays(operator),
    )  # fmt: skip


@compiled
def _image(tensor, before, after, left, right, local, operator):
    delta_left, start, end = operator[0], operator[2], operator[3]
    steps = contraction.plan(left, right, local, operator, end, contraction.NO_CHANNEL, right)
    sizes = steps[6]
    by_ket = np.empty_like(before)
    blocks.to_ket(before, left[0], left[1], delta_left, start, by_ket)
    buffers = (
        np.empty(sizes[4], tensor.dtype), np.empty(sizes[2], tensor.dtype), np.empty(sizes[3], tensor.dtype)
    )  # fmt: skip
    contraction.clear(buffers[1], steps)
    result = np.empty_like(tensor)
    contraction.apply(tensor, result, by_ket, after, steps, buffers)
    return result


def leaving(chain: Chain, site: int) -> float:
    """Squared norm of the part of H psi outside the right space of the bond after `site`, where the centre is."""
    residual = two_site_residual(chain, site)
    near, far, own, groups, turned_groups, needed = halves(*residual)
    chain.scratch.enlarge(needed)
    return float(_outside(near, far, own, groups, turned_groups, residual[11][1]))


def two_site_residual(chain: Chain, site: int) -> tuple:
    """Arguments of `halves` for the sites (site, site + 1) with the centre on the first. States between them that
    nothing on the left reaches are dropped first (see Chain.prune)."""
    left, bond, after = chain.bonds[site : site + 3]
    local = chain.local[site : site + 2]
    reach, dims, complete = blocks.reach(*left.pair, *bond.pair, *after.pair, *local)
    if not complete:
        chain.prune(site + 1, reach)
        bond = chain.bonds[site + 1]
    here, there = chain.operators[site], chain.other_operators[chain.length - 2 - site]
    return (
        chain.tensor(site), chain.left[site], left.pair, bond.pair, local[0], chain.arrays(here),
        chain.turned_tensor(site + 1), chain.right[site + 2], after.mirrored(chain.total).pair, local[1],
        chain.arrays(there), (reach, dims), chain.total, chain.scratch.array,
    )  # fmt: skip


@compiled
def halves(
    tensor, before, left, bond, local, operator, turned_tensor, after, turned, turned_local, turned_operator, reach,
    total, scratch,
):  # fmt: skip
    """The two-site residual in two halves, near and far, to be multiplied per middle charge; the right space `own` by
    right as seen from the far end; (rows, columns, offset) of near and far; scratch elements needed. near and far lie
    in the scratch memory. turned: the bond after both sites as seen from the far end; reach: the charges between them
    that both sites reach, and the states present.

    An operator finished on the left leaves the right space alone; the channel of those not yet begun completes the
    residual.
    """
    turned_bond, turned_reach = (total - bond[0], bond[1]), (total - reach[0], reach[1])
    steps = contraction.plan(left, bond, local, operator, contraction.NO_CHANNEL, operator[3], reach)
    turned_steps = contraction.plan(
        turned, turned_bond, turned_local, turned_operator, contraction.NO_CHANNEL, turned_operator[2], turned_reach
    )
    sizes, turned_sizes = steps[6], turned_steps[6]
    near_size, far_size = sizes[2], turned_sizes[2]
    both = near_size + far_size
    kets = both + max(before.size, after.size)
    needed = kets + max(sizes[4], turned_sizes[4])
    work = room(scratch, needed)
    near, far, part = work[:near_size], work[near_size:both], work[kets:needed]
    by_ket = work[both : both + before.size]
    blocks.to_ket(before, left[0], left[1], operator[0], operator[2], by_ket)
    contraction.clear(near, steps)
    contraction.half(tensor, tensor, by_ket, steps, (part, near))
    by_ket = work[both : both + after.size]
    blocks.to_ket(after, turned[0], turned[1], turned_operator[0], turned_operator[2], by_ket)
    contraction.clear(far, turned_steps)
    contraction.half(turned_tensor, turned_tensor, by_ket, turned_steps, (part, far))
    own = blocks.gather_right(turned_tensor, turned[0], turned[1], turned_reach[0], turned_reach[1], turned_local)
    return near, far, own, steps[5], turned_steps[5], needed


@compiled
def outside(vectors, own, place, rows, states, columns):
    """Project the columns of a (rows, columns) matrix, a flat array, to what is orthogonal to the orthonormal columns
    of the (rows, states) matrix from own[place] on."""
    if states > 0:
        inside, share = np.empty(states * columns, own.dtype), np.empty(rows * columns, own.dtype)
        product(inside, 0, own, place, vectors, 0, states, rows, columns, ADJOINT, PLAIN)
        product(share, 0, own, place, inside, 0, rows, states, columns)
        for x in range(share.size):
            vectors[x] -= share[x]


@compiled
def _outside(near, far, own, groups, turned_groups, dims):
    total = 0.0
    place = 0
    for g in range(dims.size):
        m, columns, u, _ = groups[g]
        r, v = turned_groups[g, 0], turned_groups[g, 2]
        d = dims[g]
        if m > 0 and r > d and columns > 0:
            x = far[v : v + r * columns].copy()
            outside(x, own, place, r, d, columns)
            y = np.empty(m * r, x.dtype)
            product(y, 0, near, u, x, 0, m, columns, r, PLAIN, TURNED)
            total += np.vdot(y, y).real
        place += r * d
    return total
