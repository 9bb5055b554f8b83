"""Unit cells of the space-filling lattices: which sites a cell holds, and which bonds leave it.

A bond kind is (s, t, step): from site s of a cell to site t of the cell that lies `step` cells further. All shells
follow from the cell vectors and the basis by distance; the nearest bonds are written out, because their orientation
and their direction names are part of what a workflow file may rely on.
"""

import functools
import itertools
import math
from dataclasses import dataclass

import numpy as np

SHELLS = ("nearest", "second", "third")

Kind = tuple[int, int, tuple[int, ...]]


@dataclass(frozen=True)
class Cell:
    """`vectors` (d, 3) and `basis` (b, 3) in units of the nearest distance; `bonds` are (direction or "", kind)."""

    vectors: tuple[tuple[float, float, float], ...]
    basis: tuple[tuple[float, float, float], ...]
    bonds: tuple[tuple[str, Kind], ...]

    @property
    def directions(self) -> tuple[str, ...]:
        return tuple(dict.fromkeys(name for name, _ in self.bonds if name))


_ROOT3 = 3.0**0.5
_ORIGIN = (0.0, 0.0, 0.0)
_X, _Y, _Z = (1.0, 0.0, 0.0), (0.0, 1.0, 0.0), (0.0, 0.0, 1.0)

CELLS = {
    "chain": Cell((_X,), (_ORIGIN,), (("", (0, 0, (1,))),)),
    "ladder": Cell(
        (_X,), (_ORIGIN, _Y), (("leg", (0, 0, (1,))), ("leg", (1, 1, (1,))), ("rung", (0, 1, (0,)))),
    ),
    "square": Cell((_X, _Y), (_ORIGIN,), (("a", (0, 0, (1, 0))), ("b", (0, 0, (0, 1))))),
    "cubic": Cell(
        (_X, _Y, _Z), (_ORIGIN,), (("a", (0, 0, (1, 0, 0))), ("b", (0, 0, (0, 1, 0))), ("c", (0, 0, (0, 0, 1)))),
    ),
    "triangular": Cell(
        (_X, (0.5, _ROOT3 / 2, 0.0)),
        (_ORIGIN,),
        (("a", (0, 0, (1, 0))), ("b", (0, 0, (0, 1))), ("c", (0, 0, (-1, 1)))),
    ),
    "honeycomb": Cell(
        ((_ROOT3, 0.0, 0.0), (_ROOT3 / 2, 1.5, 0.0)),
        (_ORIGIN, (_ROOT3 / 2, 0.5, 0.0)),
        (("a", (0, 1, (-1, 0))), ("b", (0, 1, (0, -1))), ("c", (0, 1, (0, 0)))),
    ),
    "kagome": Cell(
        ((2.0, 0.0, 0.0), (1.0, _ROOT3, 0.0)),
        (_ORIGIN, _X, (0.5, _ROOT3 / 2, 0.0)),
        (
            ("a", (0, 1, (0, 0))),
            ("b", (0, 2, (0, 0))),
            ("c", (1, 2, (0, 0))),
            ("a", (1, 0, (1, 0))),
            ("b", (2, 0, (0, 1))),
            ("c", (2, 1, (-1, 1))),
        ),
    ),
}  # fmt: skip


@functools.cache
def shells(shape: str) -> dict[str, tuple[Kind, ...]]:
    """The kinds of the three nearest shells by true distance, each pair of sites once.

    Second and third run from the lower to the higher basis site; between equal basis sites the first nonzero entry
    of the step is positive.
    """
    cell = CELLS[shape]
    vectors, basis = np.array(cell.vectors), np.array(cell.basis)
    by_distance: dict[float, list[Kind]] = {}
    # Steps up to 3 cells hold every bond of the third shell of these lattices (its length is at most 2).
    for s, t in itertools.combinations_with_replacement(range(len(basis)), 2):
        for step in itertools.product(range(-3, 4), repeat=len(vectors)):
            if s == t and step <= (0,) * len(step):
                continue
            squared = float(np.sum((basis[t] - basis[s] + np.array(step) @ vectors) ** 2))
            by_distance.setdefault(round(squared, 6), []).append((s, t, step))
    kinds = [tuple(by_distance[distance]) for distance in sorted(by_distance)[:3]]
    return {"nearest": tuple(kind for _, kind in cell.bonds), "second": kinds[1], "third": kinds[2]}


