"""Exact ground states: dense diagonalization of small sectors, Lanczos iteration in large ones.

The ground state is looked for in every sector of a conserved total spin component where that is affordable, otherwise
from the classical magnetization downhill until both neighbouring sectors lie higher. Under full rotation symmetry the
sector of lowest |S^z| holds a member of every multiplet.
"""

import math
from collections.abc import Callable, Iterable
from dataclasses import dataclass, replace

import numpy as np
import scipy.linalg
from scipy.sparse.linalg import ArpackNoConvergence, LinearOperator, eigsh

from manybody.model.quantization import SpinOperator
from manybody.quantum.basis import Basis, TooLarge, sector_dimensions
from manybody.quantum.frame import Frame, natural_frame
from manybody.quantum.ladder import Shifts, shifts
from manybody.quantum.operators import assemble, entry_count
from manybody.quantum.result import GroundState, QuantumSettings
from manybody.quantum.saved_states import SavedStates, open_states
from manybody.quantum.split_operator import SplitOperator, split_bytes

LARGEST_DIMENSION = 3_000_000
"""Sectors beyond this are left to matrix-product states, whatever the memory."""

_DENSE = 300  # up to here LAPACK is faster than starting an iteration
_ALWAYS_FITS = 20_000  # up to here nobody needs to count entries
_VECTORS = 20  # Lanczos vectors kept between restarts
_TOLERANCE = 1e-12  # residual relative to the norm bound
_COARSE = 1e-4  # the same, for a first look at a sector
_LONG = 150_000_000  # entries from which an iteration takes minutes: it then goes in stages whose vectors can be saved,
_STAGES = 3  # so many, which costs a third more products,
_LONGER = 300_000_000  # and one more for each of these
_SCAN_ALL = 200_000  # total dimension up to which every sector is solved outright
_SCAN_COARSE = 4_000_000  # and up to which every sector gets at least a coarse look
_SCAN_COUNT = 100  # if there are no more sectors than these
_GRID = 8  # sectors over the whole range from which the way down starts
_ROUNDING = 8 * np.finfo(float).eps  # of the norm bound: floor of the error


@dataclass(frozen=True)
class SectorState:
    """An exact ground state: amplitudes `vector` over the states of `basis`, in the frame given by rotations (N, 3, 3).

    Site vectors of the original frame are R_i^T times those of this frame.
    """

    vector: np.ndarray
    basis: Basis
    rotations: np.ndarray

    def to_full(self) -> np.ndarray:
        """The vector over the whole space, numpy.kron order, still in the turned frame."""
        full = np.zeros(math.prod(self.basis.dims), dtype=self.vector.dtype)
        full[self.basis.full_codes()] = self.vector
        return full


@dataclass(frozen=True)
class Estimate:
    """What an exact solve will take, from counting states: the sector of greatest cost, seconds and bytes."""

    dimension: int
    entries: int
    seconds: float
    bytes: int
    matrix_free: bool


@dataclass
class _Solved:
    sector: float | None
    energy: float  # of the shifted, scaled operator
    residual: float
    vector: np.ndarray | None
    basis: Basis | None

    def to_arrays(self) -> dict[str, np.ndarray]:
        vector = np.zeros(0) if self.vector is None else self.vector
        return {"numbers": np.array([self.energy, self.residual]), "vector": vector}


def exact_ground_state(
    op: SpinOperator,
    settings: QuantumSettings | None = None,
    start: np.ndarray | None = None,
    scale: float = 0.0,
    progress: Callable[[dict], None] | None = None,
    saved: SavedStates | None = None,
) -> GroundState:
    """Ground state by exact diagonalization.

    start (N, 3): classical unit vectors, which sector to try first and which to prefer among degenerate ones. scale:
    |f_min - f_mean|, to which settings.accuracy is relative; 0 takes the norm bound of the operator. saved: where
    solved sectors, and the stages of a long iteration in one, are kept and found again.

    error: the residual norm |H v - E v| (an eigenvalue lies that close), what was neglected as rounding errors in the
    operator, and a rounding floor of 8 machine epsilons of the norm bound. Raises TooLarge where dimension or
    settings.memory forbid it.
    """
    settings = settings or QuantumSettings()
    frame = natural_frame(op)
    parts = shifts(frame.op, conserve=frame.conserved)
    if not math.isfinite(parts.norm):
        raise ValueError("the couplings are too large: their sum is not a finite number")
    problem = _Problem(parts, settings, progress, saved or open_states(None))
    lead = _classical_magnetization(op, frame, start)
    if not parts.terms:
        best = _trivial(parts, lead)
    elif not frame.conserved:
        best = problem.solve(None)
    else:
        best = _search(problem, frame, lead)
    energy = parts.constant + parts.norm * (best.energy + 1.0)
    error = parts.norm * (best.residual + _ROUNDING) + parts.dropped + abs(parts.constant) * np.finfo(float).eps
    converged = error <= settings.accuracy * (scale or parts.norm or 1.0)
    advice = "" if converged else f"Lanczos stopped at a residual of {error:.1e}; ask for less accuracy than that"
    state = SectorState(best.vector, best.basis, frame.rotations)
    observables = {}
    if settings.observables:
        from manybody.quantum.observables import exact_observables

        observables = exact_observables(state, settings.observables, start, settings.seed)
    return GroundState(
        energy=float(energy),
        error=float(error),
        status="converged" if converged else "not_converged",
        advice=advice,
        method="exact",
        sector=float("nan") if best.sector is None else float(best.sector),
        sector_axis=frame.axis,
        energy_variance=float(parts.norm * best.residual) * float(parts.norm * best.residual),
        observables=observables,
        state=state,
    )


