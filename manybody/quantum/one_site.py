"""One step of a one-site sweep: solve for one site, cut or only orthonormalize it, move the centre on."""

import numpy as np

from manybody.quantum import blocks, lanczos, split
from manybody.quantum.chain import Chain


def solve(chain: Chain, site: int, vectors: int, tolerance: float) -> float:
    """Replace the centre tensor by the lowest state of its effective operator; its energy."""
    operator, left, right = chain.operators[site], chain.bonds[site], chain.bonds[site + 1]
    steps = chain.plan(operator, left, right, chain.local[site], operator.end, -1)
    energy, tensor, _, _ = lanczos.lowest(
        chain.tensor(site), chain.left_by_ket(site), chain.right[site + 1], steps, vectors, tolerance
    )
    chain.put(site, tensor)
    return energy


def move(chain: Chain, site: int, limit: int, allowed: float) -> float:
    """Cut the bond after the centre (see split.choose) and move the centre there; the relative weight discarded."""
    left, right = chain.bonds[site], chain.bonds[site + 1]
    matrices = blocks.gather_right(chain.tensor(site), *left.pair, *right.pair, chain.local[site])
    _, height = blocks.by_right(*left.pair, right.charges, chain.local[site])
    shapes = np.stack((height, right.dims), axis=1)
    weights, states = split.spectra(matrices, shapes)
    kept, discarded = split.choose(weights, shapes, limit, allowed)
    isometry, carry = split.parts(matrices, shapes, states, kept)
    chain.pass_on(site, isometry, carry, kept)
    if discarded > 0:
        centre = chain.tensor(site + 1)
        chain.put(site + 1, centre / np.linalg.norm(centre))
    chain.advance(site)
    return discarded
