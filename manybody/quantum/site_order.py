"""The order in which sites of a graph stand in a matrix-product state."""

import numpy as np
from scipy import sparse
from scipy.sparse import csgraph

from manybody.model.energy import EnergyFunction


def site_order(energy: EnergyFunction) -> np.ndarray:
    """order (N,): position p holds site order[p]; the cheapest of the given order, bandwidth reduction and the Fiedler
    vector.

    Cost of an order: the sum over cuts of the squared number of sites on either side that take part in a term across
    the cut (the smaller side counts), which stands for the width of the operator and the entanglement; plus the squared
    ranges of all terms over N, since sweeps of few states do not find a bond between far ends (a ring is folded). The
    given order wins ties.
    """
    graph = interaction_graph(energy)
    n = energy.sites
    if n < 3:
        return np.arange(n)
    candidates = [np.arange(n)]
    candidates.append(csgraph.reverse_cuthill_mckee(graph, symmetric_mode=True).astype(np.int64))
    candidates.extend(_fiedler_orders(graph))
    edges = edge_list(graph)
    best = min(candidates, key=lambda order: cost(order, edges))
    return _improved(best, edges)


def interaction_graph(energy: EnergyFunction) -> sparse.csr_matrix:
    """(N, N) symmetric 0/1 matrix: which sites share a term."""
    n = energy.sites
    rows, columns = [np.zeros(0, np.int64)], [np.zeros(0, np.int64)]
    for group in energy.groups:
        slots = [slot for slot, (rank, _) in enumerate(group.key) if rank > 0]
        for a in slots:
            for b in slots:
                if a != b:
                    rows.append(group.sites[:, a])
                    columns.append(group.sites[:, b])
    r, c = np.concatenate(rows), np.concatenate(columns)
    graph = sparse.csr_matrix((np.ones(r.size), (r, c)), (n, n))
    graph.data[:] = 1.0
    return graph


def edge_list(graph: sparse.csr_matrix) -> tuple[np.ndarray, np.ndarray]:
    """Both ends of every pair of sites that share a term, each pair in both directions."""
    coo = graph.tocoo()
    return coo.row, coo.col


def cost(order: np.ndarray, edges: tuple[np.ndarray, np.ndarray]) -> float:
    place = np.empty(order.size, np.int64)
    place[order] = np.arange(order.size)
    first, second = place[edges[0]], place[edges[1]]
    ranges = (first - second).astype(float)
    return float((_boundary(first, second, order.size) ** 2).sum() + (ranges @ ranges) / (2 * order.size))


def _boundary(first: np.ndarray, second: np.ndarray, n: int) -> np.ndarray:
    """(N - 1,) for every cut the smaller of the numbers of left and right sites with a neighbour across it."""
    places = np.arange(n)
    farthest, nearest = places.copy(), places.copy()
    np.maximum.at(farthest, first, second)
    np.minimum.at(nearest, first, second)
    # A site at place p with its farthest right neighbour at q is an open left site of the cuts p ... q - 1.
    left = 1 - np.bincount(farthest, minlength=n)
    right = np.bincount(nearest, minlength=n) - 1
    return np.minimum(np.cumsum(left), np.cumsum(right))[: n - 1]


def _fiedler_orders(graph: sparse.csr_matrix) -> list[np.ndarray]:
    if graph.shape[0] > 2000:
        return []
    laplacian = csgraph.laplacian(graph).toarray()
    _, vectors = np.linalg.eigh(laplacian)
    # Where the second eigenvalue is degenerate (a square), a mixture with the third orders one direction before the
    # other.
    mixtures = [vectors[:, 1]]
    if graph.shape[0] > 3:
        mixtures += [vectors[:, 1] + t * vectors[:, 2] for t in (0.05, -0.05, 1.0, -1.0)]
    return [np.argsort(np.round(vector, 10), kind="stable") for vector in mixtures]


def _improved(order: np.ndarray, edges: tuple[np.ndarray, np.ndarray]) -> np.ndarray:
    """Moves single sites to better places while that lowers the cost (at most two rounds, small graphs only)."""
    n = order.size
    best, value = order.copy(), cost(order, edges)
    if n > 40 or value <= 2 * n:  # a plain chain cannot be bettered
        return best
    for _ in range(2):
        before = value
        for site in range(n):
            here = int(np.flatnonzero(best == site)[0])
            rest = np.delete(best, here)
            for there in range(max(0, here - 6), min(n, here + 7)):
                trial = np.insert(rest, there, site)
                trial_value = cost(trial, edges)
                if trial_value < value - 1e-9:
                    best, value = trial, trial_value
        if value == before:
            break
    return best
