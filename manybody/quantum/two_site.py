"""One step of a two-site sweep (White 1992): solve for a pair of sites, cut it between them, move the centre on."""

import numpy as np

from manybody.quantum import blocks, lanczos, split
from manybody.quantum.chain import Bond, Chain


def step(chain: Chain, site: int, limit: int, allowed: float, vectors: int, tolerance: float) -> tuple[float, float]:
    """Energy of the pair (site, site + 1) and relative weight discarded between them; the centre moves to site + 1.

    limit, allowed: see split.choose. vectors, tolerance: see lanczos.lowest.
    """
    left, right = chain.bonds[site], chain.bonds[site + 2]
    local = chain.local[site : site + 2]
    outer = (*left.pair, *right.pair, *local)
    pair = join(chain, site)
    operator = chain.pair_operator(site)
    charges = blocks.pair_charges(*local)
    steps = chain.plan(operator, left, right, charges, operator.end, -1)
    energy, pair, _, _ = lanczos.lowest(pair, chain.left_by_ket(site), chain.right[site + 2], steps, vectors, tolerance)
    middle = blocks.reachable(left.charges, right.charges, *local)
    matrices = blocks.cut_pair(pair, middle, *outer)
    shapes = blocks.pair_shapes(middle, *outer)
    weights, states = split.spectra(matrices, shapes)
    kept, discarded = split.choose(weights, shapes, limit, allowed)
    isometry, carry = split.parts(matrices, shapes, states, kept)
    stay = kept > 0
    chain.bonds[site + 1] = Bond(middle[stay], kept[stay])
    chain.put(site, blocks.scatter_left(isometry, *left.pair, *chain.bonds[site + 1].pair, local[0]))
    chain.put(site + 1, carry / np.linalg.norm(carry))
    chain.advance(site)
    return energy, discarded


def join(chain: Chain, site: int) -> np.ndarray:
    """The tensors of two neighbours (centre first) as one pair tensor by left."""
    left, middle, right = chain.bonds[site : site + 3]
    local = chain.local[site : site + 2]
    grouped = blocks.gather_right(chain.tensor(site), *left.pair, *middle.pair, local[0])
    _, height = blocks.by_right(*left.pair, middle.charges, local[0])
    widths = blocks.by_left(*middle.pair, *right.pair, local[1])[2]
    matrices = split.carry_over(grouped, height, middle.dims, chain.tensor(site + 1), widths)
    return blocks.join_pair(matrices, middle.charges, *left.pair, *right.pair, *local)
