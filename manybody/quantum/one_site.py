"""One step of a one-site sweep: solve for one site, cut or only orthonormalize it, move the centre on."""

from manybody.quantum.chain import Chain


def solve(chain: Chain, site: int, vectors: int, tolerance: float) -> float:
    """Replace the centre tensor by the lowest state of its effective operator; its energy."""
    energy, tensor = chain.lowest(
        chain.tensor(site), chain.operators[site], site, site + 1, chain.local[site], vectors, tolerance
    )
    chain.put(site, tensor)
    return energy


def move(chain: Chain, site: int, limit: int, allowed: float) -> float:
    """Cut the bond after the centre (see split.choose) and move the centre there; the relative weight discarded."""
    discarded = chain.cut(site, limit, allowed)
    chain.advance(site)
    return discarded
