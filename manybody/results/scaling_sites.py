"""Energies per site against the number of sites, and their thermodynamic limit with an error that can be believed.

Which form is right is not known beforehand (open or periodic, critical or gapped, logarithms), so several are tried.
Each is judged by how much its limit moves when the largest or the smallest size is left out, which is what an
extrapolation risks; their limits are averaged with weights that fall with it, and the scatter between them goes into
the error. Calibrated on exactly solvable chains (tests/results/test_scaling_sites.py). The quantum energy decides;
the classical energy and the gap are extrapolated with the same forms, correlation lengths and weights, so that their
limits fit together exactly."""

from dataclasses import dataclass

import numpy as np

from .fits import fit
from .scaling_spin import ROUNDING

SHIFT = 1.5
"""Weight of the movement under leaving one size out. 1.5 gives the stated coverage; with three sizes, where no second
form can be compared, FEW_SHIFT does."""
FEW_SHIFT = 4.0
ACCIDENT = 0.2
"""A form's error is at least this fraction of its distance from the second closest form: small shifts may be luck."""
SHARPNESS = 1.5
"""Weights are errors to this power, inverted; 2 would trust the apparent errors of wrong forms too much."""
HOPELESS = 50.0
"""A form whose information criterion is worse than the best by more than this does not describe the data at all."""


@dataclass(frozen=True)
class Form:
    """A form in N: powers of 1/N in order, the last of them the omitted term.

    `logs` adds the omitted power over those powers of ln N; `decay` adds N^-decay exp(-N/xi), xi fitted.
    """

    name: str
    powers: tuple[float, ...]
    logs: tuple[float, ...] = ()
    decay: float | None = None

    @property
    def count(self) -> int:
        return len(self.powers) - 1 + len(self.logs) + 2 * (self.decay is not None)


PERIODIC = (
    Form("constant", (0, 2)),
    Form("1/N^2", (0, 2, 4)),
    Form("1/N^2 + 1/N^4", (0, 2, 4, 6)),
    Form("1/N^2 + 1/N^4 + 1/N^6", (0, 2, 4, 6, 8)),
    Form("1/N^2 with logarithm", (0, 2, 2), logs=(3,)),
    Form("exponential", (0,), decay=0.0),
    Form("exponential/N^(3/2)", (0,), decay=1.5),
)
OPEN = (
    Form("1/N", (0, 1, 2)),
    Form("1/N + 1/N^2", (0, 1, 2, 3)),
    Form("1/N + 1/N^2 + 1/N^3", (0, 1, 2, 3, 4)),
    Form("1/N + ... + 1/N^4", (0, 1, 2, 3, 4, 5)),
    Form("1/N + 1/N^2 with logarithm", (0, 1, 2, 2), logs=(2,)),
    Form("1/N + 1/N^2 with logarithm at the ends", (0, 1, 2, 1), logs=(1,)),
    Form("1/N + exponential/N", (0, 1), decay=1.0),
    Form("1/N + exponential/N^(3/2)", (0, 1), decay=1.5),
)
PERIODIC_2D = (
    Form("constant", (0, 1.5)),
    Form("1/N^(3/2)", (0, 1.5, 2)),
    Form("1/N^(3/2) + 1/N^2", (0, 1.5, 2, 2.5)),
    Form("exponential", (0,), decay=0.0),
)
OPEN_2D = (
    Form("1/N^(1/2)", (0, 0.5, 1)),
    Form("1/N^(1/2) + 1/N", (0, 0.5, 1, 1.5)),
    Form("1/N^(1/2) + 1/N + 1/N^(3/2)", (0, 0.5, 1, 1.5, 2)),
    Form("1/N", (0, 1, 2)),
)
PERIODIC_3D = (Form("constant", (0, 4 / 3)), Form("1/N^(4/3)", (0, 4 / 3, 5 / 3)))
OPEN_3D = (
    Form("1/N^(1/3)", (0, 1 / 3, 2 / 3)),
    Form("1/N^(1/3) + 1/N^(2/3)", (0, 1 / 3, 2 / 3, 1)),
    Form("1/N^(1/3) + 1/N^(2/3) + 1/N", (0, 1 / 3, 2 / 3, 1, 4 / 3)),
)
_BY_GEOMETRY = {
    ("periodic", 1): PERIODIC,
    ("open", 1): OPEN,
    ("periodic", 2): PERIODIC_2D,
    ("open", 2): OPEN_2D,
    ("periodic", 3): PERIODIC_3D,
    ("open", 3): OPEN_3D,
}


