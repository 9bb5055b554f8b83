"""Solves broken off again and again, at every stage: nothing done is repeated, and the result is that of one that was
left alone."""

from dataclasses import replace

import numpy as np
import pytest
from spin_models import chain, heisenberg, ring

from manybody.model import couplings
from manybody.model.quantization import quantize
from manybody.quantum import exact, schedule, sweeps
from manybody.quantum import ground_state as entry
from manybody.quantum.ground_state import ground_state
from manybody.quantum.result import GroundState, QuantumSettings
from manybody.quantum.saved_states import FORMAT, FileCheckpoint, open_states, pack, unpack
from manybody.quantum.start_state import classical_start
from manybody.quantum.sweeps import matrix_product_ground_state


class BrokenOff(BaseException):
    """As if the process were killed."""


class Kept:
    """Saves at every so many pauses; breaks the solve off after that many savings."""

    def __init__(self, every, data=None, savings=None):
        self.every, self.data, self.savings, self.pauses = every, data, savings, 0

    def load(self):
        return self.data

    def due(self):
        self.pauses += 1
        return self.pauses % self.every == 0

    def save(self, data):
        self.data = data
        if self.savings is not None:
            self.savings -= 1
            if self.savings == 0:
                raise BrokenOff


@pytest.fixture
def steps(monkeypatch):
    """A list that grows by one with every step of a sweep."""
    done = []
    for module in (schedule.two_site, schedule.one_site):
        monkeypatch.setattr(module, "step", lambda *given, step=module.step: (done.append(1), step(*given))[1])
    return done


def stages(data):
    """What a saved state holds: the first parts of the names."""
    return {label.split(":")[0].split("/")[0] for label in unpack(data)} - {"format", "owner"}


def broken_off(solve, every):
    """The result after a break at every saving, and the stages found at each of them."""
    data, found = None, []
    while True:
        kept = Kept(every, data, 1)
        try:
            return solve(kept), found
        except BrokenOff:
            assert kept.data != data
            data = kept.data
            found.append(stages(data))


def same(found, alone):
    assert abs(found.energy - alone.energy) <= max(found.error, alone.error)
    assert found.status == alone.status and found.method == alone.method
    np.testing.assert_equal(found.sector, alone.sector)
    assert found.error == pytest.approx(alone.error, rel=0.5)


def in_a_field(n, spin):
    return quantize(couplings.exchange(n, chain(n), 1.0) + couplings.field(n, range(n), [0, 0, 1.1]), spin)


CANTED = couplings.exchange(4, chain(4), [1.0, 0.8, 1.3]) + couplings.field(4, range(4), [0.3, 0.2, 0.1])
CASES = {
    # sectors compared, two sites a step
    "field": (in_a_field(8, 1), 1e-6, 19, ["sector", "run", "guard"]),
    # the same, one site a step
    "large spins": (in_a_field(6, 1.5), 1e-6, 23, ["sector", "run"]),
    # one sector, both parities; coarser, rounding decides which of two errors is found
    "ring": (heisenberg(10, ring(10), 1.0), 1e-7, 17, ["run", "parity", "guard"]),
    # nothing conserved, levels added on the way
    "canted": (quantize(CANTED, 6.0), 1e-6, 5, ["run", "guard"]),
}


@pytest.mark.parametrize("case", CASES)
def test_broken_off_at_every_saving_nothing_is_repeated(case, steps):
    op, accuracy, every, expected = CASES[case]
    settings = QuantumSettings(accuracy=accuracy)
    start = classical_start(op, np.random.default_rng(1))

    def solve(checkpoint):
        return matrix_product_ground_state(op, settings, start, checkpoint=checkpoint)

    alone = solve(None)
    undisturbed = len(steps)
    # Saving itself changes nothing, to the last digit.
    saving = solve(Kept(every))
    assert saving.energy == alone.energy and saving.error == alone.error and len(steps) == 2 * undisturbed
    steps.clear()
    found, seen = broken_off(solve, every)
    same(found, alone)
    assert set(expected) <= set.union(*seen) and len(seen) >= undisturbed // every
    # A sweep more or less, where rounding decides which of equal states is cut; the breaks cost none.
    assert abs(len(steps) - undisturbed) <= 0.1 * undisturbed


