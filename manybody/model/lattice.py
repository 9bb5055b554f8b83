"""Lattices: numbered sites, their positions, and the pairs of a shell, a direction or a label.

Sites count from 0, along the first direction slowest. A pair is ordered (i, j) as generated or listed. Lengths are in
units of the nearest distance. Boundaries are open unless a direction is made periodic.
"""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from scipy import sparse

from manybody.model.lattice_cells import CELLS, SHELLS, cell_pairs, cell_positions, count_cell_pairs
from manybody.model.lattice_table import PairTable

SHAPES = (
    "chain", "ring", "ladder", "square", "triangular", "honeycomb", "kagome", "cubic",
    "complete", "bipartite", "star", "table",
)  # fmt: skip
BY_SITES = ("chain", "ring", "ladder", "complete", "star")  # size given as a number of sites; the others by extent
DIMENSIONS = {"square": 2, "triangular": 2, "honeycomb": 2, "kagome": 2, "cubic": 3, "bipartite": 2}
MAX_PAIRS = 50_000_000


@dataclass(frozen=True)
class Lattice:
    """One lattice of one size; hashable and small, since positions and pairs are generated when asked for.

    `extent` counts cells per direction (ladder: rungs; complete, star: sites; bipartite: sites of either part;
    table: empty), `periodic` has one entry per direction of a space-filling lattice. Build one with the functions
    below (chain, ring, ...) or `lattice`; they check what they are given.
    """

    shape: str
    extent: tuple[int, ...]
    periodic: tuple[bool, ...] = ()
    table: PairTable | None = None

    @property
    def sites(self) -> int:
        if self.table is not None:
            return self.table.sites
        cells = int(np.prod(self.extent, dtype=object))
        if self.shape == "bipartite":
            return sum(self.extent)
        return cells * len(CELLS[self.cell].basis) if self.cell else cells

    @property
    def cell(self) -> str:
        """Name of the unit cell, "" for a graph without one."""
        name = "chain" if self.shape == "ring" else self.shape
        return name if name in CELLS else ""

    @property
    def positions(self) -> np.ndarray:
        """(N, 3). Rings and complete graphs lie on a circle, a table without positions likewise."""
        count = self.sites
        if self.shape == "star":
            return np.concatenate([np.zeros((1, 3)), _circle(count - 1, radius=1.0)])
        if self.shape == "bipartite":
            return np.array([(k, part, 0) for part in (0, 1) for k in range(self.extent[part])], dtype=float)
        if self.table is not None and self.table.positions:
            return np.array(self.table.positions, dtype=float)
        if self.shape == "ring" or not self.cell:
            return _circle(count)
        return cell_positions(self.cell, self.extent)

    @property
    def directions(self) -> tuple[str, ...]:
        return CELLS[self.cell].directions if self.cell else ()

    @property
    def selections(self) -> tuple[str, ...]:
        """Every name that `pairs` takes here."""
        if self.table is not None:
            return ("all", *self.table.names)
        return ((*SHELLS, *self.directions) if self.cell else SHELLS[:1]) + ("all",)

    def pairs(self, name: str = "nearest") -> np.ndarray:
        """Pairs (P, 2) of a shell, a direction, a label, or "all".

        "all" is every pair of sites i < j; of a table, every pair it lists. Each two sites come at most once.
        ValueError: a name unknown here, a torus too small, or a table that lists a pair under two labels ("all").
        """
        self.count_pairs(name)
        if self.table is not None:
            pairs = np.array(self.table.pairs, dtype=np.int64)[self.table.rows(name)]
            if name == "all":
                both, counts = np.unique(np.sort(pairs, axis=1), axis=0, return_counts=True)
                if np.any(counts > 1):
                    i, j = both[np.argmax(counts)]
                    raise ValueError(
                        f"'all' would count the sites {i} and {j} {counts.max()} times, which the table lists under "
                        "several labels; select by label"
                    )
            return pairs
        if name == "all" or self.shape == "complete":
            return np.stack(np.triu_indices(self.sites, 1), axis=1).astype(np.int64)
        if self.shape == "star":
            return np.stack([np.zeros(self.sites - 1, int), np.arange(1, self.sites)], axis=1).astype(np.int64)
        if self.shape == "bipartite":
            first, second = self.extent
            return np.stack([np.repeat(np.arange(first), second), first + np.tile(np.arange(second), first)], axis=1)
        return cell_pairs(self.cell, self.extent, self.periodic, name)

    def count_pairs(self, name: str = "nearest") -> int:
        """How many pairs a name selects, without making them. ValueError as of `pairs`, or if there are too many."""
        if name not in self.selections:
            raise ValueError(f"'{name}' selects no pairs of {self.describe()}; it has {', '.join(self.selections)}")
        if self.table is not None:
            return len(self.table.rows(name))
        if name == "all" or self.shape == "complete":
            count = self.sites * (self.sites - 1) // 2
        elif self.cell:
            count = count_cell_pairs(self.cell, self.extent, self.periodic, name)
        else:
            count = self.sites - 1 if self.shape == "star" else self.extent[0] * self.extent[1]
        if count > MAX_PAIRS:
            raise ValueError(f"'{name}' selects {count} pairs of {self.describe()}; at most {MAX_PAIRS} are allowed")
        return count

    def exchange(self, name: str = "all") -> np.ndarray:
        """The table's own exchange matrices (P, 3, 3), in the order of `pairs(name)`."""
        if self.table is None:
            raise ValueError(f"{self.describe()} has no exchange table; only the shape 'table' has")
        return self.table.matrices(name)

    def select_sites(self, which: str | Sequence[int] = "every") -> np.ndarray:
        """Site numbers of "every", "even", "odd" or of a list, which is checked. ValueError says what is wrong."""
        if isinstance(which, str):
            if which == "every":
                return np.arange(self.sites)
            if which in ("even", "odd"):
                return np.flatnonzero(self.colouring() == ("even", "odd").index(which))
            raise ValueError(f"'{which}' selects no sites; allowed are every, even, odd or a list of site numbers")
        chosen = np.asarray(which, dtype=np.int64).reshape(-1)
        if len(chosen) == 0:
            raise ValueError("the list of sites is empty")
        wrong = chosen[(chosen < 0) | (chosen >= self.sites)]
        if len(wrong):
            raise ValueError(f"site {wrong[0]} does not exist: {self.describe()} has sites 0 to {self.sites - 1}")
        if len(np.unique(chosen)) != len(chosen):
            raise ValueError("a site is listed twice")
        return chosen

    def colouring(self) -> np.ndarray:
        """(N,) 0 (even) or 1 (odd): no nearest pair joins equal colours; the lowest site of each piece is even.

        A table is coloured by all pairs it lists. ValueError where an odd cycle leaves no two-colouring.
        """
        count = self.sites
        if self.table is not None:
            pairs = np.array(self.table.pairs, dtype=np.int64)
        else:
            pairs = self.pairs("nearest")
        # In the double cover every pair joins (i, 0) with (j, 1): a site whose two copies meet lies on an odd cycle.
        i = np.concatenate([pairs[:, 0], pairs[:, 1]])
        j = np.concatenate([pairs[:, 1], pairs[:, 0]]) + count
        cover = sparse.coo_array((np.ones(len(i)), (i, j)), shape=(2 * count, 2 * count))
        pieces, piece = sparse.csgraph.connected_components(cover, directed=False)
        lowest = np.full(pieces, 2 * count)
        np.minimum.at(lowest, piece, np.arange(2 * count))
        even, odd = lowest[piece[:count]], lowest[piece[count:]]
        if np.any(even == odd):
            raise ValueError(
                f"{self.describe()} has no even and odd sites: site {int(np.argmax(even == odd))} lies on a cycle of "
                "an odd number of nearest pairs"
            )
        return (even > odd).astype(np.int64)

    def describe(self) -> str:
        """A few words for messages: 'the square lattice with extent [4, 4]'."""
        if self.shape in (*BY_SITES, "table"):
            return f"the {self.shape} of {self.sites} sites"
        return f"the {self.shape} lattice with extent {list(self.extent)}"