def kinds_of(shape: str, name: str) -> tuple[Kind, ...]:
    """The kinds of a shell or of a direction."""
    if name in SHELLS:
        return shells(shape)[name]
    return tuple(kind for direction, kind in CELLS[shape].bonds if direction == name)


def cell_positions(shape: str, extent: tuple[int, ...]) -> np.ndarray:
    """Positions (N, 3) of all sites, cell by cell, the first direction slowest."""
    cell = CELLS[shape]
    corners = _grid(extent) @ np.array(cell.vectors)
    return (corners[:, None, :] + np.array(cell.basis)).reshape(-1, 3)


def cell_pairs(shape: str, extent: tuple[int, ...], periodic: tuple[bool, ...], name: str) -> np.ndarray:
    """The pairs (P, 2) of a shell or direction, cell by cell; oriented as the kinds are.

    Raises ValueError where the torus is too small for them.
    """
    kinds = kinds_of(shape, name)
    _check_torus(shape, extent, periodic, name, kinds)
    basis = len(CELLS[shape].basis)
    grid = _grid(extent)
    size, wraps = np.array(extent), np.array(periodic)
    first, second, inside = [], [], []
    for s, t, step in kinds:
        target = grid + np.array(step)
        inside.append(np.all(wraps | ((target >= 0) & (target < size)), axis=1))
        first.append(np.arange(len(grid)) * basis + s)
        second.append(np.ravel_multi_index(tuple((target % size).T), extent) * basis + t)
    pairs = np.stack([np.stack(first, 1), np.stack(second, 1)], axis=2)
    return pairs[np.stack(inside, 1)].astype(np.int64)


def count_cell_pairs(shape: str, extent: tuple[int, ...], periodic: tuple[bool, ...], name: str) -> int:
    """How many pairs `cell_pairs` would give, without making them; the same ValueError."""
    kinds = kinds_of(shape, name)
    _check_torus(shape, extent, periodic, name, kinds)
    return sum(
        math.prod(
            length if wraps else max(0, length - abs(x))
            for x, length, wraps in zip(step, extent, periodic, strict=True)
        )
        for _, _, step in kinds
    )


def _grid(extent: tuple[int, ...]) -> np.ndarray:
    return np.indices(extent).reshape(len(extent), -1).T


def _check_torus(shape: str, extent: tuple[int, ...], periodic: tuple[bool, ...], name: str, kinds) -> None:
    """Refuse a shell that wraps onto itself, decided on the kinds alone: every cell sees the same."""

    def both_ways(kind: Kind) -> tuple[Kind, Kind]:
        s, t, step = kind
        forward = tuple(x % length if wraps else x for x, length, wraps in zip(step, extent, periodic, strict=True))
        back = tuple(-x % length if wraps else -x for x, length, wraps in zip(step, extent, periodic, strict=True))
        return (s, t, forward), (t, s, back)

    def fits(kind: Kind) -> bool:
        return all(wraps or abs(x) < length for x, length, wraps in zip(kind[2], extent, periodic, strict=True))

    def complain(kind: Kind, reason: str):
        s, t, step = kind
        start = [max(0, -x) for x in step]
        start = [x % length for x, length in zip(start, extent, strict=True)]
        end = [(x + y) % length for x, y, length in zip(start, step, extent, strict=True)]
        i, j = (int(np.ravel_multi_index(tuple(cell), extent)) * len(CELLS[shape].basis) for cell in (start, end))
        raise ValueError(
            f"the periodic {shape} lattice with extent {list(extent)} is too small for '{name}': "
            f"sites {i + s} and {j + t} {reason}; enlarge the extent or open that direction"
        )

    closer = SHELLS[: SHELLS.index(name)] if name in SHELLS else ()
    nearer = {min(both_ways(kind)): shell for shell in closer for kind in shells(shape)[shell] if fits(kind)}
    seen = set()
    for kind in filter(fits, kinds):
        forward, back = both_ways(kind)
        key = min(forward, back)
        if key[0] == key[1] and not any(key[2]):
            complain(kind, "are the same site")
        if key in seen or forward == back:
            complain(kind, "would be paired twice")
        if key in nearer:
            complain(kind, f"belong to '{nearer[key]}' already")
        seen.add(key)
