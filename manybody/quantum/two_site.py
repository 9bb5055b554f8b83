"""One step of a two-site sweep (White 1992): solve for a pair of sites, cut it between them, move the centre on."""

import numpy as np

from manybody.quantum import blocks, split
from manybody.quantum.chain import Chain
from manybody.quantum.compiled import compiled, sound
from manybody.quantum.contraction import environment
from manybody.quantum.lanczos import lowest


def step(chain: Chain, site: int, limit: int, allowed: float, vectors: int, tolerance: float) -> tuple[float, float]:
    """Energy of the pair (site, site + 1) and relative weight discarded between them; the centre moves to site + 1.

    limit, allowed: see split.choose. vectors, tolerance: see lanczos.lowest. Raises FloatingPointError where the state
    is zero or something is no number; the chain then is of no more use.
    """
    chain.right[site + 1] = None  # out of date, and the new left one should not lie beside it
    outcome = renew(
        neighbours(chain, site), chain.left[site], chain.right[site + 2], chain.arrays(chain.pair_operator(site)),
        chain.arrays(chain.operators[site]), limit, allowed, vectors, tolerance, chain.scratch.array,
    )  # fmt: skip
    return chain.renewed(site, outcome)


def neighbours(chain: Chain, site: int) -> tuple:
    """The tensors of a site, where the centre is, and the next one, whether that one is turned, the bonds and local
    charges of both, the total charge: all that `join` needs."""
    left, middle, right = chain.bonds[site : site + 3]
    return (
        chain.tensor(site), chain.tensors[site + 1], chain.turned[site + 1], left.pair, middle.pair, right.pair,
        *chain.local[site : site + 2], chain.total,
    )  # fmt: skip


@compiled
def join(pair):
    """Two neighbouring site tensors as one pair tensor by left."""
    first, second, turned, left, middle, right, first_local, second_local, total = pair
    if turned:
        second = blocks.mirror_tensor(
            second, total - right[0], right[1], total - middle[0], middle[1], second_local, total
        )
    return split.join_pair(
        first, second, left[0], left[1], middle[0], middle[1], right[0], right[1], first_local, second_local
    )


@compiled
def renew(pair, before, after, both, operator, limit, allowed, vectors, tolerance, scratch):
    """Energy, new tensors of the two sites by left, charges and dims of the bond between them, relative weight
    discarded there, its left environment, scratch elements needed: all of a step in one call, because calls from
    outside cost as much as small tensors do. The energy is nan, and nothing else means anything, where numbers
    failed."""
    _, _, _, left, _, right, first_local, second_local, _ = pair
    local, tensor = blocks.pair_charges(first_local, second_local), join(pair)
    energy, needed = np.nan, 0
    if sound(tensor):
        energy, tensor, _, _, needed = lowest(
            tensor, before, after, left, right, local, both, vectors, tolerance, scratch
        )
    if not (np.isfinite(energy) and sound(tensor)):
        return np.nan, tensor, tensor, left[0], left[1], 0.0, tensor, needed
    first, second, charges, dims, discarded = split.cut_pair(
        tensor, left[0], left[1], right[0], right[1], first_local, second_local, limit, allowed
    )
    outside, more = environment(first, before, left, (charges, dims), first_local, operator, scratch)
    return energy, first, second, charges, dims, discarded, outside, max(needed, more)
