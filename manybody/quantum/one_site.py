"""One step of a one-site sweep: enlarge the bond ahead (see expansion), solve for one site, cut it, move the centre
on."""

import numpy as np

from manybody.quantum import blocks, split
from manybody.quantum.chain import Chain
from manybody.quantum.compiled import compiled, sound
from manybody.quantum.contraction import environment
from manybody.quantum.expansion import enlarge
from manybody.quantum.lanczos import lowest
from manybody.quantum.variance import two_site_residual


def step(
    chain: Chain, site: int, fraction: float, most: int, seed: int, limit: int, allowed: float, vectors: int,
    tolerance: float,
) -> tuple[float, float]:  # fmt: skip
    """Energy of the site and relative weight discarded at the bond after it; the centre moves to the next site.

    The bond grows by about `fraction` of its dimension, by at least 4 states and up to `most`; seed: of the random
    vectors behind them, any integer. limit, allowed: see split.choose. vectors, tolerance: see lanczos.lowest. Raises
    FloatingPointError where the state is zero or something is no number; the chain then is of no more use.
    """
    residual = two_site_residual(chain, site)
    chain.right[site + 1] = None  # of no use to the residual, and the new one should not lie beside it
    outcome = renew(residual, fraction, most, seed % 2**63, limit, allowed, vectors, tolerance)
    del residual  # and with it the old scratch memory
    return chain.renewed(site, outcome)


@compiled
def renew(residual, fraction, most, seed, limit, allowed, vectors, tolerance):
    """Energy, new tensors of the site and the next by left, charges and dims of the bond between them, relative weight
    discarded there, its left environment, scratch elements needed: all of a step in one call, because calls from
    outside cost as much as small tensors do. The energy is nan, and nothing else means anything, where numbers
    failed."""
    tensor, before, left, _, local, operator, following, _, turned, next_local, _, _, total, scratch = residual
    if not (sound(tensor) and sound(following)):
        return np.nan, tensor, tensor, left[0], left[1], 0.0, tensor, 0
    centre, further, charges, dims, outside, needed = enlarge(residual, fraction, most, seed)
    right, after = (charges, dims), (total - turned[0], turned[1])
    energy, centre, _, _, more = lowest(
        centre, before, outside, left, right, local, operator, vectors, tolerance, scratch
    )
    if not (np.isfinite(energy) and sound(centre)):
        return np.nan, tensor, tensor, left[0], left[1], 0.0, tensor, needed
    isometry, carry, kept, discarded = split.cut(centre, left[0], left[1], charges, dims, local, limit, allowed)
    following = blocks.mirror_tensor(further, turned[0], turned[1], total - charges, dims, next_local, total)
    first, second, charges, dims = split.pass_on(
        isometry, carry, kept, following, left[0], left[1], charges, dims, after[0], after[1], local, next_local
    )
    outside, again = environment(first, before, left, (charges, dims), local, operator, scratch)
    return energy, first, second, charges, dims, discarded, outside, max(needed, more, again)
