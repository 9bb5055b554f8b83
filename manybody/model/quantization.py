"""From an energy function to a spin operator: four quantization rules, and the symbols that lead back.

A rule multiplies every harmonic C_kq of a site with spin S by one number and reads it as the operator W_kq of
manybody.model.spin_matrices. With the Berezin factor b_k(S), the lower symbol of W_kq is sqrt(b_k) C_kq and its upper
symbol is C_kq / sqrt(b_k), so that

    wick          f is the lower (Q, Husimi) symbol          factor 1 / sqrt(b_k)      undefined for k > 2S
    weyl          f is the Stratonovich-Weyl symbol          factor 1
    toeplitz      f is the upper (P) symbol                  factor sqrt(b_k)
    substitution  n -> S / S, symmetrized at each site       by the polynomial as written

Sources: Berezin 1975, Commun. Math. Phys. 40, 153; Lieb 1973, Commun. Math. Phys. 31, 327; Varilly and Gracia-Bondia
1989, Ann. Phys. 190, 107; Bordemann, Meinrenken, Schlichenmaier 1994, Commun. Math. Phys. 165, 281.
"""

import functools
import math
from dataclasses import dataclass

import numpy as np

from manybody.model.energy import EnergyFunction
from manybody.model.spin_matrices import harmonic_diagonals, spin_number

RULES = ("wick", "weyl", "toeplitz", "substitution")


class UndefinedQuantization(ValueError):
    """A rule has no operator for a term at this spin."""


@functools.lru_cache(maxsize=4096)
def berezin_factor(rank: int, spin: float) -> float:
    """b_k(S) = (2S)! (2S+1)! / ((2S-k)! (2S+k+1)!), as a product; zero for k > 2S."""
    size = round(2 * spin) + 1
    return math.prod((size - j) / (size + j) for j in range(1, rank + 1)) if rank < size else 0.0


@functools.lru_cache(maxsize=4096)
def substitution_factor(rank: int, degree: int, spin: float) -> float:
    """The number g with: n -> S / S, symmetrized, sends |n|^(degree - rank) C_kq(n) to g W_kq.

    The map commutes with rotations, so the number follows from one case: z^degree becomes S_z^degree / S^degree, and
    z^degree = sum_k a_k |n|^(degree - k) C_k0, a_k = (2k + 1) degree! / (2^j j! (degree + k + 1)!!) with
    j = (degree - k) / 2.
    """
    if (degree - rank) % 2 or degree < rank:
        raise ValueError(f"rank {rank} cannot come from a homogeneous polynomial of degree {degree}")
    if rank > round(2 * spin):
        return 0.0
    j = (degree - rank) // 2
    a = (
        (2 * rank + 1)
        * math.factorial(degree)
        / (2**j * math.factorial(j) * math.prod(range(degree + rank + 1, 0, -2)))
    )
    size = round(2 * spin) + 1
    power = (1.0 - np.arange(size) / spin) ** degree
    return float(power @ harmonic_diagonals(spin, rank)[0]) * (2 * rank + 1) / size / a


def rule_factor(rule: str, rank: int, degree: int, spin: float) -> float:
    """Number by which `rule` multiplies W_kq. Raises UndefinedQuantization (wick, rank > 2S) and ValueError."""
    if rule == "substitution":
        return substitution_factor(rank, degree, spin)
    b = berezin_factor(rank, spin)
    if rule == "wick":
        if b == 0.0:
            raise UndefinedQuantization(f"rule wick has no operator of rank {rank} for spin {spin:g} (rank above 2S)")
        return 1 / math.sqrt(b)
    if rule == "weyl":
        return 1.0 if b else 0.0
    if rule == "toeplitz":
        return math.sqrt(b)
    raise ValueError(f"unknown quantization rule {rule!r}: use one of {', '.join(RULES)}")


