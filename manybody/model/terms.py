"""The terms of a workflow file, with their numbers put in, as energy functions on a lattice."""

import math
from collections.abc import Iterable
from dataclasses import dataclass

import numpy as np

from manybody.model import couplings
from manybody.model.energy import EnergyFunction
from manybody.model.lattice import Lattice

PAIR_KINDS = ("exchange", "antisymmetric", "biquadratic")
SITE_KINDS = ("field", "anisotropy")
LENGTHS = {"exchange": (1, 3, 9), "antisymmetric": (3,), "biquadratic": (1,), "field": (3,), "anisotropy": (1,)}
TABLE = "table"


@dataclass(frozen=True)
class Term:
    """One summand of the energy function, in one canonical form: equal terms compare equal however they were written.

    kind   one of
           exchange       + n_i^T J n_j    values: 1 (isotropic), 3 (diagonal) or 9 (rows of J) numbers, or "table":
                                           each pair with its own matrix from the table of the lattice
           antisymmetric  + D.(n_i x n_j)  values: 3
           biquadratic    + B (n_i.n_j)^2  values: 1
           field          - h.n_i          values: 3
           anisotropy     + K (n_i.axis)^2 values: 1, and `axis`, normalized here
    where  pairs by name (Lattice.pairs), sites by name or numbers (Lattice.select_sites)

    Raises ValueError for a wrong count, numbers that are not finite, and a zero axis.
    """

    kind: str
    where: str | tuple[int, ...]
    values: tuple[float, ...] | str
    axis: tuple[float, ...] = ()

    def __post_init__(self):
        if self.kind not in LENGTHS:
            raise ValueError(f"there is no term '{self.kind}'; allowed are {', '.join(LENGTHS)}")
        if not isinstance(self.where, str):
            object.__setattr__(self, "where", tuple(sorted(int(site) for site in self.where)))
        if self.kind == "exchange" and self.values == TABLE:
            return
        # Adding 0.0 turns -0.0 into 0.0, so that both have one key.
        values = tuple(float(value) + 0.0 for value in np.asarray(self.values, dtype=float).reshape(-1))
        if len(values) not in LENGTHS[self.kind]:
            raise ValueError(f"{self.kind} takes {_either(LENGTHS[self.kind])} numbers, not {len(values)}")
        if not all(map(math.isfinite, values)):
            raise ValueError(f"{self.kind} must be finite, not {list(values)}")
        if self.kind == "exchange" and len(values) < 9:
            diagonal = values * 3 if len(values) == 1 else values
            values = tuple(diagonal[a] if a == b else 0.0 for a in range(3) for b in range(3))
        object.__setattr__(self, "values", values)
        if self.kind == "anisotropy":
            object.__setattr__(self, "axis", unit_axis(self.axis))

    @property
    def on_pairs(self) -> bool:
        return self.kind in PAIR_KINDS

    @property
    def is_zero(self) -> bool:
        return self.values != TABLE and not any(self.values)

    @property
    def rank(self) -> int:
        """Highest rank at one site: what the rule wick needs 2S to reach."""
        return 0 if self.is_zero else 2 if self.kind in ("biquadratic", "anisotropy") else 1

    def count(self, lattice: Lattice) -> int:
        """Number of pairs or sites it touches."""
        if self.on_pairs:
            return lattice.count_pairs(self.where)
        return lattice.sites if self.where == "every" else len(lattice.select_sites(self.where))


def unit_axis(axis) -> tuple[float, ...]:
    """The axis at length one, first nonzero entry positive (an axis has no sign). ValueError: zero or not finite."""
    vector = np.asarray(axis, dtype=float).reshape(-1)
    if vector.shape != (3,) or not np.all(np.isfinite(vector)):
        raise ValueError("an axis is three finite numbers")
    largest = np.max(np.abs(vector))
    if largest == 0:
        raise ValueError("an axis must not be zero: it has no direction")
    vector = vector / largest  # first, so that squaring neither overflows nor vanishes
    vector = vector / np.linalg.norm(vector)
    return tuple((vector * np.sign(vector[np.flatnonzero(vector)[0]]) + 0.0).tolist())


def term_function(lattice: Lattice, term: Term) -> EnergyFunction:
    """One term on a lattice. ValueError: a selection that the lattice lacks, or no exchange in its table."""
    count = lattice.sites
    if not term.on_pairs:
        sites = lattice.select_sites(term.where)
        if term.kind == "field":
            return couplings.field(count, sites, np.array(term.values))
        return couplings.anisotropy(count, sites, np.array(term.axis), term.values[0])
    pairs = lattice.pairs(term.where)
    if term.kind == "antisymmetric":
        return couplings.antisymmetric(count, pairs, np.array(term.values))
    if term.kind == "biquadratic":
        return couplings.biquadratic(count, pairs, term.values[0])
    if term.values == TABLE:
        return couplings.exchange(count, pairs, lattice.exchange(term.where))
    return couplings.exchange(count, pairs, np.reshape(term.values, (3, 3)))


def energy_function(lattice: Lattice, terms: Iterable[Term]) -> EnergyFunction:
    """The sum of the terms on a lattice."""
    parts = [term_function(lattice, term) for term in terms]
    # One construction instead of repeated sums: each brings all terms into canonical order.
    return EnergyFunction(
        lattice.sites, sum(part.constant for part in parts), [g for part in parts for g in part.groups]
    )


def _either(numbers: tuple[int, ...]) -> str:
    return " or ".join(map(str, numbers))
