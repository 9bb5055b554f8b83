"""Real spherical harmonics of one unit vector, and site polynomials expanded in them.

Normalization (Schmidt semi-normalized): sum_q C_kq(n)^2 = 1 for every unit vector n and rank k, hence the sphere
average of C_kq C_k'q' is delta_kk' delta_qq' / (2k + 1). Order q = -k ... k without the Condon-Shortley sign: C_kq is
proportional to Re (x + iy)^q for q > 0 and to Im (x + iy)^|q| for q < 0, with a positive leading coefficient in z. So
C_0 = 1 and C_1 = (y, z, x).

Off the unit sphere the functions here are the solid harmonics r^k C_k(n / r): harmonic polynomials, homogeneous of
degree k, whose derivatives are solid harmonics of rank k - 1.
"""

import functools
import math
from collections.abc import Callable, Mapping

import numpy as np

CARTESIAN = np.array([1, 2, 0])
"""Cartesian index (x = 0, y = 1, z = 2) of each component of C_1 = (y, z, x)."""

Monomial = tuple[int, int, int]


def harmonics(rank: int, n: np.ndarray) -> np.ndarray:
    """Solid harmonics of one rank: n (..., 3) -> (..., 2 rank + 1).

    Recurrences of the Schmidt semi-normalized Legendre functions, stable for all ranks
    (Winch, Ivers, Turner, Stening 2005, Geophys. J. Int. 160, 487).
    """
    n = np.asarray(n, dtype=float)
    if rank == 0:
        return np.ones((*n.shape[:-1], 1))
    if rank == 1:
        return n[..., CARTESIAN]
    x, y, z = n[..., 0], n[..., 1], n[..., 2]
    r2 = x * x + y * y + z * z
    values = np.empty((*n.shape[:-1], 2 * rank + 1))
    real, imaginary, sectoral = np.ones_like(x), np.zeros_like(x), 1.0
    for q in range(rank + 1):
        if q > 0:
            real, imaginary = x * real - y * imaginary, x * imaginary + y * real
            sectoral *= 1.0 if q == 1 else math.sqrt((2 * q - 1) / (2 * q))
        below, legendre = np.zeros_like(x), np.full_like(x, sectoral)
        for k in range(q + 1, rank + 1):
            step = ((2 * k - 1) * z * legendre - math.sqrt((k - 1) ** 2 - q * q) * r2 * below) / math.sqrt(
                k * k - q * q
            )
            below, legendre = legendre, step
        values[..., rank + q] = legendre * real
        if q > 0:
            values[..., rank - q] = legendre * imaginary
    return values