def estimate_exact(op: SpinOperator, frame: Frame | None = None, memory: float = math.inf) -> Estimate:
    """Cost of an exact solve without building a matrix: time is for one core of a present-day machine, to a factor of
    2.
    """
    frame = frame or natural_frame(op)
    parts = shifts(frame.op, conserve=frame.conserved)
    if frame.conserved:
        dimensions = sector_dimensions(parts.spins)
        largest = len(dimensions) // 2
        sector = float(np.sum(parts.spins)) - largest
        dimension = float(dimensions[largest])
        total = dimension if frame.isotropic else float(dimensions.sum()) / (2 if frame.mirrored else 1)
    else:
        sector, dimension = None, float(np.prod([float(d) for d in parts.dims]))
        total = dimension
    if dimension > 50 * LARGEST_DIMENSION:
        return Estimate(int(min(dimension, 2**62)), 0, math.inf, 2**62, True)
    entries = dimension + entry_count(parts, sector)
    if dimension <= _DENSE:
        work = total / dimension * (1e-4 + 5e-10 * dimension**3)
        return Estimate(int(dimension), round(entries), 2e-3 + work, round(3 * 16 * dimension**2) + 2**20, False)
    item = 8 if parts.real else 16
    vectors = (_VECTORS + 6) * item * dimension
    matrix = entries * (item + 4) + 2**26
    half = math.prod(parts.dims) ** 0.5
    matrix_free = matrix + vectors + 24 * half > memory
    scanned = min(total, _SCAN_COARSE if total <= _SCAN_COARSE else 3 * dimension) / dimension
    steps = 60 + 12 * math.log(dimension)
    per_step = (2e-9 if parts.real else 3e-9) * entries + 4 * _VECTORS * item / 8 * dimension * 0.5e-9
    seconds = scanned * (8e-8 * entries + (3 if matrix_free else 1) * steps * per_step)
    if matrix_free:
        matrix = split_bytes(dimension, half, parts.real)
    return Estimate(int(dimension), round(entries), 0.01 + seconds, round(matrix + vectors + 24 * half), matrix_free)


class _Problem:
    """Solves sectors of one operator, scaled to norm at most 1 and shifted by -1, so that all energies lie in [-2,
    0].
    """

    def __init__(self, parts: Shifts, settings: QuantumSettings, progress, saved: SavedStates):
        terms = tuple(replace(term, amplitude=term.amplitude / parts.norm) for term in parts.terms)
        self.parts = replace(parts, terms=terms, constant=-1.0)
        self.settings, self.progress, self.saved = settings, progress, saved

    def solve(self, sector: float | None, tolerance: float = _TOLERANCE) -> _Solved:
        name = f"sector/{sector}/{tolerance}"
        if done := self.saved.get(name):
            energy, residual = done["numbers"].tolist()
            vector = done["vector"] if done["vector"].size else None
            solved = _Solved(sector, energy, residual, vector, None if vector is None else self._basis(sector))
            self.saved.put(name, solved.to_arrays)
            return solved
        basis = self._basis(sector)
        matrix, work = self._matrix(basis)
        saved = self.saved.within(f"iteration/{sector}/{tolerance}") if work >= _LONG else None
        energy, residual, vector = lowest_state(matrix, self.settings.seed, tolerance, saved, stages_of(work))
        if self.progress:
            self.progress({"stage": "exact", "sector": sector, "dimension": basis.dimension, "residual": residual})
        solved = _Solved(sector, energy, residual, vector, basis)
        # Of a coarse look nobody asks for the vector.
        kept = solved if tolerance == _TOLERANCE else replace(solved, vector=None, basis=None)
        self.saved.put(name, kept.to_arrays)
        self.saved.drop("iteration")
        self.saved.pause()
        return solved

    def _basis(self, sector: float | None) -> Basis:
        basis = Basis(self.parts.spins, sector)
        if basis.dimension > LARGEST_DIMENSION:
            raise TooLarge(f"dimension {basis.dimension} is above {LARGEST_DIMENSION}")
        return basis

    def _matrix(self, basis: Basis):
        """The matrix or what multiplies by it, and its entries, complex ones counted twice."""
        item = 8 if self.parts.real else 16
        vectors = (_VECTORS + 6) * item * basis.dimension
        if vectors > self.settings.memory:
            raise TooLarge(f"Lanczos vectors of {vectors / 2**30:.1f} GiB do not fit the memory allowed")
        if basis.dimension <= _ALWAYS_FITS:
            return assemble(self.parts, basis), 0
        entries = basis.dimension + entry_count(self.parts, basis.sector)
        work = entries * item // 8
        if entries * (item + 4) + vectors + 2**26 <= self.settings.memory:
            return assemble(self.parts, basis), work
        return SplitOperator(self.parts, basis), work


