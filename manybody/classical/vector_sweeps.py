"""Compiled inner loops for quadratic functions of unit vectors: alignment sweeps and truncated Newton steps on one
configuration.

x is (N, 3). The form is passed as the arrays of `SiteForm`: pair numbers `weights` or 3 x 3 `blocks`, whichever is not
empty; `field` and `diagonal` may be empty. Sweeps treat the on-site block through `shift` (N,): at least its largest
eigenvalue per site. Subtracting shift_i |n_i|^2 / 2 changes f by a constant and makes it concave in each n_i, so that
aligning n_i against its local field never raises f (majorization by the tangent plane); without on-site blocks `shift`
is empty and alignment is the exact minimum over n_i.

`newton` itself is not compiled: its loop is short, and compiling it would take longer than anything else here.
Only this file and relaxed_sweeps.py need numba; they are imported where they are used.
"""

import numpy as np
from numba import njit

FAST = {"contract", "reassoc"}


@njit(cache=True, fastmath=FAST)
def product(x, indptr, neighbours, weights, blocks, diagonal, out):
    """M x into out. The branches stand outside the site loop: inside they cost several times the arithmetic."""
    n = len(x)
    if len(blocks) == 0:
        for i in range(n):
            s0 = 0.0
            s1 = 0.0
            s2 = 0.0
            for k in range(indptr[i], indptr[i + 1]):
                j = np.uint64(neighbours[k])
                w = weights[k]
                s0 += w * x[j, 0]
                s1 += w * x[j, 1]
                s2 += w * x[j, 2]
            out[i, 0] = s0
            out[i, 1] = s1
            out[i, 2] = s2
    else:
        for i in range(n):
            s0 = 0.0
            s1 = 0.0
            s2 = 0.0
            for k in range(indptr[i], indptr[i + 1]):
                j = np.uint64(neighbours[k])
                x0 = x[j, 0]
                x1 = x[j, 1]
                x2 = x[j, 2]
                s0 += blocks[k, 0, 0] * x0 + blocks[k, 0, 1] * x1 + blocks[k, 0, 2] * x2
                s1 += blocks[k, 1, 0] * x0 + blocks[k, 1, 1] * x1 + blocks[k, 1, 2] * x2
                s2 += blocks[k, 2, 0] * x0 + blocks[k, 2, 1] * x1 + blocks[k, 2, 2] * x2
            out[i, 0] = s0
            out[i, 1] = s1
            out[i, 2] = s2
    for i in range(len(diagonal)):
        x0 = x[i, 0]
        x1 = x[i, 1]
        x2 = x[i, 2]
        out[i, 0] += diagonal[i, 0, 0] * x0 + diagonal[i, 0, 1] * x1 + diagonal[i, 0, 2] * x2
        out[i, 1] += diagonal[i, 1, 0] * x0 + diagonal[i, 1, 1] * x1 + diagonal[i, 1, 2] * x2
        out[i, 2] += diagonal[i, 2, 0] * x0 + diagonal[i, 2, 1] * x1 + diagonal[i, 2, 2] * x2


@njit(cache=True, fastmath=FAST)
def _sweep_numbers(x, indptr, neighbours, weights, field, omega):
    """One sweep of `descend` for an isotropic form; `field` (N, 3) has a row for every site. Returns the square of the
    field met.
    """
    worst = 0.0
    for i in range(len(x)):
        g0 = -field[i, 0]
        g1 = -field[i, 1]
        g2 = -field[i, 2]
        for k in range(indptr[i], indptr[i + 1]):
            j = np.uint64(neighbours[k])
            w = weights[k]
            g0 += w * x[j, 0]
            g1 += w * x[j, 1]
            g2 += w * x[j, 2]
        x0 = x[i, 0]
        x1 = x[i, 1]
        x2 = x[i, 2]
        # the cross product keeps its relative accuracy where a difference of squares would not
        c0 = g1 * x2 - g2 * x1
        c1 = g2 * x0 - g0 * x2
        c2 = g0 * x1 - g1 * x0
        worst = max(worst, c0 * c0 + c1 * c1 + c2 * c2)
        square = g0 * g0 + g1 * g1 + g2 * g2
        if square > 1e-40:
            factor = -omega / np.sqrt(square)
            x0 = (1.0 - omega) * x0 + factor * g0
            x1 = (1.0 - omega) * x1 + factor * g1
            x2 = (1.0 - omega) * x2 + factor * g2
            square = x0 * x0 + x1 * x1 + x2 * x2
            if square > 1e-20:
                square = 1.0 / np.sqrt(square)
                x[i, 0] = x0 * square
                x[i, 1] = x1 * square
                x[i, 2] = x2 * square
    return worst


