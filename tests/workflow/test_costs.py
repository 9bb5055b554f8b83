"""Calibration of the cost model, and estimates that scale as the work does."""

import math

import numpy as np
import pytest

from manybody.workflow import estimates
from manybody.workflow.costs import CostModel, duration, gigabytes
from manybody.workflow.document import Settings, parse_document
from manybody.workflow.points import expand


def test_few_measurements_shift_many_also_bend():
    model = CostModel()
    assert model.seconds("exact", 2.0) == 2.0
    for _ in range(4):
        model.measured("exact", 1.0, 3.0)
    assert model.seconds("exact", 2.0) == pytest.approx(6.0)
    assert model.seconds("sweeps", 2.0) == 2.0  # kind by kind
    for expected in np.geomspace(0.01, 100, 60):
        model.measured("sweeps", expected, 5 * expected**0.8)
    assert model.seconds("sweeps", 1000.0) == pytest.approx(5 * 1000**0.8, rel=1e-6)


def test_scatter_is_averaged_in_time_not_in_log():
    rng = np.random.default_rng(3)
    model, took = CostModel(), np.exp(rng.normal(0, 0.8, 300))
    for seconds in took:
        model.measured("exact", 1.0, seconds)
    assert model.seconds("exact", 1.0) == pytest.approx(took.mean(), rel=0.15)


def test_memory_only_ever_rises():
    model = CostModel()
    model.measured("sweeps", 1, 1, expected_bytes=1e9, peak=0.5e9)
    assert model.bytes("sweeps", 1e9) == 1e9
    model.measured("sweeps", 1, 1, expected_bytes=1e9, peak=1.5e9)
    model.measured("sweeps", 1, 1, expected_bytes=1e6, peak=9e6)  # too small to say anything
    assert model.bytes("sweeps", 1e9) == 1.5e9


def points(shape, sites, spin, term="exchange = 1.0"):
    text = f'[lattice]\nshape = "{shape}"\nsites = {sites}\n[[term]]\n{term}\n[quantum]\nspin = {spin}\n'
    return expand(parse_document(text)).points


def test_small_points_are_exact_and_large_ones_swept():
    kinds = [estimates.quantum(point, Settings())[0] for point in points("chain", [4, 10, 18, 40, 200], 0.5)]
    assert kinds == ["exact", "exact", "exact", "sweeps", "sweeps"]


def test_estimates_grow_with_size_and_spin_and_keep_to_the_memory_allowed():
    costs = [estimates.quantum(point, Settings()) for point in points("chain", [6, 12, 16, 20], 0.5)]
    seconds, sizes = [cost[1] for cost in costs], [cost[2] for cost in costs]
    assert seconds == sorted(seconds) and sizes == sorted(sizes)
    # 184756 states of 20 spins 1/2 with S^z = 0, some 11 entries each, and 26 vectors: between 30 MB and 300 MB
    assert 3e7 < sizes[-1] - estimates.LIBRARIES < 3e8
    kind, _, size = estimates.quantum(points("chain", [64], 2)[0], Settings(max_bond=4096, memory=2**30))
    assert kind == "sweeps" and size <= 2**30 + estimates.LIBRARIES
    least, short, long = (
        estimates.quantum(points("chain", [64], 2)[0], Settings(max_bond=bond))[1] for bond in (1, 60, 240)
    )
    # The cube of the bond dimension beside what does not depend on it.
    assert 40 < (long - least) / (short - least) < 70


def test_sweeps_on_wide_clusters_cost_more_than_on_chains():
    chain = estimates.quantum(points("chain", [64], 1)[0], Settings())
    ladder = estimates.quantum(points("ladder", [64], 1)[0], Settings())
    complete = estimates.quantum(points("complete", [64], 1)[0], Settings())
    assert chain[1] < ladder[1] and chain[2] < ladder[2]
    assert complete[1] < 2 * ladder[1]  # each site couples to one sum over the others


def test_times_and_sizes_read_well():
    assert [duration(x) for x in (0.02, 40, 90, 7200, 1e6, math.inf)] == [
        "20 ms",
        "40 s",
        "2 min",
        "2.0 h",
        "11.6 days",
        "?",
    ]
    assert [gigabytes(x) for x in (2e4, 3e6, 1.25e10, 2e12)] == ["20 kB", "3.0 MB", "12.5 GB", "2.0 TB"]
