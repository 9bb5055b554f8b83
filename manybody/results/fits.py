"""Weighted least squares for series that end somewhere: the kernel of all scaling fits.

Data y_i = X_i c + (rest) with known standard deviations sigma_i. A truncated series is wrong by its first omitted
term, which for accurate energies is far larger than sigma. That rest is treated as noise of known shape and unknown
size tau: variance_i = sigma_i^2 + tau^2 shape_i^2, shape the first omitted term. So large systems (or spins) count
most, and standard errors come out as large as the truncation makes them. tau is found by restricted maximum
likelihood (Patterson and Thompson 1971), forms are compared by the corrected information criterion (Hurvich and Tsai
1989). numpy only.
"""

from dataclasses import dataclass

import numpy as np

_STEPS = np.concatenate([[0.0], np.logspace(-8, 0.75, 36)])


@dataclass(frozen=True)
class Fit:
    """A fitted linear form.

    coefficients (k,), covariance (k, k) including the truncation noise; residuals (n,) = y - X c; tau the size of the
    truncation noise; criterion the corrected information criterion (inf where there are too few data to compare);
    operator (k, n): coefficients = operator @ y, so that other series can be fitted in exactly the same way.
    """

    coefficients: np.ndarray
    covariance: np.ndarray
    residuals: np.ndarray
    tau: float
    criterion: float
    operator: np.ndarray
    freedom: int

    @property
    def errors(self) -> np.ndarray:
        return np.sqrt(np.diag(self.covariance))


def fit(columns, y, sigma, shape, least=0.0) -> Fit:
    """Fit y (n,) by columns (n, k) with standard deviations sigma (n,) > 0 and truncation noise of the given shape
    (n,).

    `least` is the smallest tau to assume. Needs n > k: ValueError.
    """
    columns, y = np.asarray(columns, float), np.asarray(y, float)
    n, k = columns.shape
    if n <= k:
        raise ValueError(f"{n} values cannot determine {k} coefficients with an error")
    norms = np.linalg.norm(columns / shape[:, None], axis=0)
    norms[norms == 0] = 1.0
    scaled = columns / norms
    residuals = _residuals(scaled, y, 1 / shape)
    largest = np.sqrt(np.sum((residuals / shape) ** 2) / (n - k))
    taus = largest * _STEPS
    variance = sigma**2 + (taus[:, None] * shape) ** 2
    restricted, plain = _likelihoods(scaled, y, variance)
    tau = max(taus[np.argmin(restricted)], least)
    best = np.argmin(plain)
    # tau counts as a parameter only where it matters beside the stated errors
    counted = k + int(np.any(taus[best] * shape > 0.3 * sigma))
    spare = n - counted - 1
    criterion = plain[best] + 2 * counted + 2 * counted * (counted + 1) / spare if spare > 0 else np.inf
    weights = 1 / np.sqrt(sigma**2 + (tau * shape) ** 2)
    q, r = np.linalg.qr(scaled * weights[:, None])
    inverse = np.linalg.solve(r, np.eye(k))
    operator = (inverse @ q.T) * weights / norms[:, None]
    covariance = inverse @ inverse.T / np.outer(norms, norms)
    coefficients = operator @ y
    return Fit(coefficients, covariance, y - columns @ coefficients, float(tau), float(criterion), operator, n - k)


def _residuals(columns, y, weights):
    c, *_ = np.linalg.lstsq(columns * weights[:, None], y * weights, rcond=None)
    return y - columns @ c


def _likelihoods(columns, y, variance):
    """-2 ln of the restricted and of the plain likelihood, for a batch of variances (m, n)."""
    weights = 1 / np.sqrt(variance)
    q, r = np.linalg.qr(columns * weights[..., None])
    wy = y * weights
    rest = wy - np.einsum("mnk,mk->mn", q, np.einsum("mnk,mn->mk", q, wy))
    square = np.sum(rest**2, axis=-1)
    plain = np.sum(np.log(2 * np.pi * variance), axis=-1) + square
    diagonal = np.abs(np.diagonal(r, axis1=-2, axis2=-1))
    restricted = plain + 2 * np.sum(np.log(np.maximum(diagonal, 1e-300)), axis=-1)
    return restricted, plain
