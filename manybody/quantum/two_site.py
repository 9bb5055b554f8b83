"""One step of a two-site sweep (White 1992): solve for a pair of sites, cut it between them, move the centre on."""

import numpy as np

from manybody.quantum import blocks, split
from manybody.quantum.chain import Bond, Chain


def step(chain: Chain, site: int, limit: int, allowed: float, vectors: int, tolerance: float) -> tuple[float, float]:
    """Energy of the pair (site, site + 1) and relative weight discarded between them; the centre moves to site + 1.

    limit, allowed: see split.choose. vectors, tolerance: see lanczos.lowest.
    """
    local = chain.local[site : site + 2]
    operator = chain.pair_operator(site)
    energy, pair = chain.lowest(
        join(chain, site), operator, site, site + 2, blocks.pair_charges(*local), vectors, tolerance
    )
    left, right = chain.bonds[site], chain.bonds[site + 2]
    first, second, charges, dims, discarded = split.cut_pair(pair, *left.pair, *right.pair, *local, limit, allowed)
    chain.bonds[site + 1] = Bond(charges, dims)
    chain.put(site, first)
    chain.put(site + 1, second)
    chain.advance(site)
    return energy, discarded


def join(chain: Chain, site: int) -> np.ndarray:
    """The tensors of two neighbours (centre first) as one pair tensor by left."""
    left, middle, right = chain.bonds[site : site + 3]
    local = chain.local[site : site + 2]
    return split.join_pair(chain.tensor(site), chain.tensor(site + 1), *left.pair, *middle.pair, *right.pair, *local)
