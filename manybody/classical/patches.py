"""Long waves of large systems: patches of sites that turn as a whole.

A Newton step on 10^6 sites takes conjugate gradients thousands of products, since slow twists of the configuration are
soft. Common rotations of patches of about a hundred sites span these twists. The Hessian restricted to them is small
enough to be factorized; its inverse plus a multiple of the identity on the single sites is the preconditioner, with
which the number of products no longer grows with the system (two-level additive preconditioner by aggregation:
Nicolaides 1987, SIAM J. Numer. Anal. 24, 355, from memory).
"""

import numpy as np
import scipy.sparse as sp
from numba import njit
from scipy.sparse.linalg import splu

from manybody.classical.surfaces import Surface
from manybody.classical.vector_sweeps import descend, gradient, hessian_product, retract

BALL = 400  # sites around the centre of a patch that are no centres themselves
MOST_PRODUCTS = 400  # of one Newton step
REFRESH = 20  # Hessian products that take as long as a new preconditioner
DAMPING = 0.1  # times the largest gradient: away from a minimum even common rotations have some negative curvature
SWEEPS = 3  # of alignment after every step: they remove what a step along soft modes leaves in the stiff ones


@njit(cache=True)
def patches(indptr, neighbours, ball_sites):
    """Patch number of every site (N,), and their count: no centre is among the first `ball_sites` sites that a
    breadth-first walk from an earlier one meets, and every site goes to the centre nearest along the bonds.
    """
    n = len(indptr) - 1
    covered = np.zeros(n, dtype=np.bool_)
    mark = np.full(n, -1, dtype=np.int64)
    label = np.full(n, -1, dtype=np.int64)
    queue = np.empty(n, dtype=np.int64)
    ball = np.empty(ball_sites, dtype=np.int64)
    count = 0
    for i in range(n):
        if covered[i]:
            continue
        label[i] = count
        queue[count] = i
        count += 1
        ball[0] = i
        mark[i] = i
        covered[i] = True
        head, tail = 0, 1
        while head < tail:
            for k in range(indptr[ball[head]], indptr[ball[head] + 1]):
                j = np.int64(neighbours[k])
                if mark[j] != i and tail < ball_sites:
                    mark[j] = i
                    covered[j] = True
                    ball[tail] = j
                    tail += 1
            head += 1
    head, tail = 0, count
    while head < tail:
        i = queue[head]
        head += 1
        for k in range(indptr[i], indptr[i + 1]):
            j = np.int64(neighbours[k])
            if label[j] < 0:
                label[j] = label[i]
                queue[tail] = j
                tail += 1
    return label, count


@njit(cache=True)
def _restricted(x, label, indptr, neighbours, weights, blocks, diagonal, multipliers, rows, columns, data):
    """Adds (n_i x)^T (M - L)_ij (n_j x) into data[(patch of i, patch of j)]; rows and columns are its CSR pattern."""
    middle = np.empty((3, 3))
    for i in range(len(x)):
        a = label[i]
        for k in range(indptr[i] - 1, indptr[i + 1]):
            own = k < indptr[i]  # the site itself
            j = i if own else np.int64(neighbours[k])
            # number by number: whole arrays take numba ten times as long to compile
            for c in range(3):
                for d in range(3):
                    if own:
                        middle[c, d] = diagonal[i, c, d] if len(diagonal) else 0.0
                    else:
                        middle[c, d] = blocks[k, c, d] if len(blocks) else 0.0
                if own:
                    middle[c, c] -= multipliers[i]
                elif not len(blocks):
                    middle[c, c] = weights[k]
            place, end = np.int64(rows[a]), np.int64(rows[a + 1])
            while end - place > 1:
                half = (place + end) // 2
                if columns[half] <= label[j]:
                    place = half
                else:
                    end = half
            for s in range(3):
                u, v = (s + 1) % 3, (s + 2) % 3
                for t in range(3):
                    p, q = (t + 1) % 3, (t + 2) % 3
                    # column s of the rotations is e_s x n: component v holds n_u, component u holds -n_v
                    data[place, s, t] += x[i, u] * (x[j, p] * middle[v, q] - x[j, q] * middle[v, p]) - x[i, v] * (
                        x[j, p] * middle[u, q] - x[j, q] * middle[u, p]
                    )