@njit(cache=True, fastmath=FAST)
def _sweep_blocks(x, indptr, neighbours, blocks, diagonal, field, omega):
    """One sweep for 3 x 3 blocks, with the on-site blocks already shifted to be negative semidefinite: both (N, ...) in
    full.
    """
    worst = 0.0
    for i in range(len(x)):
        x0 = x[i, 0]
        x1 = x[i, 1]
        x2 = x[i, 2]
        g0 = diagonal[i, 0, 0] * x0 + diagonal[i, 0, 1] * x1 + diagonal[i, 0, 2] * x2 - field[i, 0]
        g1 = diagonal[i, 1, 0] * x0 + diagonal[i, 1, 1] * x1 + diagonal[i, 1, 2] * x2 - field[i, 1]
        g2 = diagonal[i, 2, 0] * x0 + diagonal[i, 2, 1] * x1 + diagonal[i, 2, 2] * x2 - field[i, 2]
        for k in range(indptr[i], indptr[i + 1]):
            j = np.uint64(neighbours[k])
            y0 = x[j, 0]
            y1 = x[j, 1]
            y2 = x[j, 2]
            g0 += blocks[k, 0, 0] * y0 + blocks[k, 0, 1] * y1 + blocks[k, 0, 2] * y2
            g1 += blocks[k, 1, 0] * y0 + blocks[k, 1, 1] * y1 + blocks[k, 1, 2] * y2
            g2 += blocks[k, 2, 0] * y0 + blocks[k, 2, 1] * y1 + blocks[k, 2, 2] * y2
        c0 = g1 * x2 - g2 * x1
        c1 = g2 * x0 - g0 * x2
        c2 = g0 * x1 - g1 * x0
        worst = max(worst, c0 * c0 + c1 * c1 + c2 * c2)
        square = g0 * g0 + g1 * g1 + g2 * g2
        if square > 1e-40:
            factor = -omega / np.sqrt(square)
            x0 = (1.0 - omega) * x0 + factor * g0
            x1 = (1.0 - omega) * x1 + factor * g1
            x2 = (1.0 - omega) * x2 + factor * g2
            square = x0 * x0 + x1 * x1 + x2 * x2
            if square > 1e-20:
                square = 1.0 / np.sqrt(square)
                x[i, 0] = x0 * square
                x[i, 1] = x1 * square
                x[i, 2] = x2 * square
    return worst


@njit(cache=True)
def descend(x, indptr, neighbours, weights, blocks, shifted, field, omega, sweeps, goal):
    """Sweeps x_i <- unit vector along x_i + omega (aligned_i - x_i), in place, 0 < omega < 2.

    `aligned` is the unit vector against the local field (over-relaxation beyond omega = 1; no step raises the energy).
    Here `field` has N rows, and `shifted` too unless the form is isotropic. Stops when the largest tangential field met
    in a sweep is at most `goal`. Returns (that field, sweeps spent).
    """
    worst = 0.0
    for spent in range(sweeps):
        if len(shifted) == 0:
            worst = np.sqrt(_sweep_numbers(x, indptr, neighbours, weights, field, omega))
        else:
            worst = np.sqrt(_sweep_blocks(x, indptr, neighbours, blocks, shifted, field, omega))
        if worst <= goal:
            return worst, spent + 1
    return worst, sweeps


@njit(cache=True, fastmath=FAST)
def place(x, order, indptr, neighbours, weights, blocks, field):
    """Sites in the given order, each against the field of those before it; x (N, 3) holds directions for sites that
    feel none.

    Exact for couplings without frustration when `order` walks along the bonds.
    """
    n = len(x)
    placed = np.zeros(n, dtype=np.bool_)
    isotropic = len(blocks) == 0
    for i in order:
        g0 = -field[i, 0]
        g1 = -field[i, 1]
        g2 = -field[i, 2]
        for k in range(indptr[i], indptr[i + 1]):
            j = neighbours[k]
            if placed[j]:
                if isotropic:
                    g0 += weights[k] * x[j, 0]
                    g1 += weights[k] * x[j, 1]
                    g2 += weights[k] * x[j, 2]
                else:
                    for c in range(3):
                        g0 += blocks[k, 0, c] * x[j, c]
                        g1 += blocks[k, 1, c] * x[j, c]
                        g2 += blocks[k, 2, c] * x[j, c]
        square = g0 * g0 + g1 * g1 + g2 * g2
        if square > 1e-24:
            square = 1.0 / np.sqrt(square)
            x[i, 0] = -g0 * square
            x[i, 1] = -g1 * square
            x[i, 2] = -g2 * square
        placed[i] = True


