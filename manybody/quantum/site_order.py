"""The order in which sites of a graph stand in a matrix-product state."""

import numpy as np
from scipy import sparse
from scipy.sparse import csgraph

from manybody.model.energy import EnergyFunction


def site_order(energy: EnergyFunction) -> np.ndarray:
    """order (N,): position p holds site order[p]; the cheapest of the given order, bandwidth reduction and the Fiedler vector.

    Cost of an order: the sum over cuts of the squared number of sites on either side that take part in a term across the cut (the
    smaller side counts), which stands for the width of the operator and the entanglement; plus the squared ranges of all terms over N,
    since sweeps of few states do not find a bond between far ends (a ring is folded). The given order wins ties.
    """
    graph = interaction_graph(energy)
    n = energy.sites
    if n < 3:
        return np.arange(n)
    candidates = [np.arange(n)]
    candidates.append(csgraph.reverse_cuthill_mckee(graph, symmetric_mode=True).astype(np.int64))
    candidates.extend(_fiedler_orders(graph))
    candidates = [_improved(order, graph) if n <= 300 else order for order in candidates]
    costs = [cost(order, graph) for order in candidates]
    return candidates[int(np.argmin(costs))]


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


def cost(order: np.ndarray, graph: sparse.csr_matrix) -> float:
    place = np.empty(order.size, np.int64)
    place[order] = np.arange(order.size)
    coo = graph.tocoo()
    ranges = (place[coo.row] - place[coo.col]).astype(float)
    return float((_boundary(order, graph) ** 2).sum() + (ranges**2).sum() / (2 * order.size))


def _boundary(order: np.ndarray, graph: sparse.csr_matrix) -> np.ndarray:
    """(N - 1,) for every cut the smaller of the numbers of left and right sites with a neighbour across it."""
    n = order.size
    place = np.empty(n, np.int64)
    place[order] = np.arange(n)
    coo = graph.tocoo()
    last, first = place.copy(), place.copy()
    np.maximum.at(last, coo.row, place[coo.col])
    np.minimum.at(first, coo.row, place[coo.col])
    # A site at place p with its farthest right neighbour at `last` is an open left site of the cuts p ... last - 1.
    left, right = np.zeros(n + 1), np.zeros(n + 1)
    np.add.at(left, place, 1)
    np.add.at(left, last, -1)
    np.add.at(right, first, 1)
    np.add.at(right, place, -1)
    return np.minimum(np.cumsum(left), np.cumsum(right))[: n - 1]


def _fiedler_orders(graph: sparse.csr_matrix) -> list[np.ndarray]:
    if graph.shape[0] > 2000:
        return []
    laplacian = csgraph.laplacian(graph).toarray()
    _, vectors = np.linalg.eigh(laplacian)
    # Where the second eigenvalue is degenerate (a square), a mixture with the third orders one direction before the other.
    mixtures = [vectors[:, 1]]
    if graph.shape[0] > 3:
        mixtures += [vectors[:, 1] + t * vectors[:, 2] for t in (0.05, -0.05, 1.0, -1.0)]
    return [np.argsort(np.round(vector, 10), kind="stable") for vector in mixtures]


def _improved(order: np.ndarray, graph: sparse.csr_matrix) -> np.ndarray:
    """Moves single sites to better places while that lowers the cost (at most two rounds over small graphs)."""
    n = order.size
    if n > 40:
        return order
    best, value = order.copy(), cost(order, graph)
    for _ in range(2):
        before = value
        for site in range(n):
            here = int(np.flatnonzero(best == site)[0])
            rest = np.delete(best, here)
            for there in range(max(0, here - 6), min(n, here + 7)):
                trial = np.insert(rest, there, site)
                trial_value = cost(trial, graph)
                if trial_value < value - 1e-9:
                    best, value = trial, trial_value
        if value == before:
            break
    return best
