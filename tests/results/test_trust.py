import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from manybody.results.trust import trust

SPINS = np.arange(1, 7) / 2


def power(first, second=0.0, error=0.0):
    return lambda s: (first / s + second / s**2, np.full(np.shape(s), error) / s**2)


def judge(gap, tolerance, predict=None, error=0.0, spins=SPINS):
    gap = np.asarray(gap, float)
    return trust(spins, gap, np.full(len(gap), error), predict or power(-1.0), tolerance)


def test_measured_between_neighbouring_spins():
    # |gap| = 1/S: 1/2 at S = 2, 2/5 at 5/2
    found = judge(-1 / SPINS, 0.45)
    assert (found.spin, found.state) == (2.5, "measured") and found.low == found.high == 2.5


def test_a_single_lucky_spin_does_not_count():
    gap = -1 / SPINS
    gap[1] = 0.0
    assert judge(gap, 0.45).spin == 2.5


def test_extrapolated_beyond_the_largest_spin_and_exactly_on_the_boundary():
    found = judge(-1 / SPINS, 0.1)
    assert (found.spin, found.state) == (10.0, "extrapolated")
    assert judge(-1 / SPINS, 1 / 10.2).spin == 10.5
    assert judge(-1 / SPINS, 1e-5).spin == pytest.approx(1e5, rel=1e-2)


def test_all_within_is_at_most_the_smallest_spin_computed():
    large = np.arange(6, 10) / 2
    assert judge(-1 / large, 0.5, spins=large).state == "at_most"
    assert judge(-0.1 / SPINS, 0.5, power(-0.1)).state == "measured"


def test_gaps_between_computed_spins_are_filled_by_the_fit():
    spins = np.array([0.5, 1.0, 4.0, 5.0])
    found = judge(-1 / spins, 0.45, spins=spins)
    assert (found.spin, found.state) == (2.5, "interpolated")


def test_zero_gaps_are_trusted_at_once():
    """Ferromagnets under wick."""
    found = judge(np.zeros(6), 0.01, power(0.0))
    assert (found.spin, found.state) == (0.5, "measured")


def test_errors_widen_the_answer():
    found = judge(-1 / SPINS, 0.1, power(-1.0, 0.0, 2.0))
    assert found.low < found.spin < found.high
    # the far end of a datum's interval counts: S = 5/2 reaches 0.4 + 0.06
    assert judge(-1 / SPINS, 0.45, error=0.06).spin == 3.0
    assert judge(-1 / SPINS, 0.45, error=0.06).low == 2.5


def test_nothing_is_said_without_a_fit_or_with_one_spin():
    assert trust(SPINS, -1 / SPINS, 0 * SPINS, None, 0.1).state == "unknown"
    assert judge([-1.0], 0.1, spins=SPINS[:1]).state == "unknown"
    assert np.isnan(judge(np.full(6, np.nan), 0.1).spin)
    assert judge(-1 / SPINS, 0.1, lambda s: (np.full(np.shape(s), np.nan),) * 2).state == "unknown"


@given(st.floats(-2, 2), st.floats(-1, 1), st.floats(0.01, 0.5), st.floats(1.01, 4))
def test_a_wider_tolerance_never_asks_for_a_larger_spin(first, second, tolerance, ratio):
    gap = first / SPINS + second / SPINS**2
    strict, wide = (judge(gap, t, power(first, second)).spin for t in (tolerance, tolerance * ratio))
    assert wide <= strict
    # from that spin on everything is within, and one step before something is not
    after = strict + np.arange(0, 2000) / 2
    assert np.all(np.abs(first / after + second / after**2) <= tolerance * (1 + 1e-9))
    if strict > 0.5:
        before = strict - 0.5
        assert abs(first / before + second / before**2) > tolerance * (1 - 1e-9)
