"""Descent and polishing of many configurations at once for energy functions of any degree.

Riemannian limited-memory quasi-Newton descent (Liu and Nocedal 1989, Math. Program. 45, 503; vectors are carried
between tangent spaces by projection), then truncated Newton steps by conjugate gradients (Steihaug 1983, SIAM J. Numer.
Anal. 20, 626). All arrays are (R, N, 3) for R configurations; every configuration has its own step lengths and drops
out when it is done.
"""

from collections.abc import Callable
from typing import NamedTuple

import numpy as np

from manybody.classical.sphere_product import project, retract


class Polished(NamedTuple):
    """Configurations (R, N, 3), values (R,), and the largest |gradient_i| over the sites (R,)."""

    configurations: np.ndarray
    values: np.ndarray
    gradients: np.ndarray


def _dot(a: np.ndarray, b: np.ndarray) -> np.ndarray:
    return np.einsum("rna,rna->r", a, b)


def _largest(g: np.ndarray) -> np.ndarray:
    return np.sqrt(np.max(np.einsum("rna,rna->rn", g, g), axis=1, initial=0.0))


def _times(factor: np.ndarray, v: np.ndarray) -> np.ndarray:
    return factor[:, None, None] * v


def quasi_newton(
    value_and_gradient: Callable, n: np.ndarray, goal: float, steps: int, scale: float, memory: int = 8
) -> Polished:
    """Descent until the largest |gradient_i| is at most `goal`, or `steps` iterations.

    value_and_gradient: (R, N, 3) -> (R,), (R, N, 3). scale: an upper bound of the usual gradient per site; sets the
    first step.
    """
    n = n.copy()
    values, gradients = value_and_gradient(n)
    x, f, g = n.copy(), values.copy(), gradients.copy()
    active = np.arange(len(x))
    history: list[list[np.ndarray]] = []  # (step, gradient change, 1 / their product)
    for _ in range(steps):
        going = _largest(g) > goal
        if not going.all():
            done = active[~going]
            n[done], values[done], gradients[done] = x[~going], f[~going], g[~going]
            active, x, f, g = active[going], x[going], f[going], g[going]
            history = [[part[going] for part in pair] for pair in history]
        if not len(active):
            break
        d = _two_loop(g, history, scale)
        slope = _dot(d, g)
        uphill = slope > -1e-12 * np.sqrt(_dot(d, d) * _dot(g, g))
        if uphill.any():
            d[uphill] = -g[uphill] / scale
            slope = _dot(d, g)
        # no site turns by more than about a radian in one step
        d = _times(np.minimum(1.0, 1.0 / np.maximum(_largest(d), 1e-300)), d)
        slope = _dot(d, g)
        step = np.ones(len(x))
        new_x, new_f, new_g = x.copy(), f.copy(), g.copy()
        pending = np.arange(len(x))
        for _ in range(25):
            trial = retract(x[pending], _times(step[pending], d[pending]))
            trial_f, trial_g = value_and_gradient(trial)
            noise = 1e-14 * (np.abs(f[pending]) + scale)
            accepted = trial_f <= f[pending] + 1e-4 * step[pending] * slope[pending] + noise
            taken = pending[accepted]
            new_x[taken], new_f[taken], new_g[taken] = trial[accepted], trial_f[accepted], trial_g[accepted]
            pending = pending[~accepted]
            if not len(pending):
                break
            step[pending] *= 0.4
        step[pending] = 0.0
        moved = project(new_x, _times(step, d))
        change = new_g - project(new_x, g)
        product = _dot(moved, change)
        useful = product > 1e-12 * np.sqrt(_dot(moved, moved) * _dot(change, change))
        inverse = np.where(useful, 1.0 / np.where(useful, product, 1.0), 0.0)
        history = [[project(new_x, s), project(new_x, y), rho] for s, y, rho in history[-memory + 1 :]]
        history.append([moved, change, inverse])
        x, f, g = new_x, new_f, new_g
    n[active], values[active], gradients[active] = x, f, g
    return Polished(n, values, _largest(gradients))


