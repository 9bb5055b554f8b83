"""A quadratic energy function as a sparse matrix of site blocks, the form the compiled sweeps work on.

f(x) = constant + 1/2 sum_ij x_i^T M_ij x_j - sum_i h_i.x_i

When every M_ij (i != j) is a multiple of the identity and every diagonal block too, the form is `isotropic`: it keeps
one number per pair, and the same matrix acts on vectors with any number of components. The diagonal multiple then is a
constant on the sphere and moves into `constant`.
"""

from dataclasses import dataclass

import numpy as np
import scipy.sparse as sp


@dataclass(frozen=True)
class SiteForm:
    """Row i holds neighbours[indptr[i]:indptr[i+1]] with `weights` (isotropic) or `blocks`; `diagonal` (N, 3, 3) or (0,
    3, 3).
    """

    indptr: np.ndarray  # (N+1,) int64
    neighbours: np.ndarray  # (nnz,) uint32: unsigned indices spare the compiled loops a sign test
    weights: np.ndarray  # (nnz,) or (0,)
    blocks: np.ndarray  # (nnz, 3, 3) or (0, 3, 3)
    diagonal: np.ndarray  # (N, 3, 3) or (0, 3, 3)
    field: np.ndarray  # (N, 3) or (0, 3) where there is none
    constant: float
    isotropic: bool

    @property
    def sites(self) -> int:
        return len(self.indptr) - 1

    @property
    def arrays(self) -> tuple:
        return self.indptr, self.neighbours, self.weights, self.blocks, self.diagonal, self.field

    def strength(self) -> float:
        """Largest over the sites of the sum of the coupling norms and the field at that site: bounds
        every local field.
        """
        if self.isotropic:
            size = np.abs(self.weights)
        else:
            size = np.sqrt(np.einsum("kab,kab->k", self.blocks, self.blocks))
        total = np.bincount(self._rows(), size, self.sites).astype(float)
        if len(self.diagonal):
            total += np.linalg.norm(self.diagonal, axis=(1, 2))
        if len(self.field):
            total += np.linalg.norm(self.field, axis=1)
        return float(total.max(initial=0.0))

    def _rows(self) -> np.ndarray:
        return np.repeat(np.arange(self.sites), np.diff(self.indptr))

    def matrix(self) -> sp.csr_array:
        """Isotropic: the N x N matrix of the pair couplings; otherwise the 3N x 3N matrix M."""
        if self.isotropic:
            return sp.csr_array((self.weights, self.neighbours, self.indptr), shape=(self.sites, self.sites))
        dimension = 3 * self.sites
        matrix = sp.bsr_array((self.blocks, self.neighbours, self.indptr), shape=(dimension, dimension)).tocsr()
        if len(self.diagonal):
            matrix = matrix + sp.block_diag(list(self.diagonal), format="csr")
        return sp.csr_array(matrix)


def site_form(matrix, field: np.ndarray, constant: float, tolerance: float = 0.0) -> SiteForm:
    """The site form of M (3N x 3N sparse symmetric), h (3N,) and c.

    Blocks whose deviation from a multiple of the identity is at most `tolerance` (absolute) count as isotropic.
    """
    blocks = sp.bsr_array(sp.csr_array(matrix), blocksize=(3, 3))
    blocks.sort_indices()
    sites = blocks.shape[0] // 3
    row = np.repeat(np.arange(sites, dtype=np.int32), np.diff(blocks.indptr))
    on_site = row == blocks.indices
    diagonal = np.zeros((0, 3, 3))
    if on_site.any():
        diagonal = np.zeros((sites, 3, 3))
        diagonal[row[on_site]] = blocks.data[on_site]
        pairs = ~on_site
        indptr = np.concatenate([[0], np.cumsum(np.bincount(row[pairs], minlength=sites))])
        neighbours, data = blocks.indices[pairs], blocks.data[pairs]
    else:
        indptr, neighbours, data = blocks.indptr, blocks.indices, blocks.data
    shift, rest = _identity_part(diagonal)
    constant = constant + 0.5 * float(shift.sum())
    diagonal = rest if np.max(np.abs(rest), initial=0.0) > tolerance else np.zeros((0, 3, 3))
    weights = data[:, 0, 0]
    isotropic = not len(diagonal) and all(
        np.max(np.abs(data[:, a, b] - (weights if a == b else 0.0)), initial=0.0) <= tolerance
        for a in range(3)
        for b in range(3)
    )
    h = np.asarray(field, dtype=float).reshape(sites, 3)
    return SiteForm(
        indptr=np.ascontiguousarray(indptr, dtype=np.int64),
        neighbours=np.ascontiguousarray(neighbours, dtype=np.uint32),
        weights=np.ascontiguousarray(weights) if isotropic else np.zeros(0),
        blocks=np.zeros((0, 3, 3)) if isotropic else np.ascontiguousarray(data),
        diagonal=np.ascontiguousarray(diagonal),
        field=np.ascontiguousarray(h) if h.any() else np.zeros((0, 3)),
        constant=float(constant),
        isotropic=isotropic,
    )


def _identity_part(blocks: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    shift = np.trace(blocks, axis1=1, axis2=2) / 3
    return shift, blocks - shift[:, None, None] * np.eye(3)