def forms_for(boundary=None, dimension=None) -> tuple[Form, ...]:
    """The forms to try; boundary "open", "periodic" or None for unknown or mixed, dimension 1, 2, 3 or None."""
    chosen = []
    for (edge, size), forms in _BY_GEOMETRY.items():
        if boundary in (None, edge) and (size == dimension or (dimension is None and size < 3)):
            chosen += [form for form in forms if form.powers != (0, 1.5) or boundary is not None]
    return tuple(dict.fromkeys(chosen))


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
    """The leading form fitted to every series: per-site value at N sites, for drawing."""

    form: Form
    length: float
    first: float
    coefficients: dict[str, np.ndarray]

    def at(self, series, sites):
        columns, _ = _columns(self.form, np.asarray(sites, float), self.length, self.first)
        return columns @ self.coefficients[series]


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
    best = None
    for name, mask in candidates.items():
        if mask.sum() < 3 or (name != "all sizes" and mask.sum() == good.sum()):
            continue
        found = _one_family(
            name,
            sites[mask],
            energy[mask],
            error[mask],
            {k: v[mask] for k, v in others.items()},
            forms_for(boundary, dimension),
        )
        # a subset must be clearly better than all sizes together, or it is only luckier
        handicap = 1.0 if name == "all sizes" else 3.0
        if found is not None and (best is None or found.errors["energy"] * handicap < best[0]):
            best = (found.errors["energy"] * handicap, found)
    return best[1] if best else None


def _one_family(name, sites, energy, error, others, forms):
    order = np.argsort(sites)
    sites = sites[order]
    centre = (energy - error / 2)[order]
    sigma = np.maximum(error[order] / 2, ROUNDING * np.max(np.abs(energy))) / sites
    series = {"energy": centre / sites}
    for key, values in others.items():
        values = values[order] - (error[order] / 2 if key == "gap" else 0.0)
        series[key] = values / sites
    tried = []
    for form in forms:
        if len(sites) > form.count:
            tried.append((form, [_solve(form, sites[s], series["energy"][s], sigma[s]) for s in _subsets(len(sites))]))
    if not tried:
        return None
    tried = _not_hopeless(tried, series["energy"], sigma)
    floor = {key: sigma for key in series if key in ("energy", "gap")}
    tables = {key: _table(tried, sites, values, floor.get(key)) for key, values in series.items()}
    weights = np.maximum(tables["energy"][1], 1e-300) ** -SHARPNESS
    weights /= weights.sum()
    values, spread = {}, {}
    for key, (limit, own) in tables.items():
        values[key] = float(weights @ limit)
        spread[key] = float(np.sqrt(weights @ (own**2 + (limit - values[key]) ** 2)))
    lead = int(np.argmax(weights))
    form, (whole, *_) = tried[lead]
    curve = Curve(form, whole.length, sites[0], {key: whole.operator @ series[key] for key in series})
    return Limit(values, spread, form.name, float(weights[lead]), name, tuple(int(n) for n in sites), curve)


def _subsets(n):
    return slice(None), slice(0, n - 1), slice(1, n)


@dataclass(frozen=True)
class _Solved:
    operator: np.ndarray
    columns: np.ndarray
    shape: np.ndarray
    length: float


