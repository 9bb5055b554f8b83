"""Energies per site against the number of sites, and their thermodynamic limit with an error that can be believed.

Which form is right is not known beforehand (open or periodic, critical or gapped, logarithms), so many are compared
(site_forms.py). Each has free coefficients and a rest that is a random function of the size, of unknown amplitude: so
sizes that lie close together count little more than one, and how far the limit may still move beyond the largest size
follows from how the data vary within them. For every form and amplitude the limit is normally distributed, with the
restricted likelihood of the data as its weight (Patterson, Thompson 1971). The standard error is that of the mixture,
and so holds both the error within a form and the choice between forms.

No form is exactly right, and energies with ten digits would rule out all but one of them; so likelihoods count as if
there were a few independent data only (fractional likelihoods; Holmes, Walker 2017). Calibrated on chains and lattices
with known limits: tests/benchmarks/limits.py prints the coverage.

The quantum energy decides; the classical energy and the gap are extrapolated with the same forms, amplitudes and
weights, so that their limits fit together exactly. Citations from memory."""

import functools
from dataclasses import dataclass

import numpy as np
from scipy.special import ndtr, stdtrit

from manybody.results.scaling_spin import ROUNDING
from manybody.results.site_forms import Form, forms_for

INDEPENDENT = 5.0
"""Likelihoods count as if at most this many data were independent."""
SPREAD = 0.8
"""The mixture overstates the error. With this factor 9 of 10 limits lie within one standard error and 97 to 99 of 100
within two; a smaller one would put limits of S = 3/2 chains outside."""
FEW = 4
"""Up to this many sizes the error of the mixture is left as it is: after the limit, one amplitude and the next term
nothing is left by which the data could rule out a form, so how the forms differ is the only measure of the error."""
AMPLITUDES = 10.0 ** np.arange(-10.5, 0.51, 0.25)
"""Of the rest, in units of the energy scaled back to a linear size of one: up to three times the energy."""
NEGLIGIBLE = 1e-6
LUCK = 3.0
"""A family of sizes must have an error this many times smaller than all sizes together to be preferred."""


@dataclass(frozen=True)
class Limit:
    """Limits and standard errors by series name; the form with the largest weight, its weight, and the sizes used."""

    values: dict[str, float]
    errors: dict[str, float]
    form: str
    weight: float
    family: str
    sizes: tuple[int, ...]
    curve: "Curve"


@dataclass(frozen=True)
class Curve:
    """The leading form fitted to every series: per-site value at N sites, for drawing.

    fixed (k,): free coefficients; rest (n,): coefficients of the covariance with the n sizes of the fit.
    """

    form: Form
    nodes: np.ndarray
    fixed: dict[str, np.ndarray]
    rest: dict[str, np.ndarray]

    def at(self, series, sites):
        x, first = np.asarray(sites, float) ** (1 / self.form.dimension), self.nodes[0]
        near = self.form.trend(x, self.nodes, first)
        return self.form.fixed(x, first) @ self.fixed[series] + near @ self.rest[series]


def determined(value, error, scale=0.0):
    """Whether a limit with this standard error says anything: else it is better not drawn or quoted.

    scale: |f_min - f_mean| per site, in the same unit; a limit of zero is determined to a millionth of it.
    """
    return bool(error <= max(abs(value) / 2, 1e-6 * scale))


def extrapolate(sites, energy, error, others=None, boundary=None, dimension=None, families=None) -> Limit | None:
    """Thermodynamic limits of energy/N and of other series/N; None for fewer than three usable sizes.

    sites, energy, error (n,): total energies with their one-sided 95 % errors. others: {name: (n,) totals}, taken as
    exact beside the energy unless the name is "gap", which has the energy's errors. The series "energy" is always
    there. families: {name: boolean mask} of commensurate subsets to compare with all sizes together."""
    sites, energy, error = (np.asarray(a, float) for a in (sites, energy, error))
    others = {name: np.asarray(values, float) for name, values in (others or {}).items()}
    good = np.isfinite(energy) & np.isfinite(error)
    for values in others.values():
        good &= np.isfinite(values)
    candidates = {"all sizes": good} | {name: good & mask for name, mask in (families or {}).items()}
    best, seen = None, set()
    for name, mask in candidates.items():
        if mask.sum() < 3 or mask.tobytes() in seen:
            continue
        seen.add(mask.tobytes())
        subset = {k: v[mask] for k, v in others.items()}
        found = _one_family(name, sites[mask], energy[mask], error[mask], subset, boundary, dimension)
        handicap = 1.0 if name == "all sizes" else LUCK
        if best is None or found.errors["energy"] * handicap < best[0]:
            best = (found.errors["energy"] * handicap, found)
    return best[1] if best else None


