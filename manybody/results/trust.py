"""From which spin on the classical energy is good enough: trust_spin for one cluster and rule.

The smallest S from which on all data and the fit stay within |relative gap| <= tolerance; a single lucky spin does not
count. A datum counts with the far end of its error interval.
"""

from dataclasses import dataclass

import numpy as np

STATES = ("measured", "interpolated", "at_most", "extrapolated")
_SMALL = np.arange(1, 2001) / 2
_FAR = np.unique(np.round(np.geomspace(1000, 1e9, 600))) + np.array([[0.0], [0.5]])
_GRID = np.sort(np.concatenate([_SMALL, _FAR.ravel()]))


@dataclass(frozen=True)
class Trust:
    """spin with its range low ... high (two standard errors of the fit, both ends of the data's errors), and how it is
    known: "measured" (neighbouring spins bracket it), "interpolated" (data bracket it, the fit fills in), "at_most"
    (all data are within, smaller spins were not computed), "extrapolated" (beyond the largest spin computed); NaN,
    "unknown" where nothing can be said."""

    spin: float
    low: float
    high: float
    state: str


UNKNOWN = Trust(np.nan, np.nan, np.nan, "unknown")


def trust(spins, relative_gap, relative_error, predict, tolerance) -> Trust:
    """Judge one series. spins (n,) ascending, relative_gap (n,) and its one-sided error (n,) in units of |f_min -
    f_mean|.

    predict(spins) -> (relative gap, standard error) of the fit, or None where there is no fit: then nothing is said.
    """
    return trust_all(spins, relative_gap, relative_error, predict, [tolerance])[0]


def trust_all(spins, relative_gap, relative_error, predict, tolerances) -> list[Trust]:
    """As `trust` for several tolerances, with one prediction for all of them."""
    nothing = [UNKNOWN] * len(tolerances)
    spins, gap, error = (np.asarray(a, float) for a in (spins, relative_gap, relative_error))
    good = np.isfinite(gap) & np.isfinite(error)
    spins, gap, error = spins[good], gap[good], error[good]
    if predict is None or len(spins) < 2:
        return nothing
    near = np.where((gap >= 0) & (gap - error <= 0), 0.0, np.minimum(np.abs(gap), np.abs(gap - error)))
    far = np.maximum(np.abs(gap), np.abs(gap - error))
    value, deviation = predict(_GRID)
    if not np.isfinite(value).all():
        return nothing
    # Data stand in for the fit where there are any, and below the smallest spin nothing is asked.
    asked = spins[0] <= _GRID
    asked[np.minimum(np.searchsorted(_GRID, spins), len(_GRID) - 1)] = False
    grid, size, deviation = _GRID[asked], np.abs(value[asked]), deviation[asked]
    deviation = np.where(spins[-1] < grid, deviation, 0.0)
    smallest, largest = np.maximum(size - 2 * deviation, 0.0), size + 2 * deviation
    found = []
    for tolerance in tolerances:
        spin = _from(spins, far, grid, size, tolerance)
        low, high = _from(spins, near, grid, smallest, tolerance), _from(spins, far, grid, largest, tolerance)
        found.append(Trust(spin, low, high, _state(spins, spin)) if np.isfinite(spin) else UNKNOWN)
    return found


def _from(spins, data, grid, fit, tolerance):
    """The half-integer after the last spin that is out of tolerance, by the data or by the fit on its grid."""
    beyond, outside = np.flatnonzero(fit > tolerance), spins[data > tolerance]
    last = max(grid[beyond[-1]] if len(beyond) else -np.inf, outside[-1] if len(outside) else -np.inf)
    if last == -np.inf:
        return float(spins[0])
    if last >= _GRID[-1]:
        return np.inf
    return float(last + 0.5) if last < _SMALL[-1] else float(_GRID[np.searchsorted(_GRID, last) + 1])


def _state(spins, spin):
    if spin == spins[0]:
        return "measured" if spin == 0.5 else "at_most"
    if spin > spins[-1]:
        return "extrapolated"
    return "measured" if {spin, spin - 0.5} <= set(spins.tolist()) else "interpolated"