@njit(cache=True, fastmath=FAST)
def filter_step(now, before, indptr, neighbours, weights, blocks, diagonal, centre, factor, out):
    """before <- factor (M - centre) now - before, one step of the Chebyshev recursion."""
    product(now, indptr, neighbours, weights, blocks, diagonal, out)
    for i in range(len(now)):
        for a in range(3):
            before[i, a] = factor * (out[i, a] - centre * now[i, a]) - before[i, a]


@njit(cache=True, fastmath=FAST)
def gradient(x, indptr, neighbours, weights, blocks, diagonal, field, g, multipliers):
    """Tangential gradient into g, x_i.(M x - h)_i into multipliers; returns (f - constant, largest |g_i|). `field` has
    N rows.
    """
    product(x, indptr, neighbours, weights, blocks, diagonal, g)
    energy = 0.0
    worst = 0.0
    for i in range(len(x)):
        x0 = x[i, 0]
        x1 = x[i, 1]
        x2 = x[i, 2]
        pair = g[i, 0] * x0 + g[i, 1] * x1 + g[i, 2] * x2
        linear = field[i, 0] * x0 + field[i, 1] * x1 + field[i, 2] * x2
        along = pair - linear
        energy += 0.5 * pair - linear
        multipliers[i] = along
        g0 = g[i, 0] - field[i, 0] - along * x0
        g1 = g[i, 1] - field[i, 1] - along * x1
        g2 = g[i, 2] - field[i, 2] - along * x2
        g[i, 0] = g0
        g[i, 1] = g1
        g[i, 2] = g2
        worst = max(worst, g0 * g0 + g1 * g1 + g2 * g2)
    return energy, np.sqrt(worst)


@njit(cache=True, fastmath=FAST)
def hessian_product(x, v, indptr, neighbours, weights, blocks, diagonal, multipliers, out):
    """Riemannian Hessian times the tangent vector v into out; returns v.Hv."""
    total = 0.0
    if len(blocks) == 0 and len(diagonal) == 0:  # one pass: memory is what takes time on large systems
        for i in range(len(x)):
            s0 = 0.0
            s1 = 0.0
            s2 = 0.0
            for k in range(indptr[i], indptr[i + 1]):
                j = np.uint64(neighbours[k])
                w = weights[k]
                s0 += w * v[j, 0]
                s1 += w * v[j, 1]
                s2 += w * v[j, 2]
            x0 = x[i, 0]
            x1 = x[i, 1]
            x2 = x[i, 2]
            v0 = v[i, 0]
            v1 = v[i, 1]
            v2 = v[i, 2]
            along = s0 * x0 + s1 * x1 + s2 * x2
            m = multipliers[i]
            g0 = s0 - along * x0 - m * v0
            g1 = s1 - along * x1 - m * v1
            g2 = s2 - along * x2 - m * v2
            out[i, 0] = g0
            out[i, 1] = g1
            out[i, 2] = g2
            total += g0 * v0 + g1 * v1 + g2 * v2
        return total
    product(v, indptr, neighbours, weights, blocks, diagonal, out)
    for i in range(len(x)):
        x0 = x[i, 0]
        x1 = x[i, 1]
        x2 = x[i, 2]
        v0 = v[i, 0]
        v1 = v[i, 1]
        v2 = v[i, 2]
        along = out[i, 0] * x0 + out[i, 1] * x1 + out[i, 2] * x2
        m = multipliers[i]
        g0 = out[i, 0] - along * x0 - m * v0
        g1 = out[i, 1] - along * x1 - m * v1
        g2 = out[i, 2] - along * x2 - m * v2
        out[i, 0] = g0
        out[i, 1] = g1
        out[i, 2] = g2
        total += g0 * v0 + g1 * v1 + g2 * v2
    return total