def _one_family(name, sites, energy, error, others, boundary, dimension):
    order = np.argsort(sites)
    sites = sites[order]
    sigma = np.maximum(error[order] / 2, ROUNDING * (np.max(np.abs(energy)) or 1.0)) / sites
    names = ["energy", *others]
    noisy = np.array([key in ("energy", "gap") for key in names])
    totals = np.stack([energy, *others.values()], axis=1)[order] - np.outer(error[order] / 2, noisy)
    series = totals / sites[:, None]
    groups = _groups(tuple(sites.tolist()), boundary, dimension)
    parts = [_Fits(group, series, sigma) for group in groups if len(sites) > group.fixed.shape[1]]
    marks = np.concatenate([part.marks.ravel() for part in parts])
    independent = min(1.0, INDEPENDENT / (len(sites) - 1))
    weights = np.exp(-0.5 * independent * (marks - marks.min())) * np.concatenate([p.prior.ravel() for p in parts])
    weights /= weights.sum()
    cuts = np.cumsum([part.marks.size for part in parts])[:-1]
    limits, noise, spread, share, heaviest = [], [], [], {}, {}
    for part, w in zip(parts, np.split(weights, cuts)):
        w = w.reshape(part.marks.shape)
        for k, (title, weight, top) in enumerate(
            zip(part.group.names, w.sum(axis=0).tolist(), w.argmax(axis=0).tolist())
        ):
            share[title] = share.get(title, 0.0) + weight
            if title not in heaviest or w[top, k] > heaviest[title][0]:
                heaviest[title] = w[top, k], part, (top, k)
        found = part.limits(np.argwhere(w > NEGLIGIBLE), noisy)
        for store, value in zip((limits, noise, spread), found):
            store.append(value)
    kept = weights[weights > NEGLIGIBLE]
    kept /= kept.sum()
    limits, noise, spread = (np.concatenate(a) for a in (limits, noise, spread))
    values, errors = {}, {}
    factor = SPREAD if len(sites) > FEW else 1.0
    for k, key in enumerate(names):
        values[key] = float(kept @ limits[:, k])
        deviation = np.sqrt(noise * noisy[k] + spread[:, k])
        errors[key] = factor * _standard_error(kept, limits[:, k] - values[key], deviation)
    form = max(share, key=share.get)
    _, part, place = heaviest[form]
    curve = part.curve(place, names)
    return Limit(values, errors, form, share[form], name, tuple(int(n) for n in sites), curve)


@dataclass(frozen=True)
class _Group:
    """All forms with the same free coefficients, in linear sizes x (n,): fixed (n, k) and random (forms, n, m) columns;
    what the amplitude is measured in, and weights before any data that are shared by the forms of one kind."""

    forms: list[Form]
    names: list[str]
    x: np.ndarray
    fixed: np.ndarray
    random: np.ndarray
    natural: np.ndarray
    prior: np.ndarray


@functools.lru_cache(maxsize=64)
def _groups(sites, boundary, dimension):
    groups = {}
    for form in forms_for(sites, boundary, dimension):
        groups.setdefault((form.boundary, form.dimension), []).append(form)
    found = []
    for forms in groups.values():
        x = np.array(sites) ** (1 / forms[0].dimension)
        kinds = [form.kind for form in forms]
        found.append(
            _Group(
                forms,
                [form.name for form in forms],
                x,
                forms[0].fixed(x, x[0]),
                np.stack([form.random(x, x[0]) for form in forms]),
                np.array([x[0] ** -float(form.power) for form in forms]),
                np.array([form.weight / kinds.count(form.kind) for form in forms]),
            )
        )
    return found


