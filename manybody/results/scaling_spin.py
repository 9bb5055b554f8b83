"""The gap against spin at a fixed cluster: gap = e_1 x + c_2 x^2 + ..., e_1 known from the harmonic result.

x = 1/(S + shift): shift 0 for `wick` and `substitution`, 1 for `weyl` and `toeplitz`, whose factors S/(S+1) are
polynomials of that x but badly convergent series in 1/S; e_1 is the same. Energies are normalized (no factor S^2).
The order is chosen by the corrected information criterion. Half-integer and integer spins may differ from c_2 on: an
odd ring of half-integer spin has total spin 1/2 and not 0. Clusters with an odd number of sites always get that extra
term, the others where the criterion asks for it.
"""

from dataclasses import dataclass

import numpy as np
from scipy.special import stdtrit

from manybody.results.fits import fit

POWERS = 6
PARITIES = ("integer", "half_integer")
ROUNDING = 1e-10
"""Standard deviation of an exact energy, relative to the energy scale: rounding and solver tolerance."""
SHIFTS = {"toeplitz": 1.0, "weyl": 1.0}
ONE_SIGN = 2.0
"""The omitted terms are not random but mostly of one sign: standard errors from truncation are doubled."""
ACCIDENT = 0.2
"""With one value to spare a good fit may be luck: the first omitted coefficient is then taken to be at least this
fraction of the largest fitted one. With these two constants 95 of 100 predictions beyond the data lie within two
standard errors (tests/results/test_scaling_spin.py)."""


@dataclass(frozen=True)
class SpinFit:
    """coefficients (2, POWERS) of x ... x^POWERS for integer and half-integer spin, covariance (2, POWERS, POWERS).

    order: highest power that was fitted; parity: the two classes differ; first_known: e_1 was given, else fitted too;
    first_free: e_1 as the data alone would have it, with its standard error (NaN where there are too few data);
    residual: root mean square over the data; points and the range of spins used.
    """

    coefficients: np.ndarray
    covariance: np.ndarray
    order: int
    parity: bool
    first_known: bool
    first_free: float
    first_free_error: float
    residual: float
    points: int
    smallest: float
    largest: float
    shift: float

    def predict(self, spins):
        """Gap and its standard error at the given spins."""
        return evaluate(self.coefficients, self.covariance, spins, self.shift)


def evaluate(coefficients, covariance, spins, shift=0.0):
    """Value and standard error of the fitted series at half-integer and integer spins; arrays as in SpinFit."""
    spins = np.atleast_1d(np.asarray(spins, float))
    odd = half_integer(spins)
    value, deviation = np.empty(len(spins)), np.empty(len(spins))
    for parity, chosen in enumerate((~odd, odd)):
        part = evaluate_class(coefficients[parity], covariance[parity], spins[chosen], shift)
        value[chosen], deviation[chosen] = part
    return value, deviation


def evaluate_class(coefficients, covariance, spins, shift=0.0):
    """The same for one class of spin, coefficients (POWERS,), as a function of a continuous spin."""
    powers = np.cumprod(np.repeat(1 / (np.asarray(spins, float)[:, None] + shift), POWERS, axis=1), axis=1)
    variance = ((powers @ covariance) * powers).sum(axis=1)
    return powers @ coefficients, np.sqrt(np.maximum(variance, 0.0))


def half_integer(spins):
    """True for S = 1/2, 3/2, ..."""
    return np.round(2 * np.asarray(spins, float)).astype(int) % 2 == 1


