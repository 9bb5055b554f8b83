"""Harmonic fluctuations about a classical minimum: frequencies, zero modes, and e_1 of one configuration.

At a minimum n*, A is the 2N x 2N Riemannian Hessian of f in orthonormal tangent frames (e_1, e_2 = n x e_1). Its
symplectic eigenvalues omega_k >= 0 are the moduli of the eigenvalues +- i omega of J A, equal to the singular values
(each twice) of A^(1/2) J A^(1/2). With the quantized energy E = f_min + e_1 / S + O(1/S^2),

e_1 = 1/2 sum omega + kappa tr A,     kappa = +1/4 toeplitz, 0 weyl, -1/4 wick,

and `substitution` as `wick` plus the 1/S part of its lower symbol at n*
(manybody.model.quantization.lower_symbol_correction). The symmetric form keeps small frequencies to machine precision
where an eigenvalue solver for J A loses half the digits at zero modes.
"""

from dataclasses import dataclass

import numpy as np
import scipy.sparse as sp
from scipy.linalg import svdvals

from manybody.classical.distinct import coupled_sites
from manybody.classical.sphere_product import tangent_frames
from manybody.model.energy import EnergyFunction
from manybody.model.quantization import RULES, lower_symbol_correction

KAPPA = {"toeplitz": 0.25, "weyl": 0.0, "wick": -0.25, "substitution": -0.25}
ZERO_MODE = 1e-9  # eigenvalues of A and frequencies below this share of the largest eigenvalue of A count as zero
UNSTABLE = 1e-7  # eigenvalues of A below minus this share of the largest modulus mean that the point is no minimum
STATIONARY = 1e-6  # largest tangential gradient at a site, relative to the largest eigenvalue of A
DENSE_SITES = 1500  # sites of one connected cluster up to which the frequencies are computed
SPLIT_SITES = 4000  # the same where in-plane and out-of-plane motion separate


class HarmonicTrouble(ValueError):
    """There is no harmonic energy for this configuration."""


class UnstablePoint(HarmonicTrouble):
    """The configuration is not a minimum: the harmonic energy is not defined there."""


class TooLarge(HarmonicTrouble):
    """More sites than a dense computation of the frequencies affords."""


@dataclass(frozen=True)
class Fluctuations:
    """Frequencies (N,) ascending, zero_modes among them, and tr A, all in the units of f and for one configuration.

    flat: tangent vectors (k, N, 3) spanning the null space of A (its own zero modes, which move the configuration at no
    cost).
    """

    frequencies: np.ndarray
    zero_modes: int
    trace: float
    flat: np.ndarray

    def e1(self, f: EnergyFunction, n: np.ndarray, rule: str) -> float:
        if rule not in RULES:
            raise ValueError(f"rule must be one of {', '.join(RULES)}, got {rule!r}")
        value = 0.5 * float(self.frequencies.sum()) + KAPPA[rule] * self.trace
        if rule == "substitution":
            value += float(lower_symbol_correction(f).value(n))
        return value


def fluctuations(f: EnergyFunction, n: np.ndarray) -> Fluctuations:
    """Harmonic frequencies of f at a minimum n (N, 3).

    Connected clusters are treated one by one; sites on which f does not depend have frequency zero. Raises
    UnstablePoint where n is not stationary or A has a negative eigenvalue, TooLarge beyond DENSE_SITES sites in a
    cluster (SPLIT_SITES for coplanar configurations whose motions in and out of the plane separate). Cost: a few dense
    decompositions of 2N x 2N, or N x N where they separate.
    """
    n = np.asarray(n, dtype=float)
    if n.shape != (f.sites, 3):
        raise ValueError(f"the configuration must have shape ({f.sites}, 3), got {n.shape}")
    if not coupled_sites(f).any():
        return Fluctuations(np.zeros(f.sites), f.sites, 0.0, np.zeros((0, f.sites, 3)))
    scaled, exponent = f.rescaled()
    gradient = np.linalg.norm(scaled.gradient(n), axis=1).max()
    hessian = scaled.hessian_sparse(n)
    size = max(float(abs(hessian).sum(axis=1).max()), gradient, 1e-300)
    if gradient > STATIONARY * size:
        raise UnstablePoint(
            f"the configuration is not stationary: its gradient is {gradient / size:.1e} of the largest curvature; "
            "minimize first"
        )
    frequencies, flat = np.zeros(f.sites), []
    for cluster in f.components():
        rows = (3 * cluster[:, None] + np.arange(3)).ravel()
        part = sp.csr_array(hessian[rows][:, rows])
        found, modes = _cluster_frequencies(part, n[cluster], size)
        frequencies[cluster] = found
        for mode in modes:
            whole = np.zeros((f.sites, 3))
            whole[cluster] = mode
            flat.append(whole)
    frequencies = np.sort(frequencies)
    zero = frequencies <= ZERO_MODE * size
    frequencies[zero] = 0.0
    return Fluctuations(
        frequencies=np.ldexp(frequencies, exponent),
        zero_modes=int(zero.sum()),
        trace=float(np.ldexp(hessian.diagonal().sum(), exponent)),
        flat=np.array(flat).reshape(-1, f.sites, 3),
    )