@njit(cache=True, fastmath=FAST)
def retract(x, step, d, out):
    for i in range(len(x)):
        x0 = x[i, 0] + step * d[i, 0]
        x1 = x[i, 1] + step * d[i, 1]
        x2 = x[i, 2] + step * d[i, 2]
        norm = 1.0 / np.sqrt(x0 * x0 + x1 * x1 + x2 * x2)
        out[i, 0] = x0 * norm
        out[i, 1] = x1 * norm
        out[i, 2] = x2 * norm


@njit(cache=True, fastmath=FAST)
def newton_direction(
    x, g, multipliers, indptr, neighbours, weights, blocks, diagonal, scale, goal, inner, d, r, p, p_rows, hp, hp_rows
):
    """Conjugate gradients for H d = -g until |residual|^2 <= goal |g|^2; returns (products, negative curvature met).

    g, d, r, p, hp are flat (3 N,); p_rows and hp_rows are the same memory as p and hp, (N, 3).
    """
    rr = 0.0
    for k in range(len(g)):
        d[k] = 0.0
        r[k] = -g[k]
        p[k] = -g[k]
        rr += g[k] * g[k]
    goal *= rr
    for spent in range(inner):
        curvature = hessian_product(x, p_rows, indptr, neighbours, weights, blocks, diagonal, multipliers, hp_rows)
        pp = 0.0
        for k in range(len(p)):
            pp += p[k] * p[k]
        if curvature <= 1e-13 * scale * pp:
            if spent > 0 and curvature >= -1e-9 * scale * pp:
                return spent + 1, False
            # about half a radian along the direction of negative curvature, downhill
            length = 0.0
            slope = 0.0
            for k in range(len(p)):
                length = max(length, abs(p[k]))
                slope += p[k] * g[k]
            length = -0.5 / length if slope > 0 else 0.5 / length
            for k in range(len(p)):
                d[k] += length * p[k]
            return spent + 1, True
        alpha = rr / curvature
        new = 0.0
        for k in range(len(p)):
            d[k] += alpha * p[k]
            r[k] -= alpha * hp[k]
            new += r[k] * r[k]
        if new <= goal:
            return spent + 1, False
        beta = new / rr
        rr = new
        for k in range(len(p)):
            p[k] = r[k] + beta * p[k]
    return inner, False


def newton(x, indptr, neighbours, weights, blocks, diagonal, field, tolerance, scale, outer, inner, budget):
    """Truncated Newton steps, in place, until the largest |gradient_i| is at most `tolerance`, or `budget` Hessian
    products are spent.

    Returns (f - constant, largest |gradient_i|, Hessian products). Directions of negative curvature are followed
    downhill. At minima of fourth order a Newton step covers a third of the way, so a threefold step is tried when
    convergence is slow.
    """
    g = np.empty_like(x)
    new_g = np.empty_like(x)
    trial = np.empty_like(x)
    d = np.empty_like(x)
    r = np.empty(x.size)
    p = np.empty_like(x)
    hp = np.empty_like(x)
    multipliers = np.empty(len(x))
    energy, worst = gradient(x, indptr, neighbours, weights, blocks, diagonal, field, g, multipliers)
    products = 0
    slow = False
    for _ in range(outer):
        if worst <= tolerance or products >= budget:
            break
        spent, negative = newton_direction(
            x, g.reshape(-1), multipliers, indptr, neighbours, weights, blocks, diagonal, scale,
            max(1e-8, min(0.01, worst / scale)), inner, d.reshape(-1), r, p.reshape(-1), p, hp.reshape(-1), hp,
        )  # fmt: skip
        products += spent
        slack = 1e-13 * (abs(energy) + scale)
        step = 3.0 if slow and not negative else 1.0
        accepted = False
        for _ in range(30):
            retract(x, step, d, trial)
            new_energy, new_worst = gradient(
                trial, indptr, neighbours, weights, blocks, diagonal, field, new_g, multipliers
            )
            lower = new_energy < energy - slack or (
                new_energy <= energy + slack
                and (new_worst < worst or negative or (step == 1.0 and new_worst < 3.0 * worst))
            )
            if lower and (step <= 1.0 or new_worst < 0.5 * worst):
                accepted = True
                break
            step = 1.0 if step > 1.0 else 0.35 * step
        if not accepted:
            break  # rounding decides the differences by now
        slow = new_worst > 0.2 * worst
        energy, worst = new_energy, new_worst
        x[:] = trial
        g[:] = new_g
    return energy, worst, products
