"""Telling minima apart: two configurations are one minimum when a rotation that leaves f unchanged carries one into the
other.
"""

import numpy as np

from manybody.model.energy import EnergyFunction


def coupled_sites(f: EnergyFunction) -> np.ndarray:
    """(N,) bool: whether f depends on the vector at the site."""
    touched = np.zeros(f.sites, dtype=bool)
    for group in f.groups:
        for slot, rank in enumerate(group.ranks):
            if rank:
                touched[group.sites[:, slot]] = True
    return touched


class Comparison:
    """Distances between configurations modulo the common rotations of every connected cluster that f allows.

    Only rotations about `f.symmetry_axes()` count, applied to each cluster of connected sites by itself; permutations
    of sites and reflections do not. Sites on which f does not depend are left out.
    """

    def __init__(self, f: EnergyFunction):
        self.axes = f.symmetry_axes()
        touched = coupled_sites(f)
        self.size = max(int(touched.sum()), 1)
        if len(self.axes):
            self.clusters = [cluster for cluster in f.components() if touched[cluster[0]]]
        else:
            self.clusters = [np.flatnonzero(touched)]

    def distance(self, one: np.ndarray, many: np.ndarray) -> np.ndarray:
        """Root mean square over the sites of |one_i - R many_i|, R the best allowed rotation: one (N, 3), many (P, N,
        3) -> (P,).
        """
        total = np.zeros(len(many))
        for cluster in self.clusters:
            # |a - R b|^2 summed = 2 (sites - tr(R C)), C = sum b a^T
            a, b = one[cluster], many[:, cluster]
            overlap = np.einsum("pia,ib->pab", b, a)
            total += 2.0 * np.maximum(len(cluster) - self._best(overlap), 0.0)
        return np.sqrt(total / self.size)

    def _best(self, overlap: np.ndarray) -> np.ndarray:
        """Largest tr(R C) over the allowed rotations R, for overlaps C (P, 3, 3)."""
        if len(self.axes) == 3:
            # Kabsch 1976, Acta Cryst. A 32, 922: proper rotations, so the last singular value takes the sign of the
            # determinant
            singular = np.linalg.svd(overlap, compute_uv=False)
            return singular[:, 0] + singular[:, 1] + np.where(np.linalg.det(overlap) < 0, -1, 1) * singular[:, 2]
        trace = np.trace(overlap, axis1=1, axis2=2)
        if len(self.axes) == 0:
            return trace
        axis = self.axes[0]
        along = np.einsum("a,pab,b->p", axis, overlap, axis)
        turn = np.einsum("abc,pab,c->p", _LEVI_CIVITA, overlap, axis)
        return along + np.hypot(trace - along, turn)


_LEVI_CIVITA = np.array(
    [[[0, 0, 0], [0, 0, 1], [0, -1, 0]], [[0, 0, -1], [0, 0, 0], [1, 0, 0]], [[0, 1, 0], [-1, 0, 0], [0, 0, 0]]]
)
