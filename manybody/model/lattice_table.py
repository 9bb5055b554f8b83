"""A lattice given as a list of pairs, with labels and a measured exchange where there is one."""

import math
import re
from dataclasses import dataclass

import numpy as np

from manybody.model.lattice_cells import CELLS, SHELLS

RESERVED_LABELS = frozenset(SHELLS) | {"all"} | {name for cell in CELLS.values() for name in cell.directions}
LABEL = re.compile(r"[^\W\d][\w.+-]{0,39}")


@dataclass(frozen=True)
class PairTable:
    """Pairs as listed, never reordered; plain tuples, so that a table is hashable and compares by content.

    pairs      ((i, j), ...) sites counted from 0
    labels     one text per pair, "" for none; or empty: no pair has a label
    exchange   one matrix per pair as nine numbers xx xy xz yx yy yz zx zy zz; or empty: the table lists none
    positions  one (x, y, z) per site; or empty
    sites      number of sites, at least the largest site number + 1

    Raises ValueError with the first fault found.
    """

    pairs: tuple[tuple[int, int], ...]
    labels: tuple[str, ...] = ()
    exchange: tuple[tuple[float, ...], ...] = ()
    positions: tuple[tuple[float, float, float], ...] = ()
    sites: int = 0

    def __post_init__(self):
        largest = max((max(pair) for pair in self.pairs), default=-1)
        if not self.sites:
            object.__setattr__(self, "sites", largest + 1)
        for name in ("labels", "exchange"):
            if getattr(self, name) and len(getattr(self, name)) != len(self.pairs):
                raise ValueError(f"{name}: {len(getattr(self, name))} entries for {len(self.pairs)} pairs")
        if self.positions and len(self.positions) != self.sites:
            raise ValueError(f"positions: {len(self.positions)} entries for {self.sites} sites")
        if not self.pairs or self.sites < 1:
            raise ValueError("the table lists no pair")
        seen = set()
        for index, (i, j) in enumerate(self.pairs):
            if min(i, j) < 0 or max(i, j) >= self.sites:
                raise ValueError(f"pair ({i}, {j}): sites run from 0 to {self.sites - 1}")
            if i == j:
                raise ValueError(f"pair ({i}, {j}) joins a site with itself")
            key = (min(i, j), max(i, j), self.labels[index] if self.labels else "")
            if key in seen:
                raise ValueError(f"the sites {key[0]} and {key[1]} are listed twice under label '{key[2]}'")
            seen.add(key)
        for label in set(self.labels) - {""}:
            if reason := label_fault(label):
                raise ValueError(f"label '{label}' {reason}")
        for row in (*self.exchange, *self.positions):
            if not all(map(math.isfinite, row)):
                raise ValueError("exchange and positions must be finite numbers")
        if any(len(row) != 9 for row in self.exchange) or any(len(row) != 3 for row in self.positions):
            raise ValueError("an exchange has nine numbers, a position three")

    @property
    def names(self) -> tuple[str, ...]:
        """The labels in use, in order of appearance."""
        return tuple(dict.fromkeys(label for label in self.labels if label))

    def rows(self, name: str) -> np.ndarray:
        """Row numbers that a label, or "all", selects."""
        if name == "all":
            return np.arange(len(self.pairs))
        return np.flatnonzero(np.array(self.labels, dtype=object) == name) if self.labels else np.arange(0)

    def matrices(self, name: str) -> np.ndarray:
        """Exchange matrices (P, 3, 3) of what a label, or "all", selects. ValueError if the table has none."""
        if not self.exchange:
            raise ValueError("the table has no exchange column")
        return np.array(self.exchange, dtype=float)[self.rows(name)].reshape(-1, 3, 3)


def label_fault(label: str) -> str:
    """Why a text cannot be a label, or ""."""
    if label in RESERVED_LABELS:
        return "is the name of a shell, of a direction or 'all'"
    if not LABEL.fullmatch(label):
        return "is no label: a letter, then at most 39 letters, digits or . _ + -"
    return ""