def test_a_guard_run_that_wins_is_broken_off_too(steps, monkeypatch):
    # As if the first run had got stuck high above the ground state.
    honest = sweeps._Solver._lower_parity

    def stuck(self, run):
        run = honest(self, run)
        run.stages.append(replace(run.stages[-1], energy=run.energy + 1.0))
        return run

    monkeypatch.setattr(sweeps._Solver, "_lower_parity", stuck)
    op, settings = heisenberg(8, chain(8), 1.0), QuantumSettings(accuracy=1e-9)
    alone = matrix_product_ground_state(op, settings)
    undisturbed = len(steps)
    steps.clear()
    found, seen = broken_off(lambda kept: matrix_product_ground_state(op, settings, checkpoint=kept), 11)
    same(found, alone)
    assert found.trace_energy[-1] == found.energy and {"run", "guard"} in seen
    assert abs(len(steps) - undisturbed) <= 0.1 * undisturbed


@pytest.fixture
def sweeps_only(monkeypatch):
    """As if every cluster of more than two sites were too large for exact diagonalization."""
    monkeypatch.setattr(entry, "_SMALL", 4)
    monkeypatch.setattr(entry, "_affordable", lambda cost, settings: False)


def test_clusters_that_are_done_are_not_solved_again(steps, sweeps_only, monkeypatch):
    solved = []
    solve = entry.exact_ground_state
    monkeypatch.setattr(entry, "exact_ground_state", lambda *given: (solved.append(1), solve(*given))[1])
    # Two sites, a chain in a field twice, another one; numbered in turns.
    pairs = [(0, 7), (1, 2), (2, 3), (3, 4), (5, 8), (8, 9), (9, 10), (6, 11), (11, 12), (12, 13), (13, 14)]
    f = couplings.exchange(15, pairs, 1.0) + couplings.field(15, range(15), [0, 0, 0.8]) + 0.25
    op = quantize(f, 1)
    settings = QuantumSettings(accuracy=1e-8, observables=("moments", "correlations", "entanglement"))
    alone = ground_state(op, settings)
    undisturbed = len(steps)
    steps.clear(), solved.clear()
    found, seen = broken_off(lambda kept: ground_state(op, settings, checkpoint=kept), 29)
    same(found, alone)
    assert len(steps) == pytest.approx(undisturbed, rel=0.1) and len(solved) == 1
    assert {"cluster0", "cluster1", "cluster3"} in seen
    for name, values in alone.observables.items():
        np.testing.assert_allclose(found.observables[name], values, atol=1e-3)
    # One cluster is taken over as numbers, without its state.
    assert found.state.states[0] is None and found.state.states[3] is not None
    assert found.trace_energy[-1] == pytest.approx(found.energy)


def half_way(op, settings):
    """Bytes saved in the middle of a solve."""
    kept = Kept(20, savings=2)
    with pytest.raises(BrokenOff):
        matrix_product_ground_state(op, settings, checkpoint=kept)
    return kept.data


