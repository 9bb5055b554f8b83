"""The semidefinite relaxation of a quadratic function on a product of spheres, in low-rank form.

x x^T is replaced by a positive semidefinite matrix Y Y^T whose diagonal block at each site has trace one: Y has r
columns and one row per site (isotropic couplings; then row i is a unit vector of r components) or three. The minimum
over Y is the dual bound with the best multipliers, L_i = <Y_i, (M Y)_i> (Burer and Monteiro 2003, Math. Program. 95,
329; no spurious minima once r(r+1)/2 exceeds the number of sites: Boumal, Voroninski, Bandeira 2016, arXiv:1606.04970).
The bound is computed from the multipliers alone (multipliers.py), so it holds however well the search for Y has
converged.
"""

import math
from dataclasses import dataclass

import numpy as np
import scipy.sparse as sp

from manybody.classical import polish
from manybody.classical.multipliers import DualForm
from manybody.classical.sphere_product import normalized


@dataclass(frozen=True)
class Relaxation:
    """energy: value of the relaxation at Y; multipliers (sites,); factor Y (sites * rows, r), principal columns first.

    rank: columns whose weight exceeds 1e-4 of the first; gradient: largest tangential gradient at a site.
    """

    energy: float
    multipliers: np.ndarray
    factor: np.ndarray
    rank: int
    gradient: float


def relax(
    form: DualForm,
    generator: np.random.Generator,
    start: np.ndarray | None = None,
    columns: int | None = None,
    sweeps: int = 3000,
    accuracy: float = 1e-9,
) -> Relaxation:
    """Minimize the relaxation. start: a configuration (N, 3) to begin from, turned a little in random directions.

    accuracy: wanted largest tangential gradient at a site relative to the largest row of the couplings.
    """
    from manybody.classical.relaxed_sweeps import sweep

    rows, sites = form.rows, form.sites
    # more columns than the solution has rank make the minimum degenerate and slow to reach; few sites need few
    enough = math.ceil((math.sqrt(8 * sites + 1) + 1) / 2)
    r = columns or min(enough + 1, 16 if rows == 1 else 10)
    y = generator.standard_normal((sites * rows, r))
    if start is not None:
        y *= 0.2
        first = start.reshape(-1, 3) if rows == 1 else start.reshape(-1, 1)
        y[: len(first), : first.shape[1]] += first[:, :r]
    if form.homogenized:
        y[-rows:] = 0.0
        y[-rows, 0] = 1.0
    y = _unit(y, sites)
    matrix = form.matrix
    shifted = sp.csr_array(matrix - sp.diags_array(np.repeat(_largest_on_site(matrix, rows), rows)))
    scale = float(abs(matrix).sum(axis=1).max())
    for k in range(sweeps):
        omega = 1.0 if k < 10 else 1.8
        if sweep(y, rows, shifted.indptr, shifted.indices, shifted.data, omega) < 1e-6:
            break

    def value_and_gradient(z):
        flat = z[0].reshape(sites * rows, r)
        product = (matrix @ flat).reshape(z.shape)
        along = np.sum(product * z, axis=-1, keepdims=True)
        return 0.5 * np.sum(along, axis=(1, 2)), product - along * z

    def hessian_product(z, v):
        flat = (matrix @ z[0].reshape(sites * rows, r)).reshape(z.shape)
        along = np.sum(flat * z, axis=-1, keepdims=True)
        product = (matrix @ v[0].reshape(sites * rows, r)).reshape(z.shape)
        return product - np.sum(product * z, axis=-1, keepdims=True) * z - along * v

    z = y.reshape(1, sites, rows * r)
    z = polish.quasi_newton(value_and_gradient, z, 1e-6 * scale, 400, scale, memory=12).configurations
    done = polish.truncated_newton(value_and_gradient, hessian_product, z, accuracy * scale, scale, outer=12, inner=250)
    z = done.configurations
    product = (matrix @ z[0].reshape(sites * rows, r)).reshape(sites, rows * r)
    multipliers = np.sum(product * z[0], axis=-1)
    y = z[0].reshape(sites * rows, r)
    _, weights, turn = np.linalg.svd(y, full_matrices=False)
    return Relaxation(
        energy=form.constant + float(done.values[0]),
        multipliers=multipliers,
        factor=y @ turn.T,
        rank=int(np.sum(weights > 1e-4 * weights[0])),
        gradient=float(done.gradients[0]),
    )


def rounded(form: DualForm, solution: Relaxation, generator: np.random.Generator, count: int) -> np.ndarray:
    """(count, N, 3) configurations: the principal part of Y first, then random projections of it (Goemans and
    Williamson 1995).
    """
    y = solution.factor
    starts = []
    for k in range(count):
        if form.rows == 1:
            turn = np.eye(y.shape[1], 3) if k == 0 else generator.standard_normal((y.shape[1], 3))
            n = y @ turn
        else:
            turn = np.eye(y.shape[1], 1)[:, 0] if k == 0 else generator.standard_normal(y.shape[1])
            n = (y @ turn).reshape(-1, 3)
        if form.homogenized:
            n = n[:-1] * (1.0 if n[-1, 0] >= 0 else -1.0)
        starts.append(n)
    n = np.array(starts)
    return normalized(n + 1e-3 * generator.standard_normal(n.shape) * np.abs(n).max(axis=(1, 2), keepdims=True))


def _unit(y: np.ndarray, sites: int) -> np.ndarray:
    return normalized(y.reshape(sites, -1)).reshape(y.shape) if y.shape[1] else y


def _largest_on_site(matrix: sp.csr_array, rows: int) -> np.ndarray:
    """Largest eigenvalue of every on-site block."""
    if rows == 1:
        return matrix.diagonal()
    blocks = sp.bsr_array(matrix, blocksize=(3, 3))
    row = np.repeat(np.arange(blocks.shape[0] // 3), np.diff(blocks.indptr))
    own = row == blocks.indices
    largest = np.zeros(blocks.shape[0] // 3)
    largest[row[own]] = np.linalg.eigvalsh(blocks.data[own])[:, -1]
    return largest
