"""The usual couplings as energy functions of unit vectors n_i.

Pairs are ordered (i, j) and count once. Sums over the given pairs or sites; add the results for several kinds of terms.
All builders raise ValueError for shapes that do not fit, sites outside 0 ... sites - 1 and numbers that are not finite.
"""

import itertools
from collections.abc import Callable, Mapping, Sequence

import numpy as np

from manybody.model.energy import EnergyFunction, Group
from manybody.model.harmonics import CARTESIAN, Monomial, expand_function, expand_polynomial, harmonics


def exchange(sites: int, pairs: np.ndarray, coupling) -> EnergyFunction:
    """+ n_i^T J n_j. J: a number (isotropic), (3,) the diagonal, (3, 3), or one matrix per pair (P, 3, 3)."""
    pairs = _numbers(pairs, 2)
    coupling = np.asarray(coupling, dtype=float)
    if coupling.ndim == 0:
        coupling = coupling * np.eye(3)
    elif coupling.shape == (3,):
        coupling = np.diag(coupling)
    elif coupling.shape == (len(pairs), 1, 1):
        coupling = coupling * np.eye(3)
    if coupling.shape not in {(3, 3), (len(pairs), 3, 3)}:
        raise ValueError(f"exchange must be a number, (3,), (3, 3) or ({len(pairs)}, 3, 3), got shape {coupling.shape}")
    matrices = np.broadcast_to(coupling, (len(pairs), 3, 3))[:, CARTESIAN[:, None], CARTESIAN]
    return EnergyFunction(sites, 0.0, [Group(((1, 1), (1, 1)), pairs, matrices)])


def antisymmetric(sites: int, pairs: np.ndarray, vector) -> EnergyFunction:
    """+ D.(n_i x n_j). D: (3,) or one vector per pair (P, 3). The order of a pair matters."""
    pairs = _numbers(pairs, 2)
    vector = _vectors(vector, len(pairs), "antisymmetric exchange")
    matrices = np.zeros((len(pairs), 3, 3))
    for a, b, c in [(0, 1, 2), (1, 2, 0), (2, 0, 1)]:
        matrices[:, a, b] = vector[:, c]
        matrices[:, b, a] = -vector[:, c]
    return exchange(sites, pairs, matrices)


def biquadratic(sites: int, pairs: np.ndarray, strength: float) -> EnergyFunction:
    """+ B (n_i.n_j)^2. B: a number or one per pair (P,)."""
    pairs = _numbers(pairs, 2)
    strength = np.broadcast_to(np.asarray(strength, dtype=float), (len(pairs),))
    # (n.m)^2 = 1/3 + 2/3 P_2(n.m), and P_2(n.m) = sum_q C_2q(n) C_2q(m).
    scalar = strength[:, None, None] / 3
    tensor = strength[:, None, None] * (2 / 3) * np.eye(5)
    return EnergyFunction(sites, 0.0, [Group(((0, 2), (0, 2)), pairs, scalar), Group(((2, 2), (2, 2)), pairs, tensor)])


def field(sites: int, where: Sequence[int], vector) -> EnergyFunction:
    """- h.n_i. h: (3,) or one vector per site listed (len(where), 3)."""
    where = _numbers(where, 1)
    vector = _vectors(vector, len(where), "field")
    return EnergyFunction(sites, 0.0, [Group(((1, 1),), where, -vector[:, CARTESIAN])])


def anisotropy(sites: int, where: Sequence[int], axis: Sequence[float], strength: float) -> EnergyFunction:
    """+ K (n_i.axis)^2. The axis (3,) is normalized here, zero is an error. K: a number or one per site listed."""
    where = _numbers(where, 1)
    axis = np.asarray(axis, dtype=float)
    length = np.linalg.norm(axis)
    if axis.shape != (3,) or not np.isfinite(length) or length == 0:
        raise ValueError(f"axis must be three finite numbers, not all zero, got {axis.tolist()}")
    strength = np.broadcast_to(np.asarray(strength, dtype=float), (len(where),))[:, None]
    tensor = strength * (2 / 3) * harmonics(2, axis / length)
    return EnergyFunction(sites, 0.0, [Group(((0, 2),), where, strength / 3), Group(((2, 2),), where, tensor)])


def product(sites: int, where: np.ndarray, polynomials: Sequence[Mapping[Monomial, float]]) -> EnergyFunction:
    """Sum over the rows (i, j, ...) of `where` (T, m) of p_1(n_i) p_2(n_j) ...

    Each of the m site polynomials is a mapping {(a, b, c): coefficient of x^a y^b z^c}.
    """
    where = _numbers(where, len(polynomials))
    groups = []
    for factors in itertools.product(*[expand_polynomial(p).items() for p in polynomials]):
        tensor = np.ones(())
        for _, vector in factors:
            tensor = np.multiply.outer(tensor, vector)
        key = tuple(pair for pair, _ in factors)
        groups.append(Group(key, where, np.broadcast_to(tensor, (len(where), *tensor.shape))))
    constant = sum(float(g.coefficients.sum()) for g in groups if all(pair == (0, 0) for pair in g.key))
    return EnergyFunction(sites, constant, [g for g in groups if any(pair != (0, 0) for pair in g.key)])


def site_function(
    sites: int, where: Sequence[int], function: Callable[[np.ndarray], np.ndarray], rank: int, oversampling: int = 32
) -> EnergyFunction:
    """Sum of function(n_i), any real function of one unit vector ((P, 3) -> (P,)), expanded in harmonics up to `rank`.

    The expansion is exact for polynomials up to that degree and otherwise the best in the mean square; under the rule
    `toeplitz` nothing beyond rank 2S matters. `oversampling` adds quadrature points for functions that are not smooth.
    """
    where = _numbers(where, 1)
    constant, *parts = expand_function(function, rank, oversampling)
    groups = [
        Group(((k, k),), where, np.broadcast_to(part, (len(where), 2 * k + 1))) for k, part in enumerate(parts, start=1)
    ]
    return EnergyFunction(sites, len(where) * float(constant[0]), groups)


def _numbers(sites, width: int) -> np.ndarray:
    numbers = np.asarray(sites)
    if numbers.size == 0:
        return np.zeros((0, width), dtype=np.int64)
    if not np.issubdtype(numbers.dtype, np.integer):
        raise ValueError(f"site numbers must be integers, got {numbers.dtype}")
    if width == 1 and numbers.ndim == 1:
        numbers = numbers[:, None]
    if numbers.ndim != 2 or numbers.shape[1] != width:
        raise ValueError(f"expected site numbers of shape (terms, {width}), got {numbers.shape}")
    return numbers


def _vectors(vector, count: int, name: str) -> np.ndarray:
    vector = np.asarray(vector, dtype=float)
    if vector.shape not in {(3,), (count, 3)}:
        raise ValueError(f"{name} must be (3,) or ({count}, 3), got shape {vector.shape}")
    return np.broadcast_to(vector, (count, 3))
