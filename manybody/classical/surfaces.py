"""Soft modes along the surfaces of large systems.

Sites with fewer or weaker bonds than most, as at open boundaries, have slow modes of their own, which no rotation of
patches describes. The Hessian of the layers next to them is factorized exactly and joins the preconditioner of
patches.py as one more additive part (overlapping Schwarz method: Dryja and Widlund 1987, from memory).
"""

import numpy as np
import scipy.sparse as sp

from manybody.classical.sphere_product import tangent_frames

LAYERS = 16  # next to a surface
MOST_SITES = 100_000  # factorized
SHARE = 0.05  # of all sites: more than this are no surface


class Surface:
    """The sites of `LAYERS` layers next to weakly coupled ones (arrays as in vector_sweeps.py); `size` 0 where there is
    no surface.
    """

    def __init__(self, indptr, neighbours, weights, blocks, diagonal):
        self.couplings, self.diagonal = blocks if len(blocks) else weights, diagonal
        count = len(indptr) - 1
        strength = np.abs(weights) if not len(blocks) else np.sqrt(np.einsum("kab,kab->k", blocks, blocks))
        strength = np.bincount(np.repeat(np.arange(count), np.diff(indptr)), strength, count)
        front = np.flatnonzero(strength < 0.999 * np.median(strength))
        self.size = 0
        if not 0 < len(front) <= SHARE * count:
            return
        numbers = sp.csr_array(
            (np.arange(len(neighbours)), neighbours.astype(np.int32), indptr.astype(np.int32)), shape=(count, count)
        )
        inside = np.zeros(count, dtype=bool)
        inside[front] = True
        for _ in range(LAYERS):
            near = np.unique(numbers[front].indices)
            front = near[~inside[near]]
            if np.count_nonzero(inside) + len(front) > MOST_SITES:
                break
            inside[front] = True
        self.sites = np.flatnonzero(inside)
        self.size = len(self.sites)
        among = sp.csr_array(numbers[self.sites][:, self.sites])
        self.places, self.columns, self.indptr = among.data, among.indices, among.indptr
        self.rows = np.repeat(np.arange(self.size), np.diff(among.indptr))

    def solver(self, x, multipliers, damping, factorize):
        """add(v (N, 3), out (N, 3)): adds the inverse of the surface's own Hessian, with `damping` on its diagonal or
        more until it is positive. factorize: matrix -> factors, None unless positive.
        """
        frames = np.stack(tangent_frames(x[self.sites]), axis=1)
        couplings = self.couplings[self.places]
        if couplings.ndim == 1:
            data = couplings[:, None, None] * (frames[self.rows] @ frames[self.columns].transpose(0, 2, 1))
        else:
            data = frames[self.rows] @ couplings @ frames[self.columns].transpose(0, 2, 1)
        own = -multipliers[self.sites][:, None, None] * np.eye(2)
        if len(self.diagonal):
            own = own + frames @ self.diagonal[self.sites] @ frames.transpose(0, 2, 1)
        shape = (2 * self.size, 2 * self.size)
        matrix = sp.csc_array(
            sp.bsr_array((data, self.columns, self.indptr), shape=shape)
            + sp.bsr_array((own, np.arange(self.size), np.arange(self.size + 1)), shape=shape)
        )
        while (factors := factorize(sp.csc_array(matrix + damping * sp.eye_array(shape[0])))) is None:
            damping *= 10.0

        def add(v, out):
            torque = np.einsum("iac,ic->ia", frames, v[self.sites]).reshape(-1)
            out[self.sites] += np.einsum("iac,ia->ic", frames, factors.solve(torque).reshape(-1, 2))

        return add