def _table(tried, sites, values, sigma):
    """Limits of one series by every form, and their errors from truncation and from leaving sizes out."""
    limits, errors = [], []
    factor = SHIFT if len(sites) > 3 else FEW_SHIFT
    floor = ROUNDING * max(np.max(np.abs(values)), 1e-300)
    sigma = np.full(len(sites), floor) if sigma is None else np.maximum(sigma, floor)
    for _, solved in tried:
        parts = [s.operator[0] @ values[part] for s, part in zip(solved, _subsets(len(sites)))]
        own = fit(solved[0].columns, values, sigma, solved[0].shape).errors[0] if _determined(solved[0]) else 0.0
        limits.append(parts[0])
        errors.append(np.hypot(own, factor * max(abs(parts[0] - parts[1]), abs(parts[0] - parts[2]))))
    limits = np.array(limits)
    return limits, _no_accidents(limits, np.array(errors))


def _determined(solved):
    return solved.columns.shape[0] > solved.columns.shape[1]


def _no_accidents(limits, errors):
    if len(limits) < 2:
        return errors
    distance = np.abs(limits[:, None] - limits)
    np.fill_diagonal(distance, np.inf)
    distance.sort(axis=1)
    return np.maximum(errors, ACCIDENT * distance[:, min(2, len(limits) - 1) - 1])


def _not_hopeless(tried, values, sigma):
    """Drop forms that the criterion rules out; forms with too few data for a criterion stay."""
    marks = []
    for _, (whole, *_) in tried:
        known = _determined(whole)
        marks.append(fit(whole.columns, values, sigma, whole.shape).criterion if known else np.inf)
    # never fewer than two: with one alone nothing would show that it is wrong
    limit = max(min(marks) + HOPELESS, sorted(marks)[min(1, len(marks) - 1)])
    return [form for form, mark in zip(tried, marks) if not np.isfinite(mark) or mark <= limit]


def _columns(form, sites, length, first):
    """Columns (n, k) and the shape of the omitted term (n,); lengths relative to the smallest size."""
    columns = [sites**-p for p in form.powers[: None if form.decay is not None else -1]]
    if form.decay is not None:
        tail = (sites / first) ** -form.decay * np.exp(-(sites - first) / length)
        return np.stack([*columns, tail], axis=1), np.maximum(tail * first / sites, 1e-14)
    shape = sites ** -float(form.powers[-1])
    if form.logs:
        columns += [shape / np.log(sites) ** power for power in form.logs]
        shape = shape / np.log(sites) ** (form.logs[-1] + 1)
    return np.stack(columns, axis=1), shape


def _solve(form, sites, values, sigma):
    length = np.nan
    if form.decay is not None:
        length = _length(form, sites, values, sigma)
    columns, shape = _columns(form, sites, length, sites[0])
    if columns.shape[0] == columns.shape[1]:
        operator = np.linalg.inv(columns)
    else:
        operator = fit(columns, values, sigma, shape).operator
    return _Solved(operator, columns, shape, length)


def _length(form, sites, values, sigma):
    """The correlation length that fits best, from a grid and one refinement; the other coefficients are linear."""
    low, high = 0.15 * np.min(np.diff(sites)), 2 * (sites[-1] - sites[0])
    for _ in range(2):
        lengths = np.geomspace(low, high, 40)
        columns, shapes = zip(*(_columns(form, sites, length, sites[0]) for length in lengths))
        weights = 1 / np.sqrt(sigma**2 + (np.std(values) * np.array(shapes)) ** 2)
        q, _ = np.linalg.qr(np.array(columns) * weights[..., None])
        y = values * weights
        rest = y - np.einsum("mnk,mk->mn", q, np.einsum("mnk,mn->mk", q, y))
        best = int(np.argmin(np.sum(rest**2, axis=1)))
        low, high = lengths[max(best - 1, 0)], lengths[min(best + 1, len(lengths) - 1)]
    return float(lengths[best])