@functools.cache
def sphere_quadrature(degree: int) -> tuple[np.ndarray, np.ndarray]:
    """Points (P, 3) and weights (P,), summing to 1, that average polynomials up to `degree` exactly.

    Gauss-Legendre in z, equally spaced in azimuth.
    """
    z, weight = np.polynomial.legendre.leggauss(degree // 2 + 1)
    azimuth = 2 * np.pi * (np.arange(degree + 1) + 0.5) / (degree + 1)
    s = np.sqrt(1 - z * z)[:, None]
    points = np.stack(
        [s * np.cos(azimuth), s * np.sin(azimuth), np.broadcast_to(z[:, None], (len(z), len(azimuth)))], axis=-1
    )
    return points.reshape(-1, 3), np.repeat(weight / (2 * len(azimuth)), len(azimuth))


@functools.cache
def derivative(rank: int) -> np.ndarray:
    """D (3, 2 rank + 1, 2 rank - 1) with d C_rank / d n_a = D[a] C_(rank-1) as solid harmonics; rank >= 1."""
    # The gradient of a solid harmonic is a solid harmonic one rank lower, and the same matrix multiplies up:
    points, weights = sphere_quadrature(2 * rank)
    upper, lower = harmonics(rank, points), harmonics(rank - 1, points)
    # n_a C_(k-1,p) = sum_q U[a,p,q] C_kq + lower ranks, and D[a,q,p] = (2k-1)(2k+1) <C_kq n_a C_(k-1,p)>.
    matrix = (
        (2 * rank - 1) * (2 * rank + 1) * np.einsum("s,sa,sq,sp->aqp", weights, points, upper, lower, optimize=True)
    )
    return _without_noise(matrix)


@functools.cache
def generators(rank: int) -> np.ndarray:
    """Antisymmetric G (3, 2 rank + 1, 2 rank + 1): d/dt C_k(R_a(t) n) at t = 0 is G[a] C_k(n), R_a about axis a."""
    size = 2 * rank + 1
    if rank == 0:
        return np.zeros((3, 1, 1))
    points, weights = sphere_quadrature(2 * rank)
    values = harmonics(rank, points)
    gradients = np.einsum("aqp,sp->sqa", derivative(rank), harmonics(rank - 1, points))
    turned = np.stack([np.cross(axis, points) for axis in np.eye(3)])
    matrix = size * np.einsum("s,sqb,asb,sp->aqp", weights, gradients, turned, values, optimize=True)
    return _without_noise(matrix)


def rotation_matrix(rank: int, rotation: np.ndarray) -> np.ndarray:
    """Orthogonal D (..., 2 rank + 1, 2 rank + 1) with C_k(R n) = D C_k(n), for rotations R (..., 3, 3)."""
    if rank == 1:
        return np.asarray(rotation, dtype=float)[..., CARTESIAN[:, None], CARTESIAN]
    points, weights = sphere_quadrature(2 * rank)
    turned = harmonics(rank, np.einsum("...ab,sb->...sa", rotation, points))
    return (2 * rank + 1) * np.einsum("...sq,sp->...qp", turned, weights[:, None] * harmonics(rank, points))


@functools.cache
def _expand_monomial(exponents: Monomial) -> dict[int, np.ndarray]:
    degree = sum(exponents)
    points, weights = sphere_quadrature(2 * degree)
    values = weights * np.prod(points**exponents, axis=1)
    parts = {}
    for rank in range(degree % 2, degree + 1, 2):
        coefficients = _without_noise((2 * rank + 1) * values @ harmonics(rank, points))
        if coefficients.any():
            parts[rank] = coefficients
    return parts


def expand_polynomial(polynomial: Mapping[Monomial, float]) -> dict[tuple[int, int], np.ndarray]:
    """Expand a polynomial {(a, b, c): coefficient of x^a y^b z^c} of one unit vector in harmonics.

    Returns {(rank, degree): coefficients (2 rank + 1,)}. Each homogeneous part keeps the degree as written, which
    only the rule `substitution` reads: x^2 + y^2 + z^2 is rank 0 of degree 2. Raises ValueError for exponents that
    are not non-negative integers.
    """
    parts: dict[tuple[int, int], np.ndarray] = {}
    for exponents, coefficient in polynomial.items():
        if len(exponents) != 3 or any(e != int(e) or e < 0 for e in exponents):
            raise ValueError(f"exponents must be three non-negative integers, got {exponents!r}")
        exponents = tuple(int(e) for e in exponents)
        for rank, vector in _expand_monomial(exponents).items():
            key = (rank, sum(exponents))
            parts[key] = parts.get(key, 0.0) + coefficient * vector
    # Monomials that cancel, as in x^2 + y^2 + z^2, leave rounding errors of the size of the largest coefficient.
    noise = 1e-14 * max((abs(coefficient) for coefficient in polynomial.values()), default=0.0)
    cleaned = {key: np.where(np.abs(vector) <= noise, 0.0, vector) for key, vector in parts.items()}
    return {key: vector for key, vector in cleaned.items() if vector.any()}


def expand_function(
    function: Callable[[np.ndarray], np.ndarray], rank: int, oversampling: int = 32
) -> list[np.ndarray]:
    """Harmonic coefficients [(1,), (3,), ... (2 rank + 1,)] of any function of one unit vector, points (P, 3) -> (P,).

    Projection by a quadrature exact to degree 2 rank + `oversampling`; a function that is not smooth needs more.
    """
    points, weights = sphere_quadrature(2 * rank + oversampling)
    values = weights * np.asarray(function(points), dtype=float)
    return [(2 * k + 1) * values @ harmonics(k, points) for k in range(rank + 1)]


def _without_noise(values: np.ndarray) -> np.ndarray:
    """Rounding errors of a projection whose true entries are zero or of order one, set to zero."""
    return np.where(np.abs(values) < 1e-13 * max(1.0, np.abs(values).max()), 0.0, values)
