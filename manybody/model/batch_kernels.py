"""Compiled value and gradient of a quadratic function for a batch of configurations.

Configurations are taken eight at a time: their components are interleaved in a scratch array that stays in the first
cache, so that the sparse product runs over the eight with vector instructions, and everything else happens in the same
pass. Only this file of manybody/model needs numba; it is imported for large batches only.
"""

import numpy as np
from numba import njit

LANES = 8


@njit(cache=True, fastmath={"contract", "reassoc"})
def value_and_gradient(n, indptr, indices, data, linear, values, gradients):
    """values[r] = linear.x + x.M x / 2 and the tangential gradient for every configuration n[r] (N,
    3), x = n[r] flat.
    """
    batch, sites = n.shape[0], n.shape[1]
    flat = n.reshape(batch, 3 * sites)
    slopes = gradients.reshape(batch, 3 * sites)
    x = np.zeros((3 * sites, LANES))
    field = np.empty((3, LANES))
    along = np.empty(LANES)
    total = np.empty(LANES)
    for first in range(0, batch, LANES):
        lanes = min(LANES, batch - first)
        for row in range(3 * sites):
            for lane in range(lanes):
                x[row, lane] = flat[first + lane, row]
        total[:] = 0.0
        for i in range(sites):
            along[:] = 0.0
            for a in range(3):
                row = 3 * i + a
                s = field[a]
                s0 = s1 = s2 = s3 = s4 = s5 = s6 = s7 = 0.0
                for k in range(indptr[row], indptr[row + 1]):
                    j = np.uint64(indices[k])
                    w = data[k]
                    s0 += w * x[j, 0]
                    s1 += w * x[j, 1]
                    s2 += w * x[j, 2]
                    s3 += w * x[j, 3]
                    s4 += w * x[j, 4]
                    s5 += w * x[j, 5]
                    s6 += w * x[j, 6]
                    s7 += w * x[j, 7]
                s[0] = s0
                s[1] = s1
                s[2] = s2
                s[3] = s3
                s[4] = s4
                s[5] = s5
                s[6] = s6
                s[7] = s7
                constant = linear[row]
                for lane in range(LANES):
                    v = x[row, lane]
                    total[lane] += v * (0.5 * s[lane] + constant)
                    s[lane] += constant
                    along[lane] += v * s[lane]
            for a in range(3):
                row = 3 * i + a
                for lane in range(lanes):
                    slopes[first + lane, row] = field[a, lane] - along[lane] * x[row, lane]
        for lane in range(lanes):
            values[first + lane] = total[lane]
