"""An operator sum as a compressed matrix-product operator, for pairs of any range and terms on any number of sites.

At every cut the terms that cross it form a matrix: rows are operator strings on the left (a channel of the cut before
times one site operator), columns the strings still to come. Each connected piece of that matrix needs as many channels
as its rank. A minimal vertex cover of its bipartite graph (Koenig 1931; for operators Ren, Li, Jiang, Shuai 2020, J.
Chem. Phys. 153, 084118) gives sparse channels and is kept unless a singular-value decomposition needs fewer. Two
channels always exist: 0 "nothing yet", 1 "finished".
"""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from scipy import sparse
from scipy.sparse import csgraph

Letter = tuple[int, int]
"""(rank, step) of a ladder operator of one site."""

START, END = 0, 1
RANK_TOLERANCE = 1e-13
LARGEST_SVD = 1500


@dataclass(frozen=True, eq=False)
class Terms:
    """sum over terms of coefficient * product of ladder operators; positions ascend inside a term. Every list entry is
    one term."""

    length: int
    positions: list[tuple[int, ...]]
    letters: list[tuple[Letter, ...]]
    coefficients: np.ndarray


@dataclass(frozen=True, eq=False)
class OperatorSite:
    """One site of a matrix-product operator as a list of numbers.

    entries (n, 4): left channel, right channel, outgoing and incoming local state; weights (n,). delta_left,
    delta_right: charge that the operators of a channel have moved to the left of the cut. start, end: see contraction
    (exchanged in the mirror).
    """

    entries: np.ndarray
    weights: np.ndarray
    delta_left: np.ndarray
    delta_right: np.ndarray
    start: int = START
    end: int = END

    def arrays(self, dtype: np.dtype) -> tuple:
        """(delta_left, delta_right, start, end, entries, weights of the given number type), for compiled functions."""
        weights = self.weights.astype(dtype, copy=False)
        return self.delta_left, self.delta_right, self.start, self.end, self.entries, weights

    def mirrored(self) -> "OperatorSite":
        entries = np.ascontiguousarray(self.entries[:, [1, 0, 2, 3]])
        return OperatorSite(entries, self.weights, -self.delta_right, -self.delta_left, self.end, self.start)


def build(terms: Terms, matrices: Sequence[dict[Letter, np.ndarray]], conserved: bool) -> list[OperatorSite]:
    """One OperatorSite per position. matrices[p][letter] is the (d, d) matrix at position p. With `conserved` every
    term must have total step zero and letters of step q raise the charge by q. Equal sites share one object."""
    letters = sorted({letter for word in terms.letters for letter in word})
    number = {letter: index + 1 for index, letter in enumerate(letters)}
    where, symbol, following, heads = _suffixes(terms, number)
    begins = [np.zeros(0, np.int64)] * terms.length
    weights = [np.zeros(0, terms.coefficients.dtype)] * terms.length
    first = np.array([places[0] for places in terms.positions], np.int64)
    for position in np.unique(first):
        begins[position], weights[position] = heads[first == position], terms.coefficients[first == position]
    largest = np.abs(terms.coefficients).max(initial=0.0)

    delta = np.zeros(2, np.int64)
    row, rest, value = np.zeros(0, np.int64), np.zeros(0, np.int64), np.zeros(0, terms.coefficients.dtype)
    sites: list[OperatorSite] = []
    shared: dict[tuple, OperatorSite] = {}
    for position in range(terms.length):
        row = np.concatenate([row, np.full(begins[position].size, START)])
        rest = np.concatenate([rest, begins[position]])
        value = np.concatenate([value, weights[position]])
        here = where[rest] == position
        letter = np.where(here, symbol[rest], 0)
        rest = np.where(here, following[rest], rest)
        finished = rest < 0
        links = [(row[finished], np.full(finished.sum(), END), letter[finished], value[finished])]
        links.append((np.array([START, END]), np.array([START, END]), np.zeros(2, np.int64), np.ones(2)))
        row, letter, rest, value = (array[~finished] for array in (row, letter, rest, value))
        new_links, new_row, new_rest, new_value, parent = _cut(row, letter, rest, value, len(letters) + 1, largest)
        links.append(new_links)
        step = np.array([0] + [q if conserved else 0 for _, q in letters])
        new_delta = np.concatenate([np.zeros(2, np.int64), delta[parent[0]] + step[parent[1]]])
        merged = [np.concatenate(arrays) for arrays in zip(*links, strict=True)]
        key = (id(matrices[position]), *(array.tobytes() for array in (*merged, delta, new_delta)))
        if key not in shared:
            shared[key] = _site(merged, letters, matrices[position], delta, new_delta)
        sites.append(shared[key])
        delta, row, rest, value = new_delta, new_row, new_rest, new_value
    return sites


