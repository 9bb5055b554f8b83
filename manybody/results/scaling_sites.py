"""Energies per site against the number of sites, and their thermodynamic limit with an error that can be believed.

Which form is right is not known beforehand (open or periodic, critical or gapped, logarithms), so several are tried.
Each is judged by how much its limit moves when the largest or the smallest size is left out, which is what an
extrapolation risks; their limits are averaged with weights that fall with it, and the scatter between them goes into
the error. Calibrated on exactly solvable chains (tests/results/test_scaling_sites.py). The quantum energy decides;
the classical energy and the gap are extrapolated with the same forms, correlation lengths and weights, so that their
limits fit together exactly."""

from dataclasses import dataclass

import numpy as np

from manybody.results.fits import fit
from manybody.results.scaling_spin import ROUNDING

SHIFT = 1.5
"""Weight of the movement under leaving one size out. 1.5 gives the stated coverage; with three sizes, where no second
form can be compared, FEW_SHIFT does."""
FEW_SHIFT = 4.0
ACCIDENT = 0.2
"""A form's error is at least this fraction of its distance from the second closest form: small shifts may be luck."""
SHARPNESS = 1.5
"""Weights are errors to this power, inverted; 2 would trust the apparent errors of wrong forms too much."""
CALIBRATION = {True: 0.65, False: 0.4}
"""The scatter above overstates the error of the average, more so with the many forms of an unknown geometry (False).
With these factors 95 of 100 exact limits lie within two standard errors."""
_FRACTIONS = np.array([1.0, 0.3, 0.1, 0.03, 0.01, 1e-3, 1e-4])
PLAUSIBLE = 25.0
"""A form whose information criterion is this much behind counts e times less, twice as much e^4 times."""


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
            boundary is not None and dimension is not None,
        )
        # a subset must be clearly better than all sizes together, or it is only luckier
        handicap = 1.0 if name == "all sizes" else 3.0
        if found is not None and (best is None or found.errors["energy"] * handicap < best[0]):
            best = (found.errors["energy"] * handicap, found)
    return best[1] if best else None


def _one_family(name, sites, energy, error, others, forms, known):
    order = np.argsort(sites)
    sites = sites[order]
    sigma = np.maximum(error[order] / 2, ROUNDING * np.max(np.abs(energy))) / sites
    series = {"energy": (energy - error / 2)[order] / sites}
    for key, values in others.items():
        series[key] = (values - (error / 2 if key == "gap" else 0.0))[order] / sites
    tried = [_try(form, sites, series["energy"], sigma) for form in forms if len(sites) > form.count]
    if not tried:
        return None
    # forms with too few data for a criterion count fully; the others are measured from the second best, since with one
    # form alone nothing would show that it is wrong
    marks = np.array([one.criterion for one in tried])
    known_marks = np.sort(marks[np.isfinite(marks)])
    reference = known_marks[min(1, len(known_marks) - 1)] if len(known_marks) else 0.0
    plausible = np.exp(
        -((np.clip(np.where(np.isfinite(marks), marks, reference) - reference, 0, None) / PLAUSIBLE) ** 2)
    )
    scale = CALIBRATION[known]
    tables = {key: _table(tried, values, sigma if key in ("energy", "gap") else 0.0) for key, values in series.items()}
    limit, own, noise = tables["energy"]
    weights = plausible * np.maximum(np.hypot(own, noise), 1e-300) ** -SHARPNESS
    weights /= weights.sum()
    values, spread = {}, {}
    for key, (limit, own, noise) in tables.items():
        values[key] = float(weights @ limit)
        doubt = weights @ (own**2 + (limit - values[key]) ** 2)
        spread[key] = float(np.sqrt(scale**2 * doubt + weights @ noise**2))
    lead = int(np.argmax(weights))
    best = tried[lead]
    curve = Curve(best.form, best.length, sites[0], {key: best.operators[0] @ series[key] for key in series})
    return Limit(values, spread, best.form.name, float(weights[lead]), name, tuple(int(n) for n in sites), curve)


@dataclass(frozen=True)
class _Tried:
    """One form fitted to the energy.

    operators turn per-site values into coefficients: for all sizes, without the largest, without the smallest; columns
    and shape (the omitted term) belong to all sizes.
    """

    form: Form
    operators: tuple[np.ndarray, np.ndarray, np.ndarray]
    columns: np.ndarray
    shape: np.ndarray
    length: float
    criterion: float


def _subsets(n):
    return slice(None), slice(0, n - 1), slice(1, n)