def chain(sites: int, periodic: bool = False) -> Lattice:
    """Sites on a line; nearest pairs (i, i + 1), second (i, i + 2), third (i, i + 3).

        0---1---2---3        position of site i: (i, 0, 0)

    `periodic` gives the ring.
    """
    return ring(sites) if periodic else Lattice("chain", (_count(sites, 1, "a chain"),), (False,))


def ring(sites: int) -> Lattice:
    """The periodic chain: nearest pairs (i, i + 1 modulo N), at least 3 sites.

      2---1
     /     \\          sites on a circle, counterclockwise from (r, 0, 0), neighbours at distance 1
    3       0
     \\     /          nearest pairs in order: (0, 1) (1, 2) ... (N-1, 0)
      4---5
    """
    return Lattice("ring", (_count(sites, 3, "a ring"),), (True,))


def ladder(sites: int, periodic: bool = False) -> Lattice:
    """Two legs; `sites` counts both. Site 2 r + l is on rung r, leg l, at (r, l, 0).

        1---3---5---7        leg:  (i, i + 2)
        |   |   |   |        rung: (2 r, 2 r + 1)
        0---2---4---6        second: the diagonals; third: (i, i + 4)

    `periodic` closes both legs.
    """
    if _count(sites, 2, "a ladder") % 2:
        raise ValueError(f"a ladder has an even number of sites, not {sites}")
    return Lattice("ladder", (sites // 2,), (bool(periodic),))


def square(extent: Sequence[int], periodic=False) -> Lattice:
    """Extent [m, n]: site x n + y at (x, y, 0).

    1---3---5
    |   |   |        a: (x, y) -> (x + 1, y)        second: (x + 1, y + 1) and (x + 1, y - 1)
    0---2---4        b: (x, y) -> (x, y + 1)        third: two steps along a or b
    """
    return _filling("square", extent, periodic)


def triangular(extent: Sequence[int], periodic=False) -> Lattice:
    """Extent [m, n]: site x n + y at x a + y b with a = (1, 0, 0), b = (1/2, sqrt(3)/2, 0).

      1---3---5        a: (x, y) -> (x + 1, y)
     / \\ / \\ /         b: (x, y) -> (x, y + 1)
    0---2---4          c: (x, y) -> (x - 1, y + 1), that is along b - a
    """
    return _filling("triangular", extent, periodic)


def honeycomb(extent: Sequence[int], periodic=False) -> Lattice:
    """Extent [m, n] in cells of two sites: A = 2 (x n + y) at x u + y v, B = A + 1 at A + (sqrt(3)/2, 1/2, 0).

    u = (sqrt(3), 0, 0), v = (sqrt(3)/2, 3/2, 0). Nearest pairs run from A to B.

          B       B
         a \\     / c         c: to the B of the same cell, along (sqrt(3)/2, 1/2)
             A               a: to the B of cell (x - 1, y), along (-sqrt(3)/2, 1/2)
             | b             b: to the B of cell (x, y - 1), along (0, -1)
             B
    """
    return _filling("honeycomb", extent, periodic)


def kagome(extent: Sequence[int], periodic=False) -> Lattice:
    """Extent [m, n] in cells of three sites: A = 3 (x n + y), B = A + 1, C = A + 2.

    A at 2 (x a + y b), B at A + a, C at A + b with a = (1, 0, 0), b = (1/2, sqrt(3)/2, 0).

            C                  a: A -> B, and B -> A of cell (x + 1, y)
          b/ \\c                b: A -> C, and C -> A of cell (x, y + 1)
          A---B---A'           c: B -> C, and C -> B of cell (x - 1, y + 1): along b - a
            a   a

    The third shell holds both kinds of pairs at distance 2: along a line and across a hexagon.
    """
    return _filling("kagome", extent, periodic)


def cubic(extent: Sequence[int], periodic=False) -> Lattice:
    """Extent [l, m, n]: site (x m + y) n + z at (x, y, z).

      3-----7
     /|    /|        a: x + 1,  b: y + 1,  c: z + 1
    1-----5 |        second: face diagonals, third: space diagonals
    | 2---|-6
    |/    |/         (2 x 2 x 2: c points up, b to the back)
    0-----4
    """
    return _filling("cubic", extent, periodic)


def complete(sites: int) -> Lattice:
    """Every pair (i, j), i < j, is nearest; sites on a circle, counterclockwise from (r, 0, 0).

    1---0
    | X |
    2---3
    """
    return Lattice("complete", (_count(sites, 2, "a complete graph"),))


def bipartite(extent: Sequence[int]) -> Lattice:
    """Extent [m, n]: each of the sites 0 ... m-1 at (k, 0, 0) is joined with each of m ... m+n-1 at (k, 1, 0).

    2   3   4
    | X X X |        nearest pairs in order: (0, 2) (0, 3) (0, 4) (1, 2) ...
    0   1
    """
    return Lattice("bipartite", _extent("bipartite", extent))


def star(sites: int) -> Lattice:
    """The centre, site 0 at the origin, is joined with every leaf 1 ... N-1 on the unit circle.

        2
        |
    3---0---1        nearest pairs (0, k)
        |
        4
    """
    return Lattice("star", (_count(sites, 2, "a star"),))


def table(pairs, labels=(), exchange=(), positions=(), sites: int = 0) -> Lattice:
    """A lattice by its list of pairs.

        pairs = [(0, 1), (2, 1)]        0-->1<--2        each pair keeps the order it is listed in

    `labels`: a text per pair; `exchange`: a number, three numbers (diagonal) or a 3 x 3 matrix per pair; `positions`
    (N, 3), otherwise the sites are put on a circle; `sites`: largest number + 1 if left out.
    """
    matrices = []
    for value in exchange:
        value = np.asarray(value, dtype=float)
        matrices.append(value * np.eye(3) if value.ndim < 2 else value)
    return Lattice(
        "table",
        (),
        table=PairTable(
            pairs=tuple((int(i), int(j)) for i, j in pairs),
            labels=tuple(map(str, labels)),
            exchange=tuple(tuple(map(float, matrix.reshape(-1))) for matrix in matrices),
            positions=tuple(tuple(map(float, row)) for row in positions),
            sites=int(sites),
        ),
    )


def lattice(shape: str, sites: int | None = None, extent: Sequence[int] | None = None, periodic=False) -> Lattice:
    """Any lattice but a table by the name of its shape; sizes as in a workflow file. ValueError says what is wrong."""
    if shape not in SHAPES or shape == "table":
        raise ValueError(f"there is no shape '{shape}'; allowed are {', '.join(SHAPES[:-1])}")
    given, other = (sites, extent) if shape in BY_SITES else (extent, sites)
    if given is None or other is not None:
        wanted = "sites = N" if shape in BY_SITES else f"extent with {DIMENSIONS[shape]} numbers"
        raise ValueError(f"the size of a {shape} is given by {wanted}")
    build = {function.__name__: function for function in (chain, ladder, square, triangular, honeycomb, kagome, cubic)}
    if shape in build:
        return build[shape](given, periodic)
    if np.any(periodic) and shape != "ring":
        raise ValueError(f"a {shape} has no direction that could be periodic")
    return {"ring": ring, "complete": complete, "bipartite": bipartite, "star": star}[shape](given)


def _filling(shape: str, extent: Sequence[int], periodic) -> Lattice:
    extent = _extent(shape, extent)
    wraps = (periodic,) * len(extent) if isinstance(periodic, bool | np.bool_) else tuple(periodic)
    if len(wraps) != len(extent):
        raise ValueError(f"periodic has {len(wraps)} entries for {len(extent)} directions")
    return Lattice(shape, extent, tuple(map(bool, wraps)))


def _extent(shape: str, extent: Sequence[int]) -> tuple[int, ...]:
    extent = tuple(extent)
    if len(extent) != DIMENSIONS[shape]:
        raise ValueError(f"the extent of a {shape} lattice has {DIMENSIONS[shape]} numbers, not {len(extent)}")
    return tuple(_count(length, 1, "each direction") for length in extent)


def _count(number: int, least: int, what: str) -> int:
    if isinstance(number, bool) or int(number) != number or number < least:
        raise ValueError(f"{what} needs a whole number of at least {least}, not {number}")
    return int(number)


def _circle(count: int, radius: float | None = None) -> np.ndarray:
    if radius is None:
        radius = 0.5 / np.sin(np.pi / count) if count > 1 else 0.0
    angles = 2 * np.pi * np.arange(count) / max(count, 1)
    return radius * np.stack([np.cos(angles), np.sin(angles), np.zeros(count)], axis=1)