@njit(cache=True)
def _torques(x, label, v, out):
    out[:] = 0.0
    for i in range(len(x)):
        a = label[i]
        out[a, 0] += x[i, 1] * v[i, 2] - x[i, 2] * v[i, 1]
        out[a, 1] += x[i, 2] * v[i, 0] - x[i, 0] * v[i, 2]
        out[a, 2] += x[i, 0] * v[i, 1] - x[i, 1] * v[i, 0]


@njit(cache=True)
def _turned(x, label, turns, v, single, out):
    """single_i v_i + turn x n_i; returns its product with v."""
    total = 0.0
    for i in range(len(x)):
        a = label[i]
        out[i, 0] = single[i] * v[i, 0] + turns[a, 1] * x[i, 2] - turns[a, 2] * x[i, 1]
        out[i, 1] = single[i] * v[i, 1] + turns[a, 2] * x[i, 0] - turns[a, 0] * x[i, 2]
        out[i, 2] = single[i] * v[i, 2] + turns[a, 0] * x[i, 1] - turns[a, 1] * x[i, 0]
        total += out[i, 0] * v[i, 0] + out[i, 1] * v[i, 1] + out[i, 2] * v[i, 2]
    return total


def _positive_factors(matrix: sp.csc_array):
    """Factorization of a symmetric matrix; None where pivots are not positive."""
    try:
        factors = splu(matrix, permc_spec="MMD_AT_PLUS_A", diag_pivot_thresh=0.0, options={"SymmetricMode": True})
    except RuntimeError:  # exactly singular
        return None
    return factors if (factors.U.diagonal() > 0).all() else None


class Patches:
    """The patches of one coupling graph (arrays as in vector_sweeps.py); `preconditioner` suits one configuration."""

    def __init__(self, indptr, neighbours, weights, blocks, diagonal, ball=BALL):
        self.arrays = (indptr, neighbours, weights, blocks, diagonal)
        self.label, self.count = patches(indptr, neighbours, ball)
        sites = len(indptr) - 1
        self.size = sites / self.count
        member = sp.csr_array((np.ones(sites, dtype=np.int32), self.label, np.arange(sites + 1)))
        graph = sp.csr_array((np.ones(len(neighbours), dtype=np.int32), neighbours, indptr), shape=(sites, sites))
        pattern = sp.csr_array(member.T @ (graph @ member) + sp.eye_array(self.count, dtype=np.int32))
        pattern.sort_indices()
        self.rows, self.columns = pattern.indptr, pattern.indices

    def preconditioner(self, x, multipliers, scale: float, stiffness: float = 1e-9, surface: Surface | None = None):
        """apply(v (N, 3), out (N, 3)) -> v.out, symmetric and positive; `stiffness` times the scale is added to the
        Hessian.
        """
        data = np.zeros((len(self.columns), 3, 3))
        _restricted(x, self.label, *self.arrays, multipliers, self.rows, self.columns, data)
        size = 3 * self.count
        coarse = sp.bsr_array((data, self.columns, self.rows), shape=(size, size)).tocsc()
        while True:  # ends at the latest where the stiffness exceeds the norm
            # common rotations, and those about the axis of a collinear patch, cost nothing; away from a minimum soft
            # twists may even have negative stiffness: some is added until all are stable
            shifted = sp.csc_array(coarse + stiffness * scale * self.size * sp.eye_array(size))
            factors = _positive_factors(shifted)
            if factors is not None:
                break
            stiffness *= 10.0
        torques = np.empty((self.count, 3))
        # a site alone feels the stiffness -multiplier
        single = 1.0 / np.maximum(-multipliers, 0.05 * scale)

        add = None
        if surface is not None and surface.size:
            add = surface.solver(x, multipliers, stiffness * scale, _positive_factors)

        def apply(v, out):
            _torques(x, self.label, v, torques)
            total = _turned(x, self.label, factors.solve(torques.reshape(-1)).reshape(-1, 3), v, single, out)
            if add is not None:
                add(v, out)
                total = float(np.vdot(v, out))
            return total

        return apply