def _try(form, sites, values, sigma):
    parts = []
    for part in _subsets(len(sites)):
        length = np.nan if form.decay is None else _length(form, sites[part], values[part], sigma[part])
        parts.append((length, *_columns(form, sites[part], length, sites[part][0])))
    length, columns, shape = parts[0]
    criterion, tau = np.inf, np.inf
    if columns.shape[0] > columns.shape[1]:
        whole = fit(columns, values, sigma, shape)
        criterion, tau = whole.criterion, whole.tau
    operators = []
    for part, (_, some, rest) in zip(_subsets(len(sites)), parts):
        noise = np.hypot(sigma[part], tau * rest) if np.isfinite(tau) else rest
        operators.append(np.linalg.pinv(some / noise[:, None], rcond=1e-14) / noise)
    return _Tried(form, tuple(operators), columns, shape, length, criterion)


def _table(tried, values, sigma):
    """Limits of one series by every form, their errors from truncation and from leaving sizes out, and from sigma."""
    n = len(values)
    factor = SHIFT if n > 3 else FEW_SHIFT
    sigma = np.maximum(sigma, ROUNDING * max(np.max(np.abs(values)), 1e-300))
    limits, errors, noise = [], [], []
    for one in tried:
        parts = [operator[0] @ values[part] for operator, part in zip(one.operators, _subsets(n))]
        residuals = values - one.columns @ (one.operators[0] @ values)
        freedom = max(n - one.columns.shape[1], 1)
        tau = np.sqrt(np.sum((residuals / one.shape) ** 2) / freedom)
        # what exceeds the stated errors is truncation, distributed as the omitted term
        excess = max(np.sum((residuals / sigma) ** 2) / freedom - 1, 0) > 0
        row = one.operators[0][0]
        own = np.linalg.norm(row * tau * one.shape) * excess
        noise.append(np.linalg.norm(row * sigma))
        limits.append(parts[0])
        errors.append(np.hypot(own, factor * max(abs(parts[0] - parts[1]), abs(parts[0] - parts[2]))))
    limits = np.array(limits)
    return limits, _no_accidents(limits, np.array(errors)), np.array(noise)


def _no_accidents(limits, errors):
    if len(limits) < 2:
        return errors
    distance = np.abs(limits[:, None] - limits)
    np.fill_diagonal(distance, np.inf)
    distance.sort(axis=1)
    return np.maximum(errors, ACCIDENT * distance[:, min(2, len(limits) - 1) - 1])


def _columns(form, sites, length, first):
    """Columns (..., n, k) and the shape of the omitted term (..., n); length may be an array (m, 1)."""
    columns = [sites**-p for p in form.powers[: None if form.decay is not None else -1]]
    if form.decay is not None:
        tail = (sites / first) ** -form.decay * np.exp(-(sites - first) / length)
        shape = np.maximum(tail * first / sites, 1e-14)
        return np.stack([*(np.broadcast_to(c, tail.shape) for c in columns), tail], axis=-1), shape
    shape = sites ** -float(form.powers[-1])
    if form.logs:
        columns += [shape / np.log(sites) ** power for power in form.logs]
        shape = shape / np.log(sites) ** (form.logs[-1] + 1)
    return np.stack(columns, axis=-1), shape


def _length(form, sites, values, sigma):
    """The correlation length of largest likelihood, from a grid and one refinement; the rest is linear."""
    low, high = 0.15 * np.min(np.diff(sites)), 2 * (sites[-1] - sites[0])
    for _ in range(2):
        lengths = np.geomspace(low, high, 30)
        columns, shapes = _columns(form, sites, lengths[:, None], sites[0])
        rest = _rest(columns, values, 1 / shapes)
        taus = np.sqrt(np.mean((rest / shapes) ** 2, axis=1))[:, None] * _FRACTIONS
        variance = sigma**2 + (taus[..., None] * shapes[:, None]) ** 2
        rest = _rest(columns[:, None], values, 1 / np.sqrt(variance))
        marks = np.sum(np.log(variance) + rest**2 / variance, axis=-1).min(axis=1)
        best = int(np.argmin(marks))
        low, high = lengths[max(best - 1, 0)], lengths[min(best + 1, len(lengths) - 1)]
    return float(lengths[best])


def _rest(columns, values, weights):
    """Residuals of weighted least squares, batched over leading axes."""
    q = np.linalg.qr(columns * weights[..., None])[0]
    y = values * weights
    return (y - np.einsum("...nk,...k->...n", q, np.einsum("...nk,...n->...k", q, y))) / weights