def _cluster_frequencies(hessian: sp.csr_array, n: np.ndarray, size: float) -> tuple[np.ndarray, np.ndarray]:
    """Frequencies (N,) and null vectors (k, N, 3) of one connected cluster."""
    sites = len(n)
    e1, e2 = tangent_frames(n, _common_normal(n))
    first, second = _columns(e1), _columns(e2)
    mixed = first.T @ (hessian @ second)
    separate = abs(mixed).max() <= 1e-13 * size
    limit = SPLIT_SITES if separate else DENSE_SITES
    if sites > limit:
        raise TooLarge(f"{sites} connected sites, the harmonic frequencies are computed for at most {limit} here")
    one, two = (first.T @ (hessian @ first)).toarray(), (second.T @ (hessian @ second)).toarray()
    if separate:
        roots, modes = [], []
        for block, frame in ((one, e1), (two, e2)):
            values, vectors, null = _nonnegative(block, size)
            roots.append(vectors * np.sqrt(values))
            modes.append(np.einsum("ik,ia->kia", null, frame))
        # K = A_2^(1/2) A_1^(1/2): its singular values are the frequencies
        found = svdvals(roots[1].T @ roots[0]) if min(r.shape[1] for r in roots) else np.zeros(0)
        modes = np.concatenate(modes)
    else:
        a = np.block([[one, mixed.toarray()], [mixed.T.toarray(), two]])
        values, vectors, null = _nonnegative(0.5 * (a + a.T), size)
        root = vectors * np.sqrt(values)
        turned = np.concatenate([root[sites:], -root[:sites]])
        found = svdvals(root.T @ turned)[::2] if root.shape[1] else np.zeros(0)
        modes = np.einsum("ik,ia->kia", null[:sites], e1) + np.einsum("ik,ia->kia", null[sites:], e2)
    frequencies = np.zeros(sites)
    frequencies[: len(found)] = found
    return frequencies, modes


def _nonnegative(block: np.ndarray, size: float) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Positive eigenvalues, their vectors, and the null vectors of a symmetric matrix that must not
    have negative ones.
    """
    values, vectors = np.linalg.eigh(block)
    if values[0] < -UNSTABLE * size:
        raise UnstablePoint(
            "the configuration is not a minimum: its curvature is negative in some direction "
            f"({values[0] / size:.1e} of the largest)"
        )
    kept = values > ZERO_MODE * size
    return values[kept], vectors[:, kept], vectors[:, ~kept]


def _common_normal(n: np.ndarray) -> np.ndarray | None:
    """A unit vector orthogonal to all rows of n to 1e-12, or None."""
    values, vectors = np.linalg.eigh(n.T @ n)
    normal = vectors[:, 0]
    return normal if np.abs(n @ normal).max() <= 1e-12 and values[0] <= 1e-20 * len(n) else None


def _columns(frame: np.ndarray) -> sp.csr_array:
    """(3 N, N): column i holds the frame vector of site i."""
    sites = len(frame)
    return sp.csr_array(
        (frame.ravel(), (np.arange(3 * sites), np.repeat(np.arange(sites), 3))), shape=(3 * sites, sites)
    )
