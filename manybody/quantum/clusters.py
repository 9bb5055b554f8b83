"""Ways to cover the terms of an operator by overlapping clusters of sites."""

from collections import deque
from dataclasses import dataclass

import numpy as np

from manybody.model.energy import EnergyFunction, Group


@dataclass(frozen=True)
class Cover:
    """A choice of clusters: site tuples, every term of two or more sites inside at least one of them.

    centres: the centre of each cluster; a term then belongs to it only if it holds that site. None: every term inside.
    """

    kind: str
    clusters: tuple[tuple[int, ...], ...]
    centres: tuple[int | None, ...]


def split(symbol: EnergyFunction, cover: Cover) -> list[EnergyFunction]:
    """One energy function per cluster, sites renumbered in the order of the cluster; together exactly the terms of
    `symbol`.

    A term of several sites is shared equally among the clusters that hold it. A one-site term is shared in proportion
    to the number of several-site terms (with their shares) that the cluster has at that site, since the bonds are
    what it competes with; equally, where a site has none.
    """
    sites = symbol.sites
    members = [set(cluster) for cluster in cover.clusters]
    holding: list[list[int]] = [[] for _ in range(sites)]
    for number, cluster in enumerate(cover.clusters):
        for site in cluster:
            holding[site].append(number)
    weight = [dict.fromkeys(cluster, 0.0) for cluster in cover.clusters]
    pieces: list[list[Group]] = [[] for _ in cover.clusters]
    place = [{site: k for k, site in enumerate(cluster)} for cluster in cover.clusters]
    for group in symbol.groups:
        if len(group.key) < 2:
            continue
        chosen: list[tuple[list, list]] = [([], []) for _ in cover.clusters]
        for where, coefficients in zip(group.sites.tolist(), group.coefficients, strict=True):
            inside = [
                number
                for number in holding[where[0]]
                if members[number].issuperset(where)
                and (cover.centres[number] is None or cover.centres[number] in where)
            ]
            if not inside:
                raise ValueError(f"the term at sites {where} is in no cluster")
            for number in inside:
                chosen[number][0].append([place[number][site] for site in where])
                chosen[number][1].append(coefficients / len(inside))
                for site in where:
                    weight[number][site] += 1.0 / len(inside)
        for number, (where, coefficients) in enumerate(chosen):
            if where:
                pieces[number].append(Group(group.key, np.array(where), np.array(coefficients)))
    total = np.zeros(sites)
    for shares in weight:
        for site, share in shares.items():
            total[site] += share
    for group in symbol.groups:
        if len(group.key) != 1:
            continue
        for (site,), coefficients in zip(group.sites.tolist(), group.coefficients, strict=True):
            for number in holding[site]:
                share = weight[number][site] / total[site] if total[site] else 1.0 / len(holding[site])
                if share:
                    pieces[number].append(
                        Group(group.key, np.array([[place[number][site]]]), share * coefficients[None])
                    )
    return [EnergyFunction(len(cluster), 0.0, own) for cluster, own in zip(cover.clusters, pieces, strict=True)]


