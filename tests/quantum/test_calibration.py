"""Stated errors hold: a smaller round of tests/benchmarks/calibration.py."""

import importlib.util
import sys
from pathlib import Path

import numpy as np

from manybody.quantum.extrapolation import Stage, energy_error

PATH = Path(__file__).parents[1] / "benchmarks" / "calibration.py"


def calibration():
    spec = importlib.util.spec_from_file_location("calibration", PATH)
    module = importlib.util.module_from_spec(spec)
    sys.modules["calibration"] = module
    spec.loader.exec_module(module)
    return module


def test_truth_lies_below_by_at_most_the_error():
    module = calibration()
    outcomes = [*module.random_outcomes(36, seed=11), *module.bethe_outcomes(bonds=(8, 16))]
    coverage, median, counted = module.summary(outcomes)
    assert counted > 25
    assert coverage >= 0.95
    assert 1 < median < 10


def stage(bond, energy, variance, discarded, gain=0.0, ratio=0.0):
    return Stage(bond, energy, variance, discarded, gain, ratio)


def test_error_of_exactly_linear_stages_is_a_small_multiple_of_the_distance():
    truth, slope = -10.0, 0.2
    stages = [stage(8, -7.0, 10.0, 0.0)]
    stages += [stage(16 * 2**k, truth + slope * v, v, v / 50) for k, v in enumerate((1e-2, 1e-3, 1e-4))]
    error = energy_error(stages, 1e-14)
    assert slope * 1e-4 <= error <= 5 * slope * 1e-4


def test_error_never_falls_below_rounding_and_grows_with_slow_sweeps():
    exact = [stage(4, -3.0, 1.0, 0.0), stage(16, -4.0, 1e-28, 0.0), stage(16, -4.0, 1e-28, 0.0)]
    assert energy_error(exact, 1e-13) == 1e-13
    crawling = [*exact[:2], stage(16, -4.0, 1e-28, 0.0, 1e-5, 0.9)]
    assert np.isclose(energy_error(crawling, 1e-13), 3 * 1e-5 * 9)
    lonely = [stage(4, -3.0, 0.25, 0.0)]
    assert energy_error(lonely, 1e-13) >= 0.5


def test_a_stage_that_changed_nothing_is_no_proof_of_convergence():
    same = [stage(4, -3.0, 1.0, 0.0), stage(7, -4.0, 1.7e-8, 9e-14), stage(7, -4.0, 1.7e-8, 9e-18)]
    # The distance to the ground energy is at least the variance over the width of the spectrum (Bhatia, Davis 2000, Am.
    # Math. Mon. 107, 353, from memory), here 20 at most.
    assert energy_error(same, 1e-13) > 1.7e-8 / 20