def direction(x, g, multipliers, arrays, apply, goal, most, scale, d, hp):
    """Preconditioned conjugate gradients for H d = -g into d until |residual|^2 <= goal |g|^2; returns (products,
    negative curvature met). In that case d is what was reached before, or -g preconditioned.
    """
    d[:] = 0.0
    r = -g
    z = np.empty_like(x)
    rz = apply(r, z)
    p = z.copy()
    wanted = goal * float(np.vdot(g, g))
    for spent in range(1, most + 1):
        curvature = hessian_product(x, p, *arrays, multipliers, hp)
        if curvature <= 1e-13 * scale * float(np.vdot(p, p)):
            if spent == 1:
                d += p * (0.5 / np.abs(p).max())
            return spent, True
        if _advance(d, r, rz / curvature, p, hp) <= wanted:
            return spent, False
        last, rz = rz, apply(r, z)
        _turn(p, rz / last, z)
    return most, False


@njit(cache=True, fastmath={"contract", "reassoc"})
def _advance(d, r, alpha, p, hp):
    """d + alpha p and r - alpha hp in place; returns |r|^2."""
    total = 0.0
    for i in range(len(p)):
        for a in range(3):
            d[i, a] += alpha * p[i, a]
            r[i, a] -= alpha * hp[i, a]
            total += r[i, a] * r[i, a]
    return total


@njit(cache=True)
def _turn(p, factor, z):
    for i in range(len(p)):
        for a in range(3):
            p[i, a] = z[i, a] + factor * p[i, a]


def newton(x, arrays, shifted, field, tolerance, slow, scale, outer, budget):
    """Damped truncated Newton steps with the preconditioner of patches and surfaces, in place, until the largest
    |gradient_i| is at most `tolerance`, or `budget` products are spent, or it is at most `slow`, shrinks by less than
    ten a step, and the energy has stopped falling; other arguments and the result (f - constant, largest |gradient_i|,
    products) as those of vector_sweeps.newton, `shifted` as that of vector_sweeps.descend.
    """
    patch, surface = Patches(*arrays), Surface(*arrays)
    g, d, work = (np.empty_like(x) for _ in range(3))
    multipliers = np.empty(len(x))
    energy, worst = gradient(x, *arrays, field, g, multipliers)
    products = 0
    for _ in range(outer):
        if worst <= tolerance or products >= budget:
            break
        damping = max(DAMPING * worst, 1e-12 * scale)
        apply = patch.preconditioner(x, multipliers, scale, damping / scale, surface)
        goal = max(1e-8, min(0.1, 10 * worst / scale))
        products += direction(x, g, multipliers - damping, arrays, apply, goal, MOST_PRODUCTS, scale, d, work)[0]
        products += REFRESH  # what the factorization costs, roughly
        slack = 1e-13 * (abs(energy) + scale)
        step, trial = 1.0, work
        for _ in range(20):
            retract(x, step, d, trial)
            descend(trial, *arrays[:4], shifted, field, 1.0, SWEEPS, 0.0)
            new_energy, new_worst = gradient(trial, *arrays, field, g, multipliers)
            if new_energy < energy - slack or (new_energy <= energy + slack and new_worst < 3.0 * worst):
                break
            step *= 0.35
        else:
            break  # rounding decides the differences by now
        x[:] = trial
        done = energy - new_energy <= 10 * slack and 0.1 * worst < new_worst <= slow
        energy, worst = new_energy, new_worst
        if done:
            break
    return energy, worst, products