def covers(symbol: EnergyFunction, largest: int) -> list[Cover]:
    """Candidate covers with at most `largest` sites to a cluster: bonds, stars, neighbourhoods, triangles, tetrahedra,
    plaquettes, and pieces of consecutive site numbers of every size up to it. Sites without any coupling form
    clusters of their own.
    """
    terms = [tuple(where) for group in symbol.groups if len(group.key) > 1 for where in group.sites.tolist()]
    supports = _maximal(set(terms))
    neighbours: list[set[int]] = [set() for _ in range(symbol.sites)]
    for term in supports:
        for i in term:
            neighbours[i].update(set(term) - {i})
    alone = [(i,) for i in range(symbol.sites) if not neighbours[i]]

    def plain(kind: str, clusters) -> Cover | None:
        """The given clusters, and the terms outside them as clusters of their own."""
        clusters = [c for c in clusters if len(c) <= largest]
        if not clusters:
            return None
        sets_at: list[list[set[int]]] = [[] for _ in range(symbol.sites)]
        for cluster in clusters:
            whole = set(cluster)
            for site in cluster:
                sets_at[site].append(whole)
        rest = [term for term in supports if not any(s.issuperset(term) for s in sets_at[term[0]])]
        everything = (*clusters, *rest, *alone)
        return Cover(kind, tuple(everything), (None,) * len(everything))

    found = [plain("bonds", supports) if supports else None]
    stars = [(i, *sorted(neighbours[i])) for i in range(symbol.sites) if neighbours[i]]
    if stars and max(len(star) for star in stars) <= largest:
        centres = (*(star[0] for star in stars), *(None for _ in alone))
        found.append(Cover("stars", (*stars, *alone), centres))
        for number, centre_set in enumerate(_two_colours(neighbours)):
            some = [star for star in stars if star[0] in centre_set]
            centres = (*(star[0] for star in some), *(None for _ in alone))
            found.append(Cover(f"stars of sublattice {'AB'[number]}", (*some, *alone), centres))
    linked_leaves = any(neighbours[i] & neighbours[j] for i in range(symbol.sites) for j in neighbours[i])
    for radius in (1, 2):
        # Without triangles the neighbourhoods of radius 1 are the stars.
        if radius == 1 and not linked_leaves:
            continue
        balls = [_ball(i, radius, neighbours) for i in range(symbol.sites) if neighbours[i]]
        found.append(plain(f"neighbourhoods of radius {radius}", [ball for ball in balls if len(ball) < symbol.sites]))
    pairs_only = all(len(term) == 2 for term in supports)
    if pairs_only and symbol.sites <= 5000:
        triangles = _cliques([(i, j) for i, j in supports], neighbours)
        found.append(plain("triangles", triangles))
        tetrahedra = _cliques(triangles, neighbours) if len(triangles) <= 20000 else []
        found.append(plain("tetrahedra", tetrahedra))
        found.append(plain("plaquettes", _plaquettes(neighbours)))
    for size in range(3, min(largest, symbol.sites - 1) + 1):
        found.append(plain(f"pieces of {size}", _pieces(symbol.sites, size, neighbours)))
    if not supports:
        found.append(Cover("sites", tuple(alone), (None,) * len(alone)))
    return [cover for cover in found if cover is not None]


def canonical_order(symbol: EnergyFunction, labels: list) -> list[int]:
    """An order of the sites that depends as little as possible on their numbers.

    Sites are told apart by their labels (anything sortable), then by the coefficients of their terms, then by those
    of the sites they meet there, and so on; ties are broken one site at a time. Equal functions up to a renumbering
    mostly get equal orders; where they do not, nothing but a repeated diagonalization is lost.
    """
    sites = symbol.sites
    if sites == 1:
        return [0]
    incident: list[list[tuple]] = [[] for _ in range(sites)]
    for number, group in enumerate(symbol.groups):
        for where, coefficients in zip(group.sites.tolist(), np.round(group.coefficients, 12), strict=True):
            content = (coefficients + 0.0).tobytes()
            for slot, site in enumerate(where):
                others = tuple(other for k, other in enumerate(where) if k != slot)
                # Both reading directions of a symmetric pair matrix look alike.
                if coefficients.ndim == 2 and np.array_equal(coefficients, coefficients.T):
                    incident[site].append((number, 0, content, others))
                else:
                    incident[site].append((number, slot, content, others))
    kinds = sorted(set(labels))
    colour = [kinds.index(label) for label in labels]
    while True:
        colour = _refined(colour, incident)
        counts = np.bincount(colour)
        if counts.max() == 1:
            return sorted(range(sites), key=lambda i: colour[i])
        tied = int(np.flatnonzero(counts > 1)[0])
        first = colour.index(tied)
        colour = [2 * c + (c > tied or (c == tied and i != first)) for i, c in enumerate(colour)]


