"""Quantized operators as sparse matrices, on the whole space or in one sector of conserved total S^z.

Rows are assembled in chunks straight from the shifts of manybody.quantum.ladder, without sorting and without
intermediate
copies: the number of entries is known beforehand from a count of states.
"""

import math

import numpy as np
from scipy import sparse

from manybody.model.quantization import SpinOperator
from manybody.quantum.basis import Basis, TooLarge, sector_dimensions, sector_index
from manybody.quantum.ladder import Shift, Shifts, shifts

_CHUNK = 2**22  # entries held at once while assembling


def sparse_operator(op: SpinOperator, sector: float | None = None) -> sparse.csr_array:
    """The operator as a Hermitian scipy CSR matrix; real (float64) whenever its coefficients allow, else complex.

    sector: total S^z; None for the whole space, in numpy.kron order (site 0 slowest, m = S first at every site). A
    sector holds the same states in the same order, the others left out. Raises ValueError for a sector that does not
    exist or an operator that does not conserve the total S^z, TooLarge beyond 2^31 - 1 states.
    """
    parts = shifts(op)
    if sector is not None:
        broken = [term for term in parts.terms if term.charge]
        if broken:
            raise ValueError(f"the total S^z is not conserved: term at sites {broken[0].sites} changes it")
    return assemble(parts, Basis(parts.spins, sector))


def assemble(parts: Shifts, basis: Basis) -> sparse.csr_array:
    """The matrix of given shifts on a basis that they do not leave."""
    dimension = basis.dimension
    if dimension > np.iinfo(np.int32).max:
        raise TooLarge(f"dimension {dimension} does not fit 32-bit indices")
    diagonal_parts = [term for term in parts.terms if term.diagonal]
    moves = [_Move(term, basis) for term in parts.terms if not term.diagonal]
    total = dimension + entry_count(parts, basis.sector)
    index_type = np.int32 if total <= np.iinfo(np.int32).max else np.int64
    data = np.empty(total, dtype=float if parts.real else complex)
    indices = np.empty(total, dtype=index_type)
    indptr = np.zeros(dimension + 1, dtype=index_type)
    filled, rows = 0, max(1, _CHUNK // (len(moves) + 1))
    for start in range(0, dimension, rows):
        left, right = basis.codes(start, start + rows)
        count = len(left)
        values = np.empty((len(moves) + 1, count), dtype=data.dtype)
        columns = np.empty((len(moves) + 1, count), dtype=index_type)
        values[0] = parts.constant
        for term in diagonal_parts:
            values[0] += _look_up(term, basis, left, right)
        columns[0] = np.arange(start, start + count)
        for k, move in enumerate(moves, start=1):
            # Row = source of the shift: <source| H |target> is the conjugate of its amplitude.
            values[k] = move.amplitude(left, right)
            columns[k] = move.target(left, right)
        if not parts.real:
            np.conjugate(values, out=values)
        present = values != 0
        present[0] = True
        present = np.ascontiguousarray(present.T)
        new = int(present.sum())
        data[filled : filled + new] = values.T[present]
        indices[filled : filled + new] = columns.T[present]
        indptr[start + 1 : start + count + 1] = filled + np.cumsum(present.sum(axis=1))
        filled += new
    return sparse.csr_array((data[:filled], indices[:filled], indptr), shape=(dimension, dimension))


def entry_count(parts: Shifts, sector: float | None) -> int:
    """Off-diagonal entries of the matrix in a sector (None: whole space), counted without building anything."""
    counts: dict[tuple, np.ndarray] = {}
    total = 0.0
    for term in parts.terms:
        if term.diagonal:
            continue
        if sector is None:
            rest = math.prod(parts.dims) // math.prod(term.amplitude.shape)
            total += np.count_nonzero(term.amplitude) * rest
            continue
        removed = tuple(sorted(term.amplitude.shape))
        if removed not in counts:
            counts[removed] = _without(sector_dimensions(parts.spins), removed)
        rest = counts[removed]
        digits = sum(np.ix_(*[np.arange(d) for d in term.amplitude.shape]))
        need = sector_index(parts.spins, sector) - digits[term.amplitude != 0]
        total += rest[need[(need >= 0) & (need < len(rest))]].sum()
    return round(total)


def diagonal_of(parts: Shifts, basis: Basis) -> np.ndarray:
    """The diagonal of the matrix, (dimension,) real."""
    terms = [term for term in parts.terms if term.diagonal]
    diagonal = np.empty(basis.dimension)
    for start in range(0, basis.dimension, _CHUNK // 16):
        left, right = basis.codes(start, start + _CHUNK // 16)
        values = np.full(len(left), parts.constant)
        for term in terms:
            values += _look_up(term, basis, left, right).real
        diagonal[start : start + len(left)] = values
    return diagonal


def _without(counts: np.ndarray, removed: tuple[int, ...]) -> np.ndarray:
    """Sector dimensions after taking sites of the given dimensions away: polynomial division by 1 + x + ... +
    x^(d-1).
    """
    for d in removed:
        # (1 - x) times the counts, divided by 1 - x^d; every step subtracts exact whole numbers below 2^53.
        difference = np.diff(counts, prepend=0.0)[: len(counts) - d + 1]
        counts = np.empty_like(difference)
        for n in range(len(difference)):
            counts[n] = difference[n] + (counts[n - d] if n >= d else 0.0)
    return counts


class _Move:
    """One off-diagonal shift on a basis: where a state goes, and with which amplitude."""

    def __init__(self, term: Shift, basis: Basis):
        self.term, self.basis = term, basis
        steps = list(zip(term.sites, term.steps, strict=True))
        self.left_step = -sum(step * basis.stride(site) for site, step in steps if site < basis.cut)
        self.right_step = -sum(step * basis.stride(site) for site, step in steps if site >= basis.cut)
        # A shift inside one half changes nothing in the other one: tabulate it over the codes of its half.
        self.side = None
        if all(site < basis.cut for site in term.sites):
            codes = np.arange(basis.left_size)
            self.side, self.table = 0, _look_up(term, basis, codes, None)
        elif all(site >= basis.cut for site in term.sites):
            codes = np.arange(basis.right_size)
            self.side, self.table = 1, _look_up(term, basis, None, codes)

    def amplitude(self, left: np.ndarray, right: np.ndarray) -> np.ndarray:
        if self.side is None:
            return _look_up(self.term, self.basis, left, right)
        return self.table.take(right if self.side else left)

    def target(self, left: np.ndarray, right: np.ndarray) -> np.ndarray:
        """State numbers of the targets; meaningless where the amplitude is zero."""
        basis = self.basis
        if self.left_step:
            left = left + self.left_step
        if self.right_step:
            right = right + self.right_step
        return basis.left_start.take(left, mode="clip") + basis.right_rank.take(right, mode="clip")


def _look_up(term: Shift, basis: Basis, left, right) -> np.ndarray:
    """Amplitudes of a shift for states given by their codes."""
    flat = 0
    for site, d in zip(term.sites, term.amplitude.shape, strict=True):
        flat = flat * d + basis.digit(site, left, right).astype(np.intp)
    return term.amplitude.reshape(-1).take(flat)
