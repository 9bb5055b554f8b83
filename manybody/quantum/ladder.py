"""A spin operator as a sum of shifts: products of site operators that each move S^z by a fixed step.

The rank-k operators W_kq and W_k,-q of one site are the real and the imaginary part of one ladder operator that
raises m by q, so a term becomes a sum over steps (q_1, ..., q_m). Everything sparse is built from that.
"""

import itertools
from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np

from manybody.model.quantization import SpinOperator
from manybody.model.spin_matrices import harmonic_diagonals

NOISE = 1e-14
"""Ladder coefficients below this fraction of the largest are taken for rounding errors of a rotation."""


@dataclass(frozen=True)
class Shift:
    """All parts of an operator that act on the same sites with the same steps.

    sites (ascending) and steps: m_i changes by steps[i]; all steps zero is a diagonal part.
    amplitude (d_1, ..., d_m): <m + steps| H |m> by the source state, index 0 of each site being m = +S; zero where the
    target does not exist. Real arrays where the operator is real.
    """

    sites: tuple[int, ...]
    steps: tuple[int, ...]
    amplitude: np.ndarray

    @property
    def charge(self) -> int:
        return sum(self.steps)

    @property
    def diagonal(self) -> bool:
        return not any(self.steps)


@dataclass(frozen=True)
class Shifts:
    """The operator constant + sum of shifts, plus what was left out.

    real: all amplitudes are real. dropped: bound on the operator norm of what was left out (rounding errors, and parts
    that change the total S^z where conservation was demanded). norm: bound on the norm of the operator, constant left
    out.
    """

    spins: np.ndarray
    constant: float
    terms: tuple[Shift, ...]
    real: bool
    dropped: float
    norm: float

    @property
    def dims(self) -> tuple[int, ...]:
        return tuple(round(2 * s) + 1 for s in self.spins)


def ladder_table(spin: float, rank: int) -> np.ndarray:
    """(2 rank + 1, d): row rank + q holds <m + q| L_q |m> by source state, with W_k0 = L_0 and for q > 0
    W_kq = L_q + L_-q, W_k,-q = -i (L_q - L_-q)."""
    d = round(2 * spin) + 1
    table = np.zeros((2 * rank + 1, d))
    for q, diagonal in enumerate(harmonic_diagonals(spin, rank)[:d]):
        # diagonal[p] = <p| T_q |p + q> in state numbers, where p is m = S - p; L_q = T_q / 2 for q > 0.
        values = diagonal / 2 if q else diagonal
        table[rank + q, q:] = values
        table[rank - q, : d - q] = values
    return table


def ladder_transform(rank: int) -> np.ndarray:
    """U (2 rank + 1, 2 rank + 1): coefficients c over W_kq become U c over the ladder operators L_q, q = -k ... k."""
    transform = np.zeros((2 * rank + 1, 2 * rank + 1), dtype=complex)
    transform[rank, rank] = 1.0
    for q in range(1, rank + 1):
        transform[rank + q, [rank + q, rank - q]] = 1.0, -1.0j
        transform[rank - q, [rank + q, rank - q]] = 1.0, 1.0j
    return transform


def ladder_terms(op: SpinOperator) -> Iterator[tuple[tuple[int, ...], tuple[int, ...], np.ndarray, np.ndarray]]:
    """Yields (ranks, steps, sites (T, m), coefficients (T,) complex) over all groups, sites of rank 0 left out."""
    for group in op.symbol.groups:
        kept = [slot for slot, rank in enumerate(group.ranks) if rank > 0]
        ranks = tuple(group.ranks[slot] for slot in kept)
        tensor = group.coefficients.reshape(group.terms, *[2 * rank + 1 for rank in ranks]).astype(complex)
        for slot, rank in enumerate(ranks):
            tensor = np.moveaxis(np.tensordot(tensor, ladder_transform(rank), axes=(slot + 1, 1)), -1, slot + 1)
        for steps in itertools.product(*[range(-rank, rank + 1) for rank in ranks]):
            coefficients = tensor[(slice(None), *[rank + q for rank, q in zip(ranks, steps, strict=True)])]
            if coefficients.any():
                yield ranks, steps, group.sites[:, kept], coefficients


def shifts(op: SpinOperator, conserve: bool = False) -> Shifts:
    """All shifts of an operator. `conserve` leaves out what changes the total S^z and counts it as dropped."""
    spins = np.asarray(op.spins, dtype=float)
    terms = list(ladder_terms(op))
    largest = max((np.abs(coefficients).max() for *_, coefficients in terms), default=0.0)
    imaginary = max((np.abs(coefficients.imag).max() for *_, coefficients in terms), default=0.0)
    real = imaginary <= NOISE * largest
    tables: dict[tuple[float, int], np.ndarray] = {}
    collected: dict[tuple, np.ndarray] = {}
    constant, dropped, norm = op.symbol.constant, 0.0, 0.0
    for ranks, steps, sites, coefficients in terms:
        for where, coefficient in zip(sites.tolist(), coefficients.tolist(), strict=True):
            if coefficient == 0:
                continue
            if not ranks:
                constant += coefficient.real
                continue
            rows = []
            for site, rank, step in zip(where, ranks, steps, strict=True):
                key = (spins[site], rank)
                if key not in tables:
                    tables[key] = ladder_table(*key)
                rows.append(tables[key][rank + step])
            size = abs(coefficient) * float(np.prod([np.abs(row).max() for row in rows]))
            norm += size
            if (conserve and sum(steps) != 0) or abs(coefficient) <= NOISE * largest:
                dropped += size
                continue
            if real:
                dropped += size * abs(coefficient.imag) / abs(coefficient)
                coefficient = coefficient.real
            amplitude = coefficient * rows[0]
            for row in rows[1:]:
                amplitude = np.multiply.outer(amplitude, row)
            key = (tuple(where), steps)
            collected[key] = collected[key] + amplitude if key in collected else amplitude
    merged = tuple(Shift(*key, amplitude) for key, amplitude in sorted(collected.items()) if amplitude.any())
    return Shifts(spins, constant, merged, real, dropped, norm)