def _refined(colour: list[int], incident: list[list[tuple]]) -> list[int]:
    while True:
        signature = [
            (colour[i], sorted((n, s, content, tuple(colour[o] for o in others)) for n, s, content, others in terms))
            for i, terms in enumerate(incident)
        ]
        ranks = {repr(sig): None for sig in sorted(signature)}
        number = {key: k for k, key in enumerate(ranks)}
        new = [number[repr(sig)] for sig in signature]
        if len(ranks) == len(set(colour)):
            return new
        colour = new


def _maximal(terms: set[tuple[int, ...]]) -> list[tuple[int, ...]]:
    """Terms that are not inside another term."""
    longer = [set(term) for term in terms if len(term) > 2]
    return sorted(term for term in terms if not any(set(term) < other for other in longer))


def _cliques(smaller: list[tuple[int, ...]], neighbours: list[set[int]]) -> list[tuple[int, ...]]:
    """Complete subgraphs one site larger than those given, each once, sites ascending."""
    found = []
    for clique in smaller:
        common = set.intersection(*[neighbours[i] for i in clique])
        found += [(*clique, j) for j in sorted(common) if j > clique[-1]]
    return found


def _plaquettes(neighbours: list[set[int]]) -> list[tuple[int, ...]]:
    """The shortest cycles without chords of at least four sites, of length four, else five, else six."""
    for length in (4, 5, 6):
        found = {}
        for first in range(len(neighbours)):
            queue = deque([(first,)])
            while queue:
                path = queue.popleft()
                for j in neighbours[path[-1]]:
                    if j <= first or j in path:
                        continue
                    touching = [k for k in path[:-1] if k in neighbours[j]]
                    if len(path) + 1 == length:
                        if touching == [first] and path[1] < j:
                            found[frozenset((*path, j))] = (*path, j)
                    elif not touching:
                        queue.append((*path, j))
            if len(found) > 20000:
                return []
        if found:
            return list(found.values())
    return []


def _ball(centre: int, radius: int, neighbours: list[set[int]]) -> tuple[int, ...]:
    """All sites within so many steps, nearest first."""
    ball, shell = [centre], {centre}
    for _ in range(radius):
        shell = set().union(*(neighbours[i] for i in shell)) - set(ball)
        ball += sorted(shell)
    return tuple(ball)


def _two_colours(neighbours: list[set[int]]) -> list[set[int]]:
    """The two sublattices if no term links sites of the same one, else nothing."""
    side: dict[int, int] = {}
    for root in range(len(neighbours)):
        if root in side:
            continue
        side[root] = 0
        queue = deque([root])
        while queue:
            i = queue.popleft()
            for j in neighbours[i]:
                if j not in side:
                    side[j] = 1 - side[i]
                    queue.append(j)
                elif side[j] == side[i]:
                    return []
    return [{i for i, s in side.items() if s == number and neighbours[i]} for number in (0, 1)]


def _pieces(sites: int, size: int, neighbours: list[set[int]]) -> list[tuple[int, ...]]:
    """Connected parts of all windows of `size` consecutive site numbers, windows reaching over the ends included.

    Windows wrap round where the first and the last site are coupled, else they are cut off, so that inside a chain
    every term is covered by the same number of windows.
    """
    closed = sites - 1 in neighbours[0]
    clusters = []
    for start in range(0 if closed else 2 - size, sites if closed else sites - 1):
        window = range(start, start + size)
        window = [i % sites for i in window] if closed else [i for i in window if 0 <= i < sites]
        clusters += [part for part in _connected_parts(window, neighbours) if len(part) > 1]
    return clusters


def _connected_parts(window: list[int], neighbours: list[set[int]]) -> list[tuple[int, ...]]:
    left, parts = dict.fromkeys(window), []
    while left:
        seed = next(iter(left))
        part, queue = {seed}, deque([seed])
        while queue:
            for j in neighbours[queue.popleft()]:
                if j in left and j not in part:
                    part.add(j)
                    queue.append(j)
        for i in part:
            del left[i]
        parts.append(tuple(i for i in window if i in part))
    return parts