def _suffixes(terms: Terms, number: dict[Letter, int]):
    """Every word and every tail of one as a node (position, letter, next node or -1); the node where each term
    begins."""
    nodes: dict[tuple[int, int, int], int] = {}
    heads = np.empty(len(terms.positions), np.int64)
    for index, (places, word) in enumerate(zip(terms.positions, terms.letters, strict=True)):
        tail = -1
        for place, letter in zip(reversed(places), reversed(word), strict=True):
            tail = nodes.setdefault((place, number[letter], tail), len(nodes))
        heads[index] = tail
    table = np.array(list(nodes), np.int64).reshape(-1, 3)
    return table[:, 0], table[:, 1], table[:, 2], heads


def _cut(row, letter, rest, value, letters: int, largest: float):
    """Channels for the strings that cross a cut.

    Returns the links (left channel, new channel, letter, weight), the entries (new channel, rest, value) and for every
    new channel one (left channel, letter) that feeds it.
    """
    strings, r = np.unique(row * letters + letter, return_inverse=True)
    tails, c = np.unique(rest, return_inverse=True)
    shape = (strings.size, tails.size)
    cells, place = np.unique(r * max(tails.size, 1) + c, return_inverse=True)
    total = np.zeros(cells.size, value.dtype)
    np.add.at(total, place, value)
    keep = np.abs(total) > 1e-15 * largest
    r, c, value = cells[keep] // max(tails.size, 1), cells[keep] % max(tails.size, 1), total[keep]
    if (np.bincount(c, minlength=1) <= 1).all() or (np.bincount(r, minlength=1) <= 1).all():
        # Stars only: every piece has rank one, its centre is the cover.
        by_rows = bool((np.bincount(c, minlength=1) <= 1).all())
        rows, columns = np.zeros(shape[0], bool), np.zeros(shape[1], bool)
        (rows if by_rows else columns)[r if by_rows else c] = True
        row_label, column_label = np.zeros(shape[0], np.int64), np.zeros(shape[1], np.int64)
        worth, count = np.zeros(1, bool), 1
    else:
        pattern = sparse.csr_array((np.ones(r.size), (r, c)), shape)
        rows, columns = _cover(pattern)
        both = sparse.block_array([[None, pattern], [pattern.T, None]])
        count, label = csgraph.connected_components(both, directed=False)
        row_label, column_label = label[: shape[0]], label[shape[0] :]
        row_size = np.bincount(row_label, minlength=count)
        column_size = np.bincount(column_label, minlength=count)
        cover_size = np.bincount(row_label[rows], minlength=count)
        cover_size += np.bincount(column_label[columns], minlength=count)
        worth = (cover_size > 1) & (np.maximum(row_size, column_size) <= LARGEST_SVD)

    links, entries, parents, channels = [], [], [], 2
    dense = np.zeros(count, bool)
    for piece in np.flatnonzero(worth):
        mine = row_label[r] == piece
        up, a = np.unique(r[mine], return_inverse=True)
        across, b = np.unique(c[mine], return_inverse=True)
        block = np.zeros((up.size, across.size), value.dtype)
        block[a, b] = value[mine]
        u, s, vh = np.linalg.svd(block, full_matrices=False)
        rank = int((s > RANK_TOLERANCE * max(s[0], 1e-3 * largest)).sum())
        if rank >= cover_size[piece]:
            continue
        dense[piece] = True
        new = np.arange(channels, channels + rank)
        links.append((np.repeat(up, rank), np.tile(new, up.size), u[:, :rank].reshape(-1)))
        entries.append((np.repeat(new, across.size), np.tile(across, rank), (s[:rank, None] * vh[:rank]).reshape(-1)))
        parents.append(np.full(rank, up[0]))
        channels += rank
    rows &= ~dense[row_label]
    columns &= ~dense[column_label]
    edge = ~dense[row_label[r]]
    r, c, value = r[edge], c[edge], value[edge]
    own = np.flatnonzero(rows)
    of_row = np.full(shape[0], -1)
    of_row[own] = np.arange(channels, channels + own.size)
    channels += own.size
    links.append((own, of_row[own], np.ones(own.size)))
    parents.append(own)
    by_row = rows[r]
    entries.append((of_row[r[by_row]], c[by_row], value[by_row]))
    r, c, value = r[~by_row], c[~by_row], value[~by_row]
    chosen = np.flatnonzero(columns)
    of_column = np.full(shape[1], -1)
    of_column[chosen] = np.arange(channels, channels + chosen.size)
    links.append((r, of_column[c], value))
    feeding = np.zeros(chosen.size, np.int64)
    feeding[of_column[c] - channels] = r
    parents.append(feeding)
    entries.append((of_column[chosen], chosen, np.ones(chosen.size)))

    source, channel, weight = (np.concatenate(arrays) for arrays in zip(*links, strict=True))
    new_row, new_rest, new_value = (np.concatenate(arrays) for arrays in zip(*entries, strict=True))
    parent = strings[np.concatenate(parents)] if strings.size else np.zeros(0, np.int64)
    return (
        (strings[source] // letters, channel, strings[source] % letters, weight),
        new_row,
        tails[new_rest],
        new_value,
        (parent // letters, parent % letters),
    )


def _cover(pattern: sparse.csr_array) -> tuple[np.ndarray, np.ndarray]:
    """Minimal vertex cover (rows, columns as masks) of a bipartite graph from a maximum matching."""
    rows, columns = pattern.shape
    if pattern.nnz == 0:
        return np.zeros(rows, bool), np.zeros(columns, bool)
    match = csgraph.maximum_bipartite_matching(sparse.csr_matrix(pattern), perm_type="column")
    seen_rows = match < 0
    seen_columns = np.zeros(columns, bool)
    row_of = np.full(columns, -1)
    row_of[match[match >= 0]] = np.flatnonzero(match >= 0)
    frontier = seen_rows.copy()
    transposed = pattern.T.tocsr()
    while frontier.any():
        reached = ((transposed @ frontier.astype(float)) > 0) & ~seen_columns
        seen_columns |= reached
        back = row_of[reached]
        frontier = np.zeros(rows, bool)
        frontier[back[back >= 0]] = True
        frontier &= ~seen_rows
        seen_rows |= frontier
    return ~seen_rows, seen_columns


def _site(links, letters, matrices, delta_left, delta_right) -> OperatorSite:
    """Numbers of one site from links (left channel, right channel, letter number, weight)."""
    left, right, letter, weight = links
    dimension = next(iter(matrices.values())).shape[0]
    rows = [np.arange(dimension)] + [None] * len(letters)
    columns, values = list(rows), [np.ones(dimension)] + [None] * len(letters)
    used = np.unique(letter).tolist()
    for index in used:
        if index:
            matrix = matrices[letters[index - 1]]
            rows[index], columns[index] = np.nonzero(matrix)
            values[index] = matrix[rows[index], columns[index]]
    pieces, numbers = [], []
    for index in used:
        mine = letter == index
        size = rows[index].size
        pieces.append(
            np.stack(
                [
                    np.repeat(left[mine], size),
                    np.repeat(right[mine], size),
                    np.tile(rows[index], mine.sum()),
                    np.tile(columns[index], mine.sum()),
                ],
                axis=1,
            )
        )
        numbers.append(np.outer(weight[mine], values[index]).reshape(-1))
    entries, weights = _merged(np.concatenate(pieces), np.concatenate(numbers))
    return OperatorSite(entries, weights, delta_left, delta_right)


def _merged(entries: np.ndarray, weights: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Equal entries once, with the sum of their weights, in lexical order."""
    shape = tuple(entries.max(axis=0) + 1)
    keys, place = np.unique(np.ravel_multi_index(entries.T, shape), return_inverse=True)
    total = np.zeros(keys.size, weights.dtype)
    np.add.at(total, place, weights)
    return np.ascontiguousarray(np.stack(np.unravel_index(keys, shape), axis=1)), total


def composite(first: OperatorSite, second: OperatorSite, dims: tuple[int, int]) -> OperatorSite:
    """Two neighbouring sites as one with local states s1 * d2 + s2."""
    order = np.argsort(second.entries[:, 0], kind="stable")
    lower = np.searchsorted(second.entries[order, 0], first.entries[:, 1], side="left")
    upper = np.searchsorted(second.entries[order, 0], first.entries[:, 1], side="right")
    count = upper - lower
    a = np.repeat(np.arange(count.size), count)
    b = order[np.repeat(lower, count) + np.arange(a.size) - np.repeat(np.cumsum(count) - count, count)]
    left, right = first.entries[a], second.entries[b]
    combined = np.stack(
        [left[:, 0], right[:, 1], left[:, 2] * dims[1] + right[:, 2], left[:, 3] * dims[1] + right[:, 3]], axis=1
    )
    entries, weights = _merged(combined, first.weights[a] * second.weights[b])
    return OperatorSite(
        np.ascontiguousarray(entries), weights, first.delta_left, second.delta_right, first.start, second.end
    )