def stages_of(work: int) -> np.ndarray:
    """Residuals at which the vector of a long iteration is kept, so that some minutes lie between them."""
    return np.geomspace(_COARSE, _TOLERANCE, min(_STAGES + work // _LONGER, 9))


def lowest_state(
    matrix, seed: int, tolerance: float = _TOLERANCE, saved: SavedStates | None = None, stages: Iterable[float] = ()
) -> tuple[float, float, np.ndarray]:
    """Lowest eigenvalue, residual norm and normalized vector of a Hermitian matrix (scipy CSR or LinearOperator).

    The matrix is expected to have its lowest eigenvalue near -1 ... -2 in size, since the tolerance is relative to it.
    Repeatable: the start vector is drawn from `seed`. saved: keeps what the iteration has reached at the
    residuals `stages`.
    """
    dimension = matrix.shape[0]
    if dimension == 1:
        value = float(np.real(matrix @ np.ones(1))[0])
        return value, 0.0, np.ones(1, dtype=matrix.dtype)
    sparse_matrix = hasattr(matrix, "nnz")
    if sparse_matrix and matrix.nnz == dimension:
        # Nothing but the diagonal, which is always stored.
        diagonal = matrix.diagonal().real
        vector = np.zeros(dimension, dtype=matrix.dtype)
        vector[np.argmin(diagonal)] = 1.0
        return float(diagonal.min()), 0.0, vector
    if dimension <= _DENSE:
        dense = matrix.toarray() if sparse_matrix else matrix @ np.eye(dimension, dtype=matrix.dtype)
        _, vectors = scipy.linalg.eigh(dense, subset_by_index=[0, 0])
        return _measured(matrix, vectors[:, 0])
    random = np.random.default_rng(seed)
    start = random.standard_normal(dimension).astype(matrix.dtype)
    if np.issubdtype(matrix.dtype, np.complexfloating):
        start += 1j * random.standard_normal(dimension)
    if saved is None or not saved.kept:
        return _measured(matrix, _iterated(matrix, start, tolerance))
    stages = [*(float(stage) for stage in stages if stage > tolerance), tolerance]
    if found := saved.get("stage"):
        start = found["vector"]
        stages = [stage for stage in stages if stage < found["reached"][0]]
    watched = LinearOperator(
        matrix.shape, dtype=matrix.dtype, matvec=lambda vector: (saved.pause(), matrix @ vector)[1]
    )  # fmt: skip
    for stage in stages:
        start = _iterated(watched, start, stage)
        saved.put("stage", lambda start=start, stage=stage: {"vector": start, "reached": np.array([stage])})
    return _measured(matrix, start)


def _iterated(matrix, start: np.ndarray, tolerance: float) -> np.ndarray:
    """The lowest eigenvector, as nearly as restarted Lanczos iterations come to it."""
    for vectors in (_VECTORS, 3 * _VECTORS):
        try:
            ncv = min(vectors, len(start) - 1)
            _, found = eigsh(matrix, k=1, which="SA", v0=start, tol=tolerance, ncv=ncv)
            return found[:, 0]
        except ArpackNoConvergence as failure:
            if failure.eigenvectors.shape[1]:
                start = failure.eigenvectors[:, 0]
    return start


def _measured(matrix, vector: np.ndarray) -> tuple[float, float, np.ndarray]:
    vector = vector / np.linalg.norm(vector)
    image = matrix @ vector
    energy = float(np.vdot(vector, image).real)
    return energy, float(np.linalg.norm(image - energy * vector)), vector


def _search(problem: _Problem, frame: Frame, lead: float | None) -> _Solved:
    """The lowest sector; among sectors that tie the classical one where it is among them, else the smallest |S^z|."""
    spins = problem.parts.spins
    dimensions = sector_dimensions(spins)
    top = float(np.sum(spins))
    lowest = top % 1.0
    solved: dict[float, _Solved] = {}

    def energy(sector: float) -> float:
        if sector not in solved:
            solved[sector] = problem.solve(sector)
            # Only the best and the preferred sector keep their vectors.
            best = min(solved.values(), key=lambda s: s.energy)
            for key, state in solved.items():
                keep = state is best or key in (lead, lowest) or state.vector is None
                if not keep and len(state.vector) > _SCAN_ALL:
                    state.vector = state.basis = None
        return solved[sector].energy

    if frame.isotropic:
        for sector in {lowest, top if lead is None else lead}:
            energy(sector)
        return _preferred(solved, lead)
    sectors = [top - n for n in range(len(dimensions)) if not frame.mirrored or top - n >= 0]
    counts = dict(zip(sectors, dimensions, strict=False))
    if frame.mirrored and lead is not None:
        lead = abs(lead)
    total = sum(counts.values())
    if total <= _SCAN_ALL:
        for sector in sectors:
            energy(sector)
        return _preferred(solved, lead)
    grid = {sectors[0], sectors[-1], lowest} | set(sectors[:: max(1, len(sectors) // _GRID)])
    for sector in grid if total <= _SCAN_COARSE else {lowest, sectors[0], sectors[-1]}:
        energy(sector)
    if lead is not None:
        energy(lead)
    _descend(energy, solved, sectors)
    if total <= _SCAN_COARSE and len(sectors) <= _SCAN_COUNT:
        for sector in sectors:
            if sector not in solved:
                look = problem.solve(sector, _COARSE)
                if look.energy - look.residual < min(s.energy for s in solved.values()):
                    energy(sector)
        _descend(energy, solved, sectors)
    return _preferred(solved, lead)


def _descend(energy: Callable[[float], float], solved: dict[float, _Solved], sectors: Iterable[float]) -> None:
    """Solve sectors about the lowest, at distances halved from a quarter of the range to 1, until both neighbours lie
    higher."""
    allowed = set(sectors)
    distance = float(2 ** max(0, (len(allowed) // 4).bit_length() - 1)) if len(allowed) > _SCAN_COUNT else 1.0
    while True:
        best = min(solved, key=lambda sector: solved[sector].energy)
        open_ones = [s for s in (best - distance, best + distance) if s in allowed and s not in solved]
        for sector in open_ones:
            energy(sector)
        if not open_ones or best == min(solved, key=lambda sector: solved[sector].energy):
            if distance == 1.0:
                return
            distance /= 2


def _preferred(solved: dict[float, _Solved], lead: float | None) -> _Solved:
    low = min(state.energy for state in solved.values())
    tied = [s for s in solved.values() if s.energy - low <= 100 * _TOLERANCE and s.vector is not None]
    if lead is not None and any(state.sector == lead for state in tied):
        return solved[lead]
    return min(tied, key=lambda state: (abs(state.sector), -state.sector))


def _classical_magnetization(op: SpinOperator, frame: Frame, start: np.ndarray | None) -> float | None:
    """S^z of the sector nearest the classical configuration; under full rotation symmetry the length of its total
    spin.
    """
    if start is None or not frame.conserved:
        return None
    start = np.asarray(start, dtype=float)
    if start.shape != (op.sites, 3):
        raise ValueError(f"start must be unit vectors of shape ({op.sites}, 3), got {start.shape}")
    moment = np.asarray(op.spins) @ start
    along = float(np.linalg.norm(moment)) if frame.isotropic else float(moment @ frame.axis)
    top = float(np.sum(op.spins))
    return float(np.clip(top - round(top - along), -top, top))


def _trivial(parts: Shifts, lead: float | None) -> _Solved:
    """Any state is a ground state of a constant; take the classical sector or that of lowest |S^z|."""
    sector = (float(np.sum(parts.spins)) % 1.0) if lead is None else lead
    basis = Basis(parts.spins, sector)
    vector = np.zeros(basis.dimension)
    vector[0] = 1.0
    return _Solved(sector, -1.0, 0.0, vector, basis)