def fit_spins(spins, gap, error, scale, first=None, odd_sites=False, rule="", first_error=0.0) -> SpinFit | None:
    """Fit the gap (n,) with its one-sided 95 % errors (n,) by powers of x; None where the data do not suffice.

    scale: energy scale |f_min - f_mean| for the rounding floor. first: e_1, or None to fit it as well. With a standard
    error first_error > 0 of its own, e_1 is fitted like the others and its given value is one more datum.
    """
    spins, gap, error = (np.asarray(a, float) for a in (spins, gap, error))
    good = np.isfinite(gap) & np.isfinite(error)
    spins, gap, error = spins[good], gap[good], error[good]
    sigma = np.maximum(error / 2, ROUNDING * max(scale, np.max(np.abs(gap), initial=0.0), 1e-300))
    centre = gap - error / 2
    shift = SHIFTS.get(rule, 0.0)
    x = 1 / (spins + shift)
    measured = (first, first_error) if first is not None and first_error > 0 else None
    fixed = first if measured is None else None
    found = _best(x, half_integer(spins), centre, sigma, fixed, odd_sites, measured)
    if found is None:
        return None
    columns, powers, order, parity, result = found
    factor = _inflation(result) ** 2
    coefficients, covariance = np.zeros((2, POWERS)), np.zeros((2, POWERS, POWERS))
    for row, odd in enumerate((False, True)):
        # coefficients of one class = spread @ fitted parameters
        spread = np.zeros((POWERS, columns.shape[1]))
        for column, power in enumerate(powers):
            if power != "parity":
                spread[power - 1, column] = 1.0
            elif odd:
                spread[1, column] = 1.0
        coefficients[row] = spread @ result.coefficients
        covariance[row] = factor * spread @ result.covariance @ spread.T
        if fixed is not None:
            coefficients[row, 0] += fixed
    odd = half_integer(spins)
    if odd_sites and (odd.all() or not odd.any()):
        missing = 0 if odd.all() else 1
        coefficients[missing], covariance[missing] = np.nan, np.nan
    free, free_error = _first_alone(x, centre, sigma, columns, order, fixed)
    return SpinFit(
        coefficients,
        covariance,
        order,
        parity,
        first is not None,
        free,
        free_error,
        float(np.sqrt(np.mean(result.residuals[: len(x)] ** 2))),
        len(spins),
        float(spins.min()),
        float(spins.max()),
        shift,
    )


def _best(x, odd, centre, sigma, first, odd_sites, measured=None):
    """The candidate with the best criterion: (columns, powers, order, parity, Fit), or None.

    measured: (e_1, standard error) as a datum beside the gaps; it has no omitted terms.
    """
    y = centre if first is None else centre - first * x
    start = 1 if first is None else 2
    if measured is not None:
        y, sigma = np.append(y, measured[0]), np.append(sigma, measured[1])
    n = len(y)
    mixed = bool(odd.any() and not odd.all())
    # an odd number of sites needs its extra term as soon as there are enough spins to fit it
    demanded = odd_sites and mixed and n > (3 if first is None else 2)
    candidates = []
    for parity in (True,) if demanded else (False, True) if mixed else (False,):
        for order in range(start, POWERS):
            powers = [*range(start, order + 1), *(["parity"] if parity else [])]
            if n <= len(powers):
                break
            columns = np.stack([_column(p, x, odd) for p in powers], axis=1)
            shape = x ** (order + 1.0)
            if measured is not None:
                columns = np.vstack([columns, np.equal(np.arange(len(powers)), 0)])
                shape = np.append(shape, 1e-9 * shape.min())
            result = fit(columns, y, sigma, shape)
            candidates.append((columns, powers, order, parity, result, shape))
    if not candidates:
        return None
    finite = [c for c in candidates if np.isfinite(c[4].criterion)]
    # too few spins to compare forms: the shortest one
    best = min(finite, key=lambda c: c[4].criterion) if finite else candidates[0]
    columns, powers, order, parity, result, shape = best
    if result.freedom == 1:
        least = ACCIDENT * np.max(np.abs(result.coefficients))
        result = fit(columns, y, sigma, shape, least)
    return columns, powers, order, parity, result


def _column(power, x, odd):
    return np.where(odd, x**2, 0.0) if power == "parity" else x ** float(power)


def _first_alone(x, centre, sigma, columns, order, first):
    """e_1 and its standard error from the data alone. One more power than with e_1 known: else it takes up the rest."""
    if first is None or len(x) < columns.shape[1] + 3:
        return np.nan, np.nan
    result = fit(np.column_stack([x, columns, x ** (order + 1.0)]), centre, sigma, x ** (order + 2.0))
    return float(result.coefficients[0]), float(_inflation(result) * result.errors[0])


def _inflation(result):
    """Factor on standard errors that come from truncation, also for how few values there are to spare."""
    return ONE_SIGN * stdtrit(result.freedom, 0.8413) if result.tau > 0 else 1.0
