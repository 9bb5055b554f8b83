"""Product states as matrix-product states: projected on a sector of total charge, one state per charge and bond.

A coherent product state turned into the plane perpendicular to the conserved axis and projected on the wanted sector
knows the classical order and mixes all charges: sweeps started from it do not crawl as they do from a basis state of
large spins.
"""

from collections.abc import Sequence

import numpy as np
from scipy.optimize import minimize

from manybody.model.quantization import SpinOperator
from manybody.quantum.chain import Bond

WINDOW = 1e-10
"""Charges of smaller probability in the projected product state are left out of a bond."""


def projected_product(
    amplitudes: Sequence[np.ndarray], local: Sequence[np.ndarray], total: int, real: bool
) -> tuple[list[Bond], list[np.ndarray]]:
    """Bonds and site tensors (by left, not normalized) of the projection of a product state on a total charge.

    amplitudes: one vector per site; local: charges of its entries. With `real`, complex amplitudes give the real part
    of the projected state at two states per charge. Raises ValueError where the product state has no weight in the
    sector.
    """
    length = len(local)
    turned = real and any(np.abs(vector.imag).max() > 1e-12 for vector in amplitudes)
    probabilities = [np.abs(vector) ** 2 / np.sum(np.abs(vector) ** 2) for vector in amplitudes]
    ahead = _distributions(probabilities, local)
    behind = _distributions(probabilities[::-1], local[::-1])[::-1]
    bonds = []
    for k in range(length + 1):
        joint = {q: p * behind[k].get(total - q, 0.0) for q, p in ahead[k].items()}
        largest = max(joint.values(), default=0.0)
        if not largest > 0:
            raise ValueError(f"a product start state has no part of total charge {total}")
        charges = np.array(sorted(q for q, p in joint.items() if p > WINDOW * largest), np.int64)
        size = 2 if turned and 0 < k < length else 1
        bonds.append(Bond(charges, np.full(charges.size, size, np.int64)))
    tensors = []
    for k in range(length):
        vector = amplitudes[k] if np.iscomplexobj(amplitudes[k]) and not real else np.asarray(amplitudes[k])
        present = set(bonds[k + 1].charges.tolist())
        pieces = []
        for q in bonds[k].charges.tolist():
            row = [s for s, c in enumerate(local[k].tolist()) if q + c in present]
            if turned:
                matrices = [
                    np.array([[vector[s].real, -vector[s].imag], [vector[s].imag, vector[s].real]]) for s in row
                ]
                # The first vector is (1, 0), and the real part is read off by (1, 0) at the far end.
                matrices = [m[:1] if k == 0 else m for m in matrices]
                matrices = [m[:, :1] if k == length - 1 else m for m in matrices]
                pieces.append(np.concatenate(matrices, axis=1).reshape(-1) if row else np.zeros(0))
            else:
                pieces.append(np.array([vector[s] for s in row]))
        tensor = np.concatenate(pieces)
        tensors.append(np.ascontiguousarray(tensor.real if real else tensor.astype(complex)))
    return bonds, tensors


def _distributions(probabilities, local) -> list[dict[int, float]]:
    """Probability of every charge summed over the first k sites, k = 0 ... N, scaled to at most one."""
    result = [{0: 1.0}]
    for weights, charges in zip(probabilities, local, strict=True):
        following: dict[int, float] = {}
        for q, p in result[-1].items():
            for c, w in zip(charges.tolist(), weights.tolist(), strict=True):
                if w > 0:
                    following[q + c] = following.get(q + c, 0.0) + p * w
        result.append(following)
    return result


def classical_start(operator: SpinOperator, rng: np.random.Generator, starts: int = 8) -> np.ndarray:
    """(N, 3) unit vectors of low energy of the lower symbol, by projected descent from random directions."""
    symbol = operator.lower_symbol()

    def value(x: np.ndarray) -> tuple[float, np.ndarray]:
        v = x.reshape(-1, 3)
        length = np.linalg.norm(v, axis=1, keepdims=True)
        energy, gradient = symbol.value_and_gradient(v / length)
        return float(energy), (gradient / length).reshape(-1)

    best, lowest = None, np.inf
    for _ in range(starts):
        found = minimize(value, rng.standard_normal(3 * operator.sites), jac=True, method="L-BFGS-B")
        if best is None or found.fun < lowest - 1e-9 * abs(lowest):
            best, lowest = found.x.reshape(-1, 3), found.fun
    return best / np.linalg.norm(best, axis=1, keepdims=True)
