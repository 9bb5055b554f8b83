"""What is asked of a quantum ground state and what comes back, shared by exact diagonalization and matrix-product
sweeps."""

import json
from dataclasses import dataclass, field, fields
from typing import Any

import numpy as np

OBSERVABLES = ("entanglement", "moments", "correlations")
STATUSES = ("converged", "not_converged")
METHODS = ("exact", "matrix_product")


@dataclass(frozen=True)
class QuantumSettings:
    """How well, and within which limits, a quantum ground energy is wanted.

    accuracy: wanted one-sided error of the energy relative to the scale |f_min - f_mean| of the model.
    max_bond: largest bond dimension of a matrix-product state.
    memory: bytes one solve may hold at its peak.
    observables: any of OBSERVABLES.
    seed: seed of every random start; the same seed gives the same numbers on one machine.
    """

    accuracy: float = 1e-7
    max_bond: int = 512
    memory: int = 4 * 2**30
    observables: tuple[str, ...] = ()
    seed: int = 1

    def __post_init__(self) -> None:
        if not self.accuracy > 0:
            raise ValueError(f"accuracy = {self.accuracy!r} must be a positive number")
        if self.max_bond < 1:
            raise ValueError(f"max_bond = {self.max_bond!r} must be at least 1")
        if self.memory <= 0:
            raise ValueError(f"memory = {self.memory!r} must be a positive number of bytes")
        object.__setattr__(self, "observables", tuple(self.observables))
        unknown = [name for name in self.observables if name not in OBSERVABLES]
        if unknown:
            raise ValueError(f"observables {unknown} unknown; choose among {', '.join(OBSERVABLES)}")


def _empty() -> np.ndarray:
    return np.zeros(0)


@dataclass(frozen=True)
class GroundState:
    """A quantum ground energy with its error, its verdict and how it was found.

    energy: variational total energy (an upper bound; exact up to rounding for method "exact").
    error: one-sided 95 % bound, the truth lies in [energy - error, energy].
    status: one of STATUSES; advice says in words what to change when it is "not_converged", else it is "".
    sector: total S^z along sector_axis (3,), a unit vector; both NaN where nothing is conserved.
    trace_*: one entry per stage of growing bond dimension (empty for method "exact").
    observables: arrays by name, sites numbered as in the operator:
        moments (N, 3) <S_i>/S_i; moments_squared (N, 3, 3) symmetrized <S_a S_b>/S_i^2;
        correlations (N, N, 3, 3) <S_i^a S_j^b>/(S_i S_j), i = j symmetrized;
        entanglement (N-1,) von Neumann entropy (natural logarithm) at every cut, and entanglement_order (N,): the
        cut k separates the sites entanglement_order[:k+1] from the others;
        coherent_overlap: |<best coherent product | ground state>|^(2/N), a number.
    state: the state itself: a vector over the sector or a matrix-product state; None where it was not kept.
    hit_bond_limit, hit_memory_limit: what stopped the enlargement of bonds.
    """

    energy: float
    error: float
    status: str
    advice: str
    method: str
    sector: float = float("nan")
    sector_axis: np.ndarray = field(default_factory=lambda: np.full(3, np.nan))
    bond_dimension: int = 0
    discarded_weight: float = 0.0
    energy_variance: float = 0.0
    trace_bond_dimension: np.ndarray = field(default_factory=_empty)
    trace_energy: np.ndarray = field(default_factory=_empty)
    trace_variance: np.ndarray = field(default_factory=_empty)
    trace_discarded_weight: np.ndarray = field(default_factory=_empty)
    observables: dict[str, np.ndarray] = field(default_factory=dict)
    state: Any = None
    hit_bond_limit: bool = False
    hit_memory_limit: bool = False

    @property
    def converged(self) -> bool:
        return self.status == "converged"

    def to_arrays(self) -> dict[str, np.ndarray]:
        """All but the state as plain arrays."""
        values = {entry.name: getattr(self, entry.name) for entry in fields(self) if entry.name != "state"}
        observables = values.pop("observables")
        arrays = {name: value for name, value in values.items() if isinstance(value, np.ndarray)}
        numbers = json.dumps({name: value for name, value in values.items() if name not in arrays})
        arrays["numbers"] = np.frombuffer(numbers.encode(), np.uint8)
        return arrays | {f"observable {name}": value for name, value in observables.items()}

    @classmethod
    def from_arrays(cls, arrays: dict[str, np.ndarray]) -> "GroundState":
        """The inverse of to_arrays, without a state."""
        observables = {name[11:]: array for name, array in arrays.items() if name.startswith("observable ")}
        plain = {name: array for name, array in arrays.items() if not name.startswith("observable ")}
        numbers = json.loads(plain.pop("numbers").tobytes())
        return cls(**numbers, **plain, observables=observables)
