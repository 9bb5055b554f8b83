"""How many levels of a large spin are kept where no charge is conserved.

In the local classical frame the lowest Holstein-Primakoff levels m = S, S - 1, ... carry nearly all weight. Keeping the
first few is a projection, so the energy stays variational; levels are added until the last one kept is practically
empty.
"""

import numpy as np

from manybody.quantum import blocks
from manybody.quantum.chain import Chain
from manybody.quantum.problem import Problem

EMPTY = 1e-10


def occupation(chain: Chain, site: int) -> np.ndarray:
    """Probability of every local state of the site where the centre is."""
    left, right, local = chain.bonds[site], chain.bonds[site + 1], chain.local[site]
    target, column, width, start, _ = blocks.by_left(*left.pair, *right.pair, local)
    tensor = np.abs(chain.tensor(site)) ** 2
    result = np.zeros(local.size)
    for i in range(left.charges.size):
        matrix = tensor[start[i] : start[i] + left.dims[i] * width[i]].reshape(left.dims[i], width[i])
        for s in range(local.size):
            if target[i, s] >= 0:
                result[s] += matrix[:, column[i, s] : column[i, s] + right.dims[target[i, s]]].sum()
    return result


def wanted_levels(chain: Chain, problem: Problem, goal: float) -> np.ndarray | None:
    """Larger numbers of levels in sweep order, or None where the last level of every site is empty enough.

    A level of weight p lowers the energy by about p times the local energy scale; it is empty when that is far below
    the goal.
    """
    if not problem.truncated:
        return None
    allowed = max(1e-2 * goal / max(problem.norm, 1e-300), 1e-16)
    weights = []
    for site in range(chain.length):
        weights.append(occupation(chain, site)[-1])
        if site + 1 < chain.length:
            chain.shift(site)
            chain.advance(site)
    chain.mirror()
    if chain.reverse:
        weights = weights  # measured before the chain was turned round, in forward order
    else:
        weights = weights[::-1]
    full = np.round(2 * problem.spins).astype(np.int64) + 1
    short = (np.array(weights) > allowed) & (problem.levels < full)
    if not short.any():
        return None
    return np.where(short, np.minimum(full, np.ceil(1.5 * problem.levels).astype(np.int64)), problem.levels)


def enlarge(chain: Chain, problem: Problem) -> Chain:
    """The same state with empty further levels, as the levels of `problem` ask; no charge is conserved."""
    if chain.reverse:
        for site in range(chain.length - 1):
            chain.shift(site)
            chain.advance(site)
        chain.mirror()
    tensors = []
    for site, levels in enumerate(problem.levels.tolist()):
        left, right = chain.bonds[site].dimension, chain.bonds[site + 1].dimension
        old = chain.tensor(site).reshape(left, -1, right)
        new = np.zeros((left, levels, right), old.dtype)
        new[:, : old.shape[1]] = old
        tensors.append(new.reshape(-1))
    result = Chain(list(problem.local), list(problem.sites), list(chain.bonds), tensors, chain.total)
    result.prepare()
    return result
