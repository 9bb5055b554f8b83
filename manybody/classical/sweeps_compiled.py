"""Compiled inner loops for quadratic functions: local-field alignment sweeps and truncated Newton steps.

A configuration is an array (N, b, r): b = 1 for an isotropic form, whose pair numbers act on every one of the r components alike,
b = 3 for a general one, whose 3 x 3 blocks act on the first index. Each site has unit Frobenius norm. (N, 1, 3) and (N, 3, 1) are
configurations of unit vectors; more columns appear in the semidefinite relaxation. The field has the shape of a configuration or
none (length 0). `diagonal` is made negative semidefinite by subtracting a multiple of the identity per site (`shift`), which leaves
the function on the spheres unchanged up to a constant and makes every alignment step a descent step.

Only this file needs numba; import it where it is used.
"""

import numpy as np
from numba import njit


@njit(cache=True, fastmath={"contract", "reassoc"})
def _local_field(i, x, indptr, neighbours, weights, blocks, diagonal, field, out):
    """Row i of M x - h into out (b, r)."""
    b, r = x.shape[1], x.shape[2]
    if len(field):
        for a in range(b):
            for c in range(r):
                out[a, c] = -field[i, a, c]
    else:
        for a in range(b):
            for c in range(r):
                out[a, c] = 0.0
    if b == 1:
        if r == 3:
            s0 = 0.0
            s1 = 0.0
            s2 = 0.0
            for k in range(indptr[i], indptr[i + 1]):
                j = neighbours[k]
                w = weights[k]
                s0 += w * x[j, 0, 0]
                s1 += w * x[j, 0, 1]
                s2 += w * x[j, 0, 2]
            out[0, 0] += s0
            out[0, 1] += s1
            out[0, 2] += s2
        else:
            for k in range(indptr[i], indptr[i + 1]):
                j = neighbours[k]
                w = weights[k]
                for c in range(r):
                    out[0, c] += w * x[j, 0, c]
    else:
        for k in range(indptr[i], indptr[i + 1]):
            j = neighbours[k]
            for c in range(r):
                v0 = x[j, 0, c]
                v1 = x[j, 1, c]
                v2 = x[j, 2, c]
                out[0, c] += blocks[k, 0, 0] * v0 + blocks[k, 0, 1] * v1 + blocks[k, 0, 2] * v2
                out[1, c] += blocks[k, 1, 0] * v0 + blocks[k, 1, 1] * v1 + blocks[k, 1, 2] * v2
                out[2, c] += blocks[k, 2, 0] * v0 + blocks[k, 2, 1] * v1 + blocks[k, 2, 2] * v2
        if len(diagonal):
            for c in range(r):
                v0 = x[i, 0, c]
                v1 = x[i, 1, c]
                v2 = x[i, 2, c]
                for a in range(3):
                    out[a, c] += diagonal[i, a, 0] * v0 + diagonal[i, a, 1] * v1 + diagonal[i, a, 2] * v2


@njit(cache=True, fastmath={"contract", "reassoc"})
def sweep(x, indptr, neighbours, weights, blocks, diagonal, field, shift, omega):
    """One pass in site order: x_i <- unit vector along x_i + omega (aligned - x_i), in place, 0 < omega < 2.

    `aligned` is the unit vector against the local field. The energy never rises. Returns the largest tangential local field met.
    """
    n, b, r = x.shape
    out = np.empty((b, r))
    worst = 0.0
    for i in range(n):
        _local_field(i, x, indptr, neighbours, weights, blocks, diagonal, field, out)
        along = 0.0
        square = 0.0
        for a in range(b):
            for c in range(r):
                g = out[a, c]
                along += g * x[i, a, c]
                square += g * g
        tangential = square - along * along
        if tangential > worst:
            worst = tangential
        if len(shift):
            square = 0.0
            for a in range(b):
                for c in range(r):
                    out[a, c] -= shift[i] * x[i, a, c]
                    square += out[a, c] ** 2
        if square == 0.0:
            continue
        factor = -omega / np.sqrt(square)
        norm = 0.0
        for a in range(b):
            for c in range(r):
                v = (1.0 - omega) * x[i, a, c] + factor * out[a, c]
                out[a, c] = v
                norm += v * v
        if norm < 1e-20:
            continue
        norm = 1.0 / np.sqrt(norm)
        for a in range(b):
            for c in range(r):
                x[i, a, c] = out[a, c] * norm
    return np.sqrt(max(worst, 0.0))


@njit(cache=True, fastmath={"contract", "reassoc"})
def gradient(x, indptr, neighbours, weights, blocks, diagonal, field, g, multipliers):
    """Tangential gradient into g and x_i.(M x - h)_i into multipliers; returns (f - constant, largest |g_i|)."""
    n, b, r = x.shape
    energy = 0.0
    worst = 0.0
    for i in range(n):
        _local_field(i, x, indptr, neighbours, weights, blocks, diagonal, field, g[i])
        along = 0.0
        for a in range(b):
            for c in range(r):
                along += g[i, a, c] * x[i, a, c]
        multipliers[i] = along
        linear = 0.0
        if len(field):
            for a in range(b):
                for c in range(r):
                    linear += field[i, a, c] * x[i, a, c]
        energy += 0.5 * (along - linear)
        square = 0.0
        for a in range(b):
            for c in range(r):
                g[i, a, c] -= along * x[i, a, c]
                square += g[i, a, c] ** 2
        if square > worst:
            worst = square
    return energy, np.sqrt(worst)