def test_damaged_and_foreign_states_are_ignored(steps):
    op, settings = heisenberg(8, chain(8), 1.0), QuantumSettings(accuracy=1e-7)
    data = half_way(op, settings)
    saved = len(steps)
    steps.clear()
    alone = matrix_product_ground_state(op, settings)
    undisturbed = len(steps)
    flipped = bytearray(data)
    flipped[len(data) // 2] ^= 1
    older = pack(unpack(data) | {"format": np.array([FORMAT - 1])})
    foreign = (
        half_way(heisenberg(8, ring(8), 1.0), settings),
        half_way(heisenberg(8, chain(8), 1.0), replace(settings, accuracy=1e-8)),
        half_way(heisenberg(8, chain(8), 1.0), replace(settings, max_bond=16)),
    )
    for useless in (b"", b"no state", data[: len(data) // 2], data[:-1], bytes(flipped), older, *foreign):
        steps.clear()
        found = matrix_product_ground_state(op, settings, checkpoint=Kept(10**9, useless))
        assert len(steps) == undisturbed and found.energy == alone.energy
    steps.clear()
    matrix_product_ground_state(op, settings, checkpoint=Kept(10**9, data))
    assert len(steps) == undisturbed - saved


def test_state_in_a_file(tmp_path, monkeypatch, steps):
    monkeypatch.setattr("manybody.quantum.saved_states.SAVE_EVERY", 0.0)
    path = tmp_path / "state"
    op, settings = in_a_field(4, 1), QuantumSettings(accuracy=1e-4)

    def tired(facts):
        assert facts["stage"] == "search for the sector"
        if facts["sweep"] == 4:
            raise BrokenOff

    with pytest.raises(BrokenOff):
        matrix_product_ground_state(op, settings, None, 0.0, tired, path)
    before = len(steps)
    assert stages(path.read_bytes()) == {"sector"} and [file.name for file in tmp_path.iterdir()] == ["state"]
    # A saving that is broken off leaves the earlier one as it is.
    earlier = path.read_bytes()
    with monkeypatch.context() as patch:
        patch.setattr("os.fsync", lambda number: (_ for _ in ()).throw(BrokenOff))
        with pytest.raises(BrokenOff):
            FileCheckpoint(path).save(b"half of the next one")
    assert path.read_bytes() == earlier
    steps.clear()
    alone = matrix_product_ground_state(op, settings)
    undisturbed = len(steps)
    steps.clear()
    same(matrix_product_ground_state(op, settings, checkpoint=path), alone)
    # Saved last before the step after which it broke off.
    assert len(steps) == undisturbed - before + 1
    assert not path.exists()


def test_sectors_and_stages_of_exact_diagonalization_are_not_repeated(monkeypatch):
    # As if the iteration in every sector of more than 300 states were long.
    monkeypatch.setattr(exact, "_ALWAYS_FITS", 0)
    monkeypatch.setattr(exact, "_LONG", 0)
    done = []
    iterated = exact._iterated

    def counted(matrix, start, tolerance):
        vector = iterated(matrix, start, tolerance)
        done.append(tolerance)
        return vector

    monkeypatch.setattr(exact, "_iterated", counted)
    f = couplings.exchange(12, ring(12), [1.0, 1.0, 0.6]) + couplings.field(12, range(12), [0, 0, 0.9])
    op = quantize(f, 0.5)
    alone = ground_state(op)
    sectors = len(done)
    done.clear()
    found, seen = broken_off(lambda kept: ground_state(op, checkpoint=kept), 70)
    same(found, alone)
    assert abs(found.energy - alone.energy) < 1e-12 and found.state is not None and {"exact"} in seen
    assert sectors == 5 and done == list(exact.stages_of(0)) * sectors and len(seen) >= sectors


def test_longer_iterations_have_more_stages():
    few, many = exact.stages_of(2 * 10**8), exact.stages_of(9 * 10**8)
    assert len(few) < len(many) and few[0] == many[0] and few[-1] == many[-1] == exact._TOLERANCE


def test_nothing_is_kept_without_a_checkpoint():
    states = open_states(None).within("part")
    states.put("run", lambda: {"a": np.zeros(1)})
    assert states.get("run") is None and states.pause() is None and states.finish() is None


def test_results_as_arrays():
    found = ground_state(heisenberg(4, chain(4), 1.0), QuantumSettings(observables=("moments", "entanglement")))
    again = GroundState.from_arrays(unpack(pack(found.to_arrays())))
    assert again.state is None and again.observables.keys() == found.observables.keys()
    for name in ("energy", "error", "status", "advice", "method", "sector", "hit_bond_limit", "sector_axis"):
        np.testing.assert_equal(getattr(again, name), getattr(found, name))
    for name, values in found.observables.items():
        np.testing.assert_equal(again.observables[name], values)
