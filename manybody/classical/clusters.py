"""A lower bound of any energy function: the sum of the minima of small clusters (Anderson 1951, Phys. Rev. 83, 1260,
for classical terms).

f is written as a sum of functions of few sites: every term goes to the clusters that hold all its sites, in equal
shares, so that the sum is f again. Clusters are the bonds (the sets of sites of the terms) or, where they exist,
triangles of bonds. Clusters that are equal up to the numbering of sites are minimized once.

The minimum of a cluster is bounded rigorously by multipliers or the relaxation where it is quadratic, exactly where it
is a polynomial in n_1.n_2, and by branch and bound for two vectors, or three with common rotations (small_clusters.py).
Larger clusters of higher degree get the lowest of many starts: then the bound is not rigorous.
"""

import itertools
import math
from dataclasses import dataclass

import numpy as np
from numpy.polynomial import chebyshev

from manybody.classical.minimize import MinimizeSettings, minimize, problem_of
from manybody.classical.multipliers import dual_bound, dual_form, multipliers_at
from manybody.classical.relaxation import relax
from manybody.classical.small_clusters import can_be_bounded, lower_bound
from manybody.model.energy import EnergyFunction, Group


@dataclass(frozen=True)
class ClusterSum:
    """bound of f, whether it is rigorous, and the kind of clusters ("bonds" or "triangles")."""

    bound: float
    rigorous: bool
    kind: str


def cluster_sum(f: EnergyFunction, seed: int = 1, most: int | None = None) -> ClusterSum | None:
    """The best of the cluster bounds of f, a rigorous one where there is one. `f` should be scaled to couplings of
    order one.

    most: coverings with more inequivalent clusters than this are left out; None if no covering remains.
    """
    coverings = [(kind, _pieces(f, clusters)) for kind, clusters in _coverings(f)]
    coverings = [(kind, pieces) for kind, pieces in coverings if most is None or len(pieces) <= most]
    known: dict[str, tuple[float, bool]] = {}
    sums = []
    for kind, pieces in coverings:
        evaluations = int(np.clip(1_000_000 / len(pieces), 5_000, 150_000))
        for name, (piece, _) in pieces.items():
            if name not in known:
                known[name] = _cluster_minimum(piece, seed, evaluations)
        terms = [count * known[name][0] for name, (_, count) in pieces.items()]
        rounding = 2.0**-50 * math.fsum(abs(term) for term in terms)
        rigorous = all(known[name][1] for name in pieces)
        sums.append(ClusterSum(f.constant + math.fsum(terms) - rounding, rigorous, kind))
    return max(sums, key=lambda s: (s.rigorous, s.bound), default=None)


def norm_bound(f: EnergyFunction) -> float:
    """A weak lower bound that every function has: each term at minus its norm, since sum_q C_kq(n)^2 = 1. Rigorous,
    rounding included.
    """
    scaled, exponent = f.rescaled()
    norms = [
        np.linalg.norm(group.coefficients.reshape(group.terms, -1), axis=1).sum()
        for group in scaled.groups
        if any(group.ranks)
    ]
    total = math.fsum(norms)
    bound = scaled.mean - total - 2.0**-40 * (total + abs(scaled.mean))
    return math.ldexp(bound, exponent) + f.constant - 2.0**-50 * abs(f.constant)