@dataclass(frozen=True)
class SpinOperator:
    """A Hermitian operator on N spins: its Stratonovich-Weyl symbol, read with W_kq in place of C_kq.

    spins (N,): the spin of every site. The operator is symbol.constant + sum over terms of coefficients times the
    product of W_kq at the term's sites. Sums of operators of the same spins are operators: operator + operator,
    number * operator.
    """

    spins: np.ndarray
    symbol: EnergyFunction

    def __post_init__(self):
        spins = np.asarray([spin_number(s) for s in np.atleast_1d(self.spins)])
        if spins.shape != (self.symbol.sites,):
            raise ValueError(f"expected {self.symbol.sites} spins, got {spins.shape}")
        spins.setflags(write=False)
        object.__setattr__(self, "spins", spins)

    @property
    def sites(self) -> int:
        return self.symbol.sites

    @property
    def mean(self) -> float:
        """Normalized trace of the operator."""
        return self.symbol.mean

    def __add__(self, other):
        if isinstance(other, SpinOperator):
            if not np.array_equal(self.spins, other.spins):
                raise ValueError("operators of different spins cannot be added")
            return SpinOperator(self.spins, self.symbol + other.symbol)
        return SpinOperator(self.spins, self.symbol + other) if np.isscalar(other) else NotImplemented

    def __mul__(self, number):
        return SpinOperator(self.spins, self.symbol * number) if np.isscalar(number) else NotImplemented

    __rmul__ = __mul__

    def lower_symbol(self) -> EnergyFunction:
        """<n| operator |n> in the coherent state |n_1> ... |n_N>, as an energy function."""
        return _slotwise(self.symbol, self.spins, lambda rank, degree, spin: math.sqrt(berezin_factor(rank, spin)))

    def upper_symbol(self) -> EnergyFunction:
        """u with operator = prod (2 S_i + 1) / (4 pi) times the integral of u(n) |n><n|, as an energy function."""
        return _slotwise(self.symbol, self.spins, lambda rank, degree, spin: 1 / math.sqrt(berezin_factor(rank, spin)))

    def rotated(self, rotation: np.ndarray) -> "SpinOperator":
        """U operator U^-1 with U the rotation R (3, 3), or one per site (N, 3, 3)."""
        return SpinOperator(self.spins, self.symbol.rotated(rotation))

    def symmetry_axes(self) -> np.ndarray:
        """Axes (r, 3), r = 0, 1, 3, along which the total spin is conserved."""
        return self.symbol.symmetry_axes()

    def restricted(self, keep) -> "SpinOperator":
        """The terms wholly inside the sites `keep`, renumbered; without the constant."""
        return SpinOperator(self.spins[np.asarray(keep)], self.symbol.restricted(keep))


def quantize(f: EnergyFunction, spin, rule: str = "substitution") -> SpinOperator:
    """The operator of energy function f for one spin, or one per site (N,), under a rule.

    Raises ValueError for a spin that is no positive multiple of 1/2 and for an unknown rule; UndefinedQuantization,
    naming the term, where the rule has no operator.
    """
    spins = np.broadcast_to(np.asarray([spin_number(s) for s in np.atleast_1d(spin)]), (f.sites,))
    if rule not in RULES:
        raise ValueError(f"unknown quantization rule {rule!r}: use one of {', '.join(RULES)}")
    return SpinOperator(spins, _slotwise(f, spins, functools.partial(rule_factor, rule)))


def undefined_reason(f: EnergyFunction, spin, rule: str) -> str | None:
    """Why `quantize` would raise UndefinedQuantization for this function, spin and rule; None where it is defined."""
    try:
        quantize(f, spin, rule)
    except UndefinedQuantization as reason:
        return str(reason)
    return None


def lower_symbol_correction(f: EnergyFunction) -> EnergyFunction:
    """g with: lower symbol of f quantized by `substitution` = f + g / S + O(1/S^2), one common spin S.

    For a homogeneous polynomial p of degree d at one site g = (Laplacian of p - d (d - 1) p) / 4, hence the number
    (2 d - k (k + 1)) / 4 for its part of rank k; products add these numbers.
    """

    def factor(key, sites):
        return sum((2 * degree - rank * (rank + 1)) / 4 for rank, degree in key)

    return f.scaled(factor) - f.constant


def _slotwise(f: EnergyFunction, spins: np.ndarray, factor) -> EnergyFunction:
    """Every term times the product over its sites of factor(rank, degree, spin of the site)."""
    kinds, index = np.unique(spins, return_inverse=True)

    def of_term(key, sites):
        total = np.ones(len(sites))
        for slot, (rank, degree) in enumerate(key):
            present = index[sites[:, slot]]
            table = np.zeros(len(kinds))
            for kind in np.unique(present):
                try:
                    table[kind] = factor(rank, degree, float(kinds[kind]))
                except UndefinedQuantization as reason:
                    first = sites[np.flatnonzero(present == kind)[0]]
                    raise UndefinedQuantization(f"{reason}, needed by the term at sites {first.tolist()}") from None
            total *= table[present]
        return total

    return f.scaled(of_term)