class _Fits:
    """The forms of a group fitted to the energy at all amplitudes.

    Everything is divided by sigma and split into the part that the free coefficients take up and the rest (n - k,), on
    which the random columns are diagonal: U diag(d) V^T. marks (amplitudes, forms): -2 ln restricted likelihood.
    """

    def __init__(self, group, series, sigma):
        self.group = group
        fixed, first = group.fixed, group.x[0]
        k = fixed.shape[1]
        weighted = group.random / sigma[:, None]
        q, r = np.linalg.qr(fixed / sigma[:, None], mode="complete")
        self.data = series / sigma[:, None]
        self.solve = np.linalg.solve(r[:k], q[:, :k].T)
        u, d, self.modes = np.linalg.svd(q[:, k:].T @ weighted, full_matrices=False)
        self.d = d
        self.seen = np.swapaxes(u, 1, 2) @ (q[:, k:].T @ self.data)
        self.effect = np.einsum("kn,gnm,gjm->gkj", self.solve, weighted, self.modes)
        everything = np.einsum("n,gnm->gm", self.solve[0], weighted)
        # what the data say nothing about: the part of the random columns beyond the modes
        self.unseen = np.maximum(np.sum(everything**2, axis=1) - np.sum(self.effect[:, 0] ** 2, axis=1), 0.0)
        scale = np.max(np.abs(series[:, 0])) or 1.0
        self.amplitudes = AMPLITUDES[:, None] * scale * group.natural
        stretch = 1 + (self.amplitudes[..., None] * d) ** 2
        self.marks = np.sum(np.log(stretch) + self.seen[..., 0] ** 2 / stretch, axis=-1)
        # free coefficients beyond the limit itself: of the size of the energy, scaled back like the amplitudes
        self.marks += 2 * np.sum(np.log(np.abs(np.diag(r[:k])))) + 2 * (k - 1) * np.log(scale / first)
        self.prior = np.broadcast_to(group.prior, self.marks.shape)

    def limits(self, places, noisy):
        """Limits (places, series), their variance from sigma (places,) and from the rest (places, series)."""
        row, column = places.T
        square = self.amplitudes[row, column] ** 2
        d, seen, effect = self.d[column], self.seen[column], self.effect[column, 0]
        stretch = 1 + square[:, None] * d**2
        shrink = square[:, None] * d / stretch
        limits = self.solve[0] @ self.data - np.einsum("pj,pjs->ps", effect * shrink, seen)
        noise = np.sum(self.solve[0] ** 2) + np.sum((effect * shrink) ** 2, axis=1)
        rest = square * self.unseen[column] + np.sum(effect**2 * square[:, None] / stretch**2, axis=1)
        quadratic = np.einsum("pj,pjs->ps", 1 / stretch, seen**2)
        # The amplitude of another series, relative to the energy's, from few degrees of freedom. That of the gap is not
        # taken to be smaller than the energy's: with three or four sizes a smooth gap of rough energies may be luck.
        own = quadratic / np.maximum(quadratic[:, :1], 1e-300)
        ratio = np.where(noisy, np.maximum(own, 1.0), own * stdtrit(seen.shape[1], 0.8413) ** 2)
        return limits, noise, rest[:, None] * ratio

    def curve(self, place, names):
        row, column = place
        form, x, d = self.group.forms[column], self.group.x, self.d[column]
        square = self.amplitudes[row, column] ** 2
        inner = (square * d / (1 + square * d**2))[:, None] * self.seen[column]
        fixed = self.solve @ self.data - self.effect[column] @ inner
        values = self.group.random[column] @ (self.modes[column].T @ inner)
        rest = np.linalg.lstsq(form.covariance(x, x, x[0]), values, rcond=1e-13)[0]
        by_name = [dict(zip(names, array.T)) for array in (fixed, rest)]
        return Curve(form, x, *by_name)


def _standard_error(weights, distance, deviation):
    """Half the width of the central 68 % or a quarter of that of the central 95 %, whichever is larger."""
    farthest = np.max(np.abs(distance) + 20 * deviation)
    one, two = (_half_width(weights, distance, deviation, farthest, mass) for mass in (0.6827, 0.9545))
    return max(one, 0.5 * two)


def _half_width(weights, distance, deviation, farthest, mass):
    if farthest == 0:
        return 0.0
    deviation = np.maximum(deviation, 1e-12 * farthest)
    low, high = 0.0, farthest
    for _ in range(40):
        middle = (low + high) / 2
        inside = weights @ (ndtr((middle - distance) / deviation) - ndtr((-middle - distance) / deviation))
        low, high = (middle, high) if inside < mass else (low, middle)
    return float(high)
