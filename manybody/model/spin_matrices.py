"""Operators and coherent states of a single spin S, in the basis m = S, S - 1, ..., -S (index 0 is m = +S)."""

import functools

import numpy as np
from scipy.special import gammaln


def spin_number(spin) -> float:
    """S as a float. Raises ValueError unless it is a positive multiple of 1/2."""
    value = float(spin)
    if not (np.isfinite(value) and value > 0 and 2 * value == round(2 * value)):
        raise ValueError(f"a spin must be a positive multiple of 1/2, got {spin!r}")
    return value


@functools.lru_cache(maxsize=256)
def harmonic_diagonals(spin: float, rank: int) -> tuple[np.ndarray, ...]:
    """The raising parts of the operators W_kq of rank k, q = 0 ... k, each the one diagonal on which it lives.

    Entry q is the vector t (2S + 1 - q,) with <m + q| T_q |m> > 0 at the highest m: T_q[i, i + q] = t[i].
    W_k0 = T_0, and for q > 0: W_kq = (T_q + T_q^T) / 2, W_k,-q = (T_q - T_q^T) / 2i. For k > 2S all are zero.

    On the q-th diagonal the tensor operators of rank q, q + 1, ... are polynomials in m, orthogonal under the trace
    (discrete Chebyshev and Hahn polynomials), so a three-term recurrence with reorthogonalization gives them to
    rounding error for every S, where repeated commutators lose digits.
    """
    size = round(2 * spin) + 1
    m = spin - np.arange(size)
    diagonals = []
    ladder = np.ones(size)
    for q in range(rank + 1):
        if q > 0:
            # S_+ acting once more: <m + 1|S_+|m> = sqrt(S(S+1) - m(m+1)); normalized at once, as powers overflow.
            step = np.sqrt(np.maximum(spin * (spin + 1) - m[q:] * (m[q:] + 1), 0.0))
            ladder = (ladder[:-1] * step)[: size - q] if size > q else np.zeros(0)
        if rank >= size:
            diagonals.append(np.zeros(max(size - q, 0)))
            continue
        ladder = ladder / np.linalg.norm(ladder)
        middle = m[q:] + q / 2
        basis = [ladder]
        for _ in range(q, rank):
            vector = middle * basis[-1]
            for _ in range(2):
                for previous in basis:
                    vector = vector - (previous @ vector) * previous
            basis.append(vector / np.linalg.norm(vector))
        diagonals.append(basis[-1] * np.sqrt((2 if q else 1) * size / (2 * rank + 1)))
    for diagonal in diagonals:
        diagonal.setflags(write=False)
    return tuple(diagonals)


@functools.lru_cache(maxsize=256)
def harmonic_operators(spin: float, rank: int) -> np.ndarray:
    """Hermitian W_kq (2k + 1, 2S + 1, 2S + 1), q = -k ... k: trace(W_kq W_kq') = delta_qq' (2S + 1) / (2k + 1).

    The operators whose Stratonovich-Weyl symbols are the real harmonics C_kq (Varilly, Gracia-Bondia 1989, Ann. Phys.
    190, 107): q >= 0 real and symmetric, q < 0 imaginary and antisymmetric. W_1 = (S_y, S_z, S_x) / sqrt(S(S+1)).
    """
    size = round(2 * spin) + 1
    operators = np.zeros((2 * rank + 1, size, size), dtype=complex)
    for q, diagonal in enumerate(harmonic_diagonals(spin, rank)):
        if len(diagonal) == 0:
            continue
        raising = np.diag(diagonal, q)
        if q == 0:
            operators[rank] = raising
        else:
            operators[rank + q] = (raising + raising.T) / 2
            operators[rank - q] = (raising - raising.T) / 2j
    operators.setflags(write=False)
    return operators


def spin_matrices(spin: float) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """(S_x, S_y, S_z), complex (2S + 1, 2S + 1)."""
    sy, sz, sx = np.sqrt(spin * (spin + 1)) * harmonic_operators(spin, 1)
    return sx, sy, sz


def coherent_states(n: np.ndarray, spin: float) -> np.ndarray:
    """Spin-coherent states |n> (..., 2S + 1), complex, normalized, for unit vectors n (..., 3): n.S |n> = S |n>.

    Radcliffe 1971, J. Phys. A 4, 313; the phase makes the amplitude of m = S real.
    """
    n = np.asarray(n, dtype=float)
    size = round(2 * spin) + 1
    lowered = np.arange(size)
    binomial = 0.5 * (gammaln(size) - gammaln(lowered + 1) - gammaln(size - lowered))
    polar = np.arctan2(np.hypot(n[..., 0], n[..., 1]), n[..., 2])[..., None]
    azimuth = np.arctan2(n[..., 1], n[..., 0])[..., None]
    with np.errstate(divide="ignore", invalid="ignore"):
        up = np.where(size - 1 - lowered == 0, 0.0, (size - 1 - lowered) * np.log(np.cos(polar / 2)))
        down = np.where(lowered == 0, 0.0, lowered * np.log(np.sin(polar / 2)))
    return np.exp(binomial + up + down) * np.exp(1j * lowered * azimuth)