def _two_loop(g: np.ndarray, history: list, scale: float) -> np.ndarray:
    q = -g
    weights = []
    for s, y, rho in reversed(history):
        a = rho * _dot(s, q)
        q = q - _times(a, y)
        weights.append(a)
    gamma = np.full(len(g), 1.0 / scale)
    for _, y, rho in history:  # the newest useful pair scales the start
        size = _dot(y, y)
        gamma = np.where(rho > 0, 1.0 / np.maximum(rho * size, 1e-300), gamma)
    q = _times(gamma, q)
    for (s, y, rho), a in zip(history, reversed(weights), strict=True):
        q = q + _times(a - rho * _dot(y, q), s)
    return q


def truncated_newton(
    value_and_gradient: Callable,
    hessian_product: Callable,
    n: np.ndarray,
    tolerance: float,
    scale: float,
    outer: int = 60,
    inner: int = 400,
) -> Polished:
    """Newton steps until the largest |gradient_i| is at most `tolerance`, a step no longer helps, or `outer` steps are
    done.

    hessian_product: (R, N, 3), (R, N, 3) -> (R, N, 3), the Riemannian Hessian. Directions of negative curvature are
    followed downhill. At minima of fourth order a Newton step covers only a third of the way: there a threefold step is
    tried first.
    """
    n = n.copy()
    values, gradients = value_and_gradient(n)
    active = np.flatnonzero(_largest(gradients) > tolerance)
    slow = np.zeros(len(n), dtype=bool)
    for _ in range(outer):
        if not len(active):
            break
        x, f, g = n[active], values[active], gradients[active]
        worst = _largest(g)
        d, negative = _newton_direction(hessian_product, x, g, scale, np.clip(worst / scale, 1e-8, 0.01), inner)
        step = np.where(slow[active] & ~negative, 3.0, 1.0)
        pending = np.arange(len(active))
        moved = np.zeros(len(active), dtype=bool)
        noise = 1e-13 * (np.abs(f) + scale)
        for _ in range(30):
            trial = retract(x[pending], _times(step[pending], d[pending]))
            trial_f, trial_g = value_and_gradient(trial)
            trial_worst, old = _largest(trial_g), worst[pending]
            level = trial_f <= f[pending] + noise[pending]
            lower = trial_f < f[pending] - noise[pending]
            fine = lower | (level & ((trial_worst < old) | negative[pending]))
            fine &= (step[pending] <= 1.0) | (trial_worst < 0.5 * old)
            taken = pending[fine]
            n[active[taken]], values[active[taken]], gradients[active[taken]] = (
                trial[fine],
                trial_f[fine],
                trial_g[fine],
            )
            slow[active[taken]] = trial_worst[fine] > 0.2 * old[fine]
            moved[taken] = True
            pending = pending[~fine]
            if not len(pending):
                break
            step[pending] = np.where(step[pending] > 1.0, 1.0, 0.35 * step[pending])
        active = active[moved]
        active = active[_largest(gradients[active]) > tolerance]
    return Polished(n, values, _largest(gradients))


def _newton_direction(hessian_product, x, g, scale, accuracy, inner):
    """Conjugate gradients for H d = -g to |residual|^2 <= accuracy |g|^2; returns d and where negative curvature was
    met.
    """
    d = np.zeros_like(g)
    r, p = -g, -g
    rr = _dot(r, r)
    goal = rr * accuracy
    negative = np.zeros(len(x), dtype=bool)
    active = np.arange(len(x))
    for k in range(inner):
        hp = hessian_product(x[active], p)
        pp, curvature = _dot(p, p), _dot(p, hp)
        stop = curvature <= 1e-13 * scale * pp
        if stop.any():
            bent = stop & ((curvature < -1e-9 * scale * pp) | (k == 0))
            if bent.any():
                # about half a radian along the direction of negative curvature, downhill
                sign = np.where(_dot(p[bent], g[active[bent]]) > 0, -0.5, 0.5)
                d[active[bent]] += _times(sign / _largest(p[bent]), p[bent])
                negative[active[bent]] = True
            active, r, p, hp, rr, curvature = (part[~stop] for part in (active, r, p, hp, rr, curvature))
            if not len(active):
                break
        alpha = rr / curvature
        d[active] += _times(alpha, p)
        r = r - _times(alpha, hp)
        new = _dot(r, r)
        p = r + _times(new / rr, p)
        rr = new
        going = rr > goal[active]
        if not going.all():
            active, r, p, rr = active[going], r[going], p[going], rr[going]
        if not len(active):
            break
    return d, negative