def _coverings(f: EnergyFunction) -> list[tuple[str, list[tuple[int, ...]]]]:
    bonds = {tuple(term) for g in f.groups for term in np.sort(g.sites, axis=1).tolist()}
    # a bond inside a larger one, and single sites inside bonds, go with those
    by_site: dict[int, list[tuple[int, ...]]] = {}
    for bond in bonds:
        for site in bond:
            by_site.setdefault(site, []).append(bond)
    largest = [
        bond
        for bond in bonds
        if not any(len(other) > len(bond) and set(bond) <= set(other) for other in by_site[bond[0]])
    ]
    coverings = [("bonds", sorted(largest))]
    pairs = {bond for bond in largest if len(bond) == 2}
    neighbours: dict[int, set[int]] = {}
    for a, b in pairs:
        neighbours.setdefault(a, set()).add(b)
        neighbours.setdefault(b, set()).add(a)
    triangles = {tuple(sorted((a, b, c))) for a, b in pairs for c in neighbours[a] & neighbours[b]}
    if triangles and len(triangles) <= 200_000:
        inside = {pair for t in triangles for pair in itertools.combinations(t, 2)}
        coverings.append(("triangles", sorted(triangles) + sorted(set(largest) - inside)))
    return coverings


def _pieces(f: EnergyFunction, clusters: list[tuple[int, ...]]) -> dict[str, tuple[EnergyFunction, int]]:
    """fingerprint -> (share of f on a cluster, how many clusters have the same one)."""
    owners: dict[int, list[int]] = {}
    for number, cluster in enumerate(clusters):
        for site in cluster:
            owners.setdefault(site, []).append(number)
    parts: list[list[Group]] = [[] for _ in clusters]
    for group in f.groups:
        for sites, block in zip(group.sites.tolist(), group.coefficients, strict=True):
            shared = [k for k in owners[sites[0]] if set(sites) <= set(clusters[k])]
            for k in shared:
                local = np.array([[clusters[k].index(site) for site in sites]])
                parts[k].append(Group(group.key, local, block[None] / len(shared)))
    pieces: dict[str, tuple[EnergyFunction, int]] = {}
    for cluster, groups in zip(clusters, parts, strict=True):
        piece = EnergyFunction(len(cluster), 0.0, groups)
        name = piece.fingerprint()
        known, count = pieces.get(name, (piece, 0))
        pieces[name] = (known, count + 1)
    return pieces


def _cluster_minimum(piece: EnergyFunction, seed: int, evaluations: int = 400_000) -> tuple[float, bool]:
    """(lower bound or lowest value found, whether it is a rigorous bound)."""
    size = sum(float(np.abs(g.coefficients).sum()) for g in piece.groups)
    found = minimize(piece, MinimizeSettings(starts=64, seed=seed))
    best = -math.inf
    if piece.is_quadratic:
        form = dual_form(problem_of(piece, MinimizeSettings()).form)
        best = dual_bound(form, multipliers_at(form, found.configuration))
        if found.energy - best > 1e-9 * size:
            solution = relax(form, np.random.default_rng(seed), found.configuration)
            best = max(best, dual_bound(form, solution.multipliers))
    if piece.sites == 2 and len(piece.symmetry_axes()) == 3 and not piece.is_quadratic:
        return _function_of_product(piece) - 1e-13 * size, True
    if found.energy - best > 1e-9 * size and can_be_bounded(piece):
        tied = [m.configuration for m in found.minima if m.energy <= found.energy + 1e-9 * size]
        best = max(best, lower_bound(piece, np.array(tied[:32]), evaluations))
    if best > -math.inf:
        return best, True
    return found.energy, False


def _function_of_product(piece: EnergyFunction) -> float:
    """Minimum over x = n_1.n_2 in [-1, 1] of a polynomial: its values at the ends and at the zeros of
    its derivative.
    """
    degree = max(group.ranks[0] for group in piece.groups)
    x = chebyshev.chebpts1(degree + 1)
    up = np.broadcast_to([0.0, 0.0, 1.0], (len(x), 3))
    turned = np.stack([np.sqrt(1 - x**2), np.zeros_like(x), x], axis=1)
    polynomial = chebyshev.Chebyshev.fit(x, piece.value(np.stack([up, turned], axis=1)), degree, domain=[-1, 1])
    roots = polynomial.deriv().roots() if degree > 1 else np.zeros(0)
    points = np.clip(np.concatenate([[-1.0, 1.0], roots.real]), -1.0, 1.0)
    return float(polynomial(points).min())