@njit(cache=True, fastmath={"contract", "reassoc"})
def _hessian_product(x, v, indptr, neighbours, weights, blocks, diagonal, field, multipliers, out):
    """Riemannian Hessian times the tangent vector v; returns v.Hv."""
    n, b, r = x.shape
    total = 0.0
    none = field[:0]
    for i in range(n):
        _local_field(i, v, indptr, neighbours, weights, blocks, diagonal, none, out[i])
        along = 0.0
        for a in range(b):
            for c in range(r):
                along += out[i, a, c] * x[i, a, c]
        for a in range(b):
            for c in range(r):
                h = out[i, a, c] - along * x[i, a, c] - multipliers[i] * v[i, a, c]
                out[i, a, c] = h
                total += h * v[i, a, c]
    return total


@njit(cache=True, fastmath={"contract", "reassoc"})
def newton(x, indptr, neighbours, weights, blocks, diagonal, field, tolerance, scale, outer, inner):
    """Truncated Newton steps by conjugate gradients, in place, until the largest |gradient_i| <= tolerance.

    Returns (f - constant, largest |gradient_i|, Hessian products spent). Directions of negative curvature are followed downhill.
    """
    n, b, r = x.shape
    size = n * b * r
    g = np.empty_like(x)
    trial = np.empty_like(x)
    d = np.empty_like(x)
    residual = np.empty_like(x)
    p = np.empty_like(x)
    hp = np.empty_like(x)
    multipliers = np.empty(n)
    energy, worst = gradient(x, indptr, neighbours, weights, blocks, diagonal, field, g, multipliers)
    products = 0
    for _ in range(outer):
        if worst <= tolerance:
            break
        xs, gs, ds, rs, ps, hs = (
            x.reshape(size),
            g.reshape(size),
            d.reshape(size),
            residual.reshape(size),
            p.reshape(size),
            hp.reshape(size),
        )
        rr = 0.0
        for k in range(size):
            ds[k] = 0.0
            rs[k] = -gs[k]
            ps[k] = -gs[k]
            rr += gs[k] * gs[k]
        start = rr
        # superlinear: the inner accuracy tightens with the gradient
        goal = start * max(1e-8, min(0.01, worst / scale))
        negative = False
        for it in range(inner):
            curvature = _hessian_product(x, p, indptr, neighbours, weights, blocks, diagonal, field, multipliers, hp)
            products += 1
            pp = 0.0
            for k in range(size):
                pp += ps[k] * ps[k]
            if curvature <= 1e-13 * scale * pp:
                if it == 0 or curvature < -1e-9 * scale * pp:
                    negative = True
                    slope = 0.0
                    for k in range(size):
                        slope += ps[k] * gs[k]
                    # a step of about half a radian along the direction of negative curvature, added downhill
                    largest = 0.0
                    for k in range(size):
                        largest = max(largest, abs(ps[k]))
                    sign = -0.5 / largest if slope > 0 else 0.5 / largest
                    for k in range(size):
                        ds[k] += sign * ps[k]
                break
            alpha = rr / curvature
            new = 0.0
            for k in range(size):
                ds[k] += alpha * ps[k]
                rs[k] -= alpha * hs[k]
                new += rs[k] * rs[k]
            if new <= goal:
                break
            beta = new / rr
            rr = new
            for k in range(size):
                ps[k] = rs[k] + beta * ps[k]
        step = 1.0
        accepted = False
        for _ in range(30):
            for i in range(n):
                norm = 0.0
                for a in range(b):
                    for c in range(r):
                        v = x[i, a, c] + step * d[i, a, c]
                        trial[i, a, c] = v
                        norm += v * v
                norm = 1.0 / np.sqrt(norm)
                for a in range(b):
                    for c in range(r):
                        trial[i, a, c] *= norm
            # hp and residual are free here: they hold the gradient and (in its first entries) nothing else
            new_energy, new_worst = gradient(
                trial, indptr, neighbours, weights, blocks, diagonal, field, residual, multipliers
            )
            slack = 1e-13 * (abs(energy) + scale)
            if new_energy < energy - slack or (new_energy <= energy + slack and (new_worst < worst or negative)):
                accepted = True
                break
            step *= 0.35
        if not accepted:
            # rounding decides the energy differences by now
            energy, worst = gradient(x, indptr, neighbours, weights, blocks, diagonal, field, g, multipliers)
            break
        x[:] = trial
        g[:] = residual
        energy, worst = new_energy, new_worst
    return energy, worst, products


@njit(cache=True)
def descend(x, indptr, neighbours, weights, blocks, diagonal, field, shift, omega, sweeps, goal):
    """Alignment sweeps until the largest tangential local field is below `goal` or `sweeps` are spent; returns (field, sweeps)."""
    worst = 0.0
    for k in range(sweeps):
        worst = sweep(x, indptr, neighbours, weights, blocks, diagonal, field, shift, omega)
        if worst <= goal:
            return worst, k + 1
    return worst, sweeps
