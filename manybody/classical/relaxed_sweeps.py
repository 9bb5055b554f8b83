"""Compiled alignment sweeps for the low-rank form of the semidefinite relaxation."""

import numpy as np
from numba import njit


@njit(cache=True, fastmath={"contract", "reassoc"})
def sweep(y, rows, indptr, indices, data, omega):
    """One pass over the sites, in place: the rows of a site (`rows` of them, 1 or 3) move towards - M y and keep unit
    Frobenius norm.

    y: (sites * rows, r); M: CSR, its on-site blocks negative semidefinite; 0 < omega < 2. Returns the largest change of
    a site.
    """
    r = y.shape[1]
    g = np.empty((rows, r))
    worst = 0.0
    for site in range(len(y) // rows):
        square = 0.0
        for a in range(rows):
            row = site * rows + a
            for c in range(r):
                g[a, c] = 0.0
            for k in range(indptr[row], indptr[row + 1]):
                j = indices[k]
                w = data[k]
                for c in range(r):
                    g[a, c] += w * y[j, c]
            for c in range(r):
                square += g[a, c] * g[a, c]
        if square < 1e-40:
            continue
        factor = -omega / np.sqrt(square)
        norm = 0.0
        for a in range(rows):
            for c in range(r):
                g[a, c] = (1.0 - omega) * y[site * rows + a, c] + factor * g[a, c]
                norm += g[a, c] * g[a, c]
        if norm < 1e-20:
            continue
        norm = 1.0 / np.sqrt(norm)
        change = 0.0
        for a in range(rows):
            for c in range(r):
                v = g[a, c] * norm
                change += (v - y[site * rows + a, c]) ** 2
                y[site * rows + a, c] = v
        worst = max(worst, change)
    return np.sqrt(worst)
