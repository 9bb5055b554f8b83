"""Lower bounds of quadratic functions on a product of spheres from one multiplier per site.

With f = c + 1/2 x^T M x - h.x and any numbers L_i, every configuration satisfies

f(n) >= c + 1/2 [ sum_i L_i + (number of sites) * lambda ],      lambda <= smallest eigenvalue of M - L,

since |n_i| = 1. A field is homogenized: one more site holds a vector t of length one, and -h.n becomes -(h.n) t; then
the matrix is [[M, -h], [-h^T, 0]], and there is one more multiplier. The bound holds for any multipliers; those of the
relaxation (relaxation.py) are the best, those of a stationary point prove that point wherever the matrix is positive
semidefinite (Lyons and Kaplan 1960, Phys. Rev. 120, 1580, for the idea with site-dependent multipliers).
"""

import math
from dataclasses import dataclass

import numpy as np
import scipy.sparse as sp
from scipy.linalg import cholesky
from scipy.sparse.linalg import splu

from manybody.classical.site_form import SiteForm

ROUNDING = 2.0**-53
DENSE = 900  # matrix dimension up to which all eigenvalues are computed
FACTORIZED = 60_000  # matrix dimension up to which a sparse factorization is tried


@dataclass(frozen=True)
class DualForm:
    """The homogenized quadratic form: `matrix` over sites * rows rows, site i owning rows i * rows ... (i + 1) * rows -
    1.

    rows: 1 (isotropic, no field) or 3. homogenized: the last site is the vector t, in its first row; its other rows are
    empty.
    """

    matrix: sp.csr_array
    rows: int
    sites: int
    homogenized: bool
    constant: float

    @property
    def used(self) -> int:
        """Rows that count: the empty rows of the homogenizing site are left out."""
        return self.matrix.shape[0] - (2 if self.homogenized else 0)


def dual_form(form: SiteForm) -> DualForm:
    matrix = form.matrix()
    if not len(form.field):
        return DualForm(matrix, 1 if form.isotropic else 3, form.sites, False, form.constant)
    if form.isotropic:
        matrix = sp.kron(matrix, np.eye(3), format="csr")
    column = sp.csr_array(np.concatenate([form.field.reshape(-1), np.zeros(0)])[:, None])
    padding = sp.csr_array((3 * form.sites, 2))
    border = sp.hstack([-column, padding])
    matrix = sp.csr_array(sp.block_array([[matrix, border], [border.T, None]]))
    return DualForm(matrix, 3, form.sites + 1, True, form.constant)


def multipliers_at(form: DualForm, n: np.ndarray) -> np.ndarray:
    """L_i = n_i.(M n)_i of the homogenized form at a configuration n (N, 3); stationary exactly where (M - L) n = 0."""
    if form.homogenized:
        n = np.concatenate([n, [[1.0, 0.0, 0.0]]])
    if form.rows == 1:
        return np.einsum("ia,ia->i", n, form.matrix @ n)
    return np.einsum("ia,ia->i", n, (form.matrix @ n.reshape(-1)).reshape(-1, 3))


def dual_bound(form: DualForm, multipliers: np.ndarray) -> float | None:
    """The rigorous lower bound of f from the multipliers, rounding included; None where the matrix is too large to
    factorize.
    """
    shifted = sp.csr_array(form.matrix - sp.diags_array(np.repeat(multipliers, form.rows)))[: form.used, : form.used]
    lowest = eigenvalue_bound(shifted)
    if lowest is None:
        return None
    total = math.fsum(multipliers) + form.sites * lowest
    # forming M - L and the form itself are exact to a few units in the last place of every entry
    slack = 8 * ROUNDING * (float(np.abs(multipliers).sum()) + form.sites * _norm(shifted))
    return form.constant + 0.5 * (total - slack)


def eigenvalue_bound(matrix: sp.csr_array) -> float | None:
    """A number that is certainly not above the smallest eigenvalue of a symmetric matrix; None where it is too large.

    Gershgorin's circles where they show that it is not negative beyond rounding; all eigenvalues of a small matrix,
    with the backward error of the solver; else the smallest shift for which the pivots of a sparse triangular
    factorization without exchanges are all positive, with the rounding error of that factorization (Higham 2002,
    Accuracy and Stability of Numerical Algorithms, theorem 10.3).
    """
    size = matrix.shape[0]
    norm = _norm(matrix)
    if norm == 0.0:
        return 0.0
    diagonal = matrix.diagonal()
    radius = np.asarray(abs(matrix).sum(axis=1)).reshape(-1) - np.abs(diagonal)
    gershgorin = float((diagonal - radius).min())
    if gershgorin >= -1e-14 * norm:
        return gershgorin - 16 * ROUNDING * norm
    if size <= DENSE:
        return max(gershgorin, float(np.linalg.eigvalsh(matrix.toarray())[0]) - 4 * size * ROUNDING * norm)
    if size > FACTORIZED:
        return None
    return max(gershgorin, _by_factorization(matrix, norm, gershgorin))


def _by_factorization(matrix: sp.csr_array, norm: float, lowest: float) -> float:
    good, bad = None, 0.0
    shift = 1e-13 * norm
    while good is None:
        error = _positive_definite(matrix, shift)
        if error is not None:
            good = shift + error
        elif shift > -lowest:
            return lowest
        else:
            bad, shift = shift, shift * 10
    # geometric bisection: the bound loses sites / 2 times what the shift is too large
    for _ in range(8):
        if bad == 0.0 or good <= 1.15 * bad:
            break
        shift = math.sqrt(bad * good)
        error = _positive_definite(matrix, shift)
        if error is None:
            bad = shift
        else:
            good = min(good, shift + error)
            if shift + error >= good:
                break
    return -good


def _positive_definite(matrix: sp.csr_array, shift: float) -> float | None:
    """None unless matrix + shift factorizes with positive pivots; then a bound of the norm of the
    factorization error.
    """
    size = matrix.shape[0]
    if matrix.nnz > 0.15 * size**2:
        try:
            factor = np.abs(cholesky(matrix.toarray() + shift * np.eye(size), lower=True))
        except np.linalg.LinAlgError:
            return None
        return 2 * (size + 1) * ROUNDING * float((factor @ factor.sum(axis=0)).max())
    shifted = sp.csc_array(matrix + shift * sp.eye_array(size))
    try:
        factors = splu(
            shifted.astype(float), permc_spec="MMD_AT_PLUS_A", diag_pivot_thresh=0.0, options={"SymmetricMode": True}
        )
    except RuntimeError:  # exactly singular
        return None
    if not np.array_equal(factors.perm_r, factors.perm_c) or not (factors.U.diagonal() > 0).all():
        return None
    lower, upper = abs(factors.L), abs(factors.U)
    longest = int(np.diff(sp.csr_array(lower).indptr).max()) + 1
    return 2 * longest * ROUNDING * float((lower @ (upper @ np.ones(size))).max())


def _norm(matrix: sp.csr_array) -> float:
    """Largest absolute row sum, at least the spectral norm."""
    return float(np.asarray(abs(matrix).sum(axis=1)).max(initial=0.0))
