"""Long parts whose process dies at every saving: the study comes to the same numbers, and no step is done twice."""

import numpy as np
import pytest

from manybody.model import couplings
from manybody.quantum import ground_state, schedule
from manybody.workflow import worker
from manybody.workflow.document import Settings
from manybody.workflow.encoding import unpack
from manybody.workflow.engine import run_tasks
from manybody.workflow.inprocess import InProcess
from manybody.workflow.journal import Journal
from manybody.workflow.parts import run_part, study_tasks
from manybody.workflow.points import study_from_functions

TOGETHER, APART = 7, 11


def chains(*lengths):
    """Open chains side by side in a field."""
    ends = np.cumsum(lengths).tolist()
    pairs = [(i, i + 1) for i in range(ends[-1] - 1) if i + 1 not in ends]
    return couplings.exchange(ends[-1], pairs, 1.0) + couplings.field(ends[-1], range(ends[-1]), [0, 0, 0.7])


@pytest.fixture
def steps(monkeypatch):
    """A list that grows by one with every step of a sweep."""
    done = []
    step = schedule.two_site.step
    monkeypatch.setattr(schedule.two_site, "step", lambda *given: (done.append(1), step(*given))[1])
    return done


def test_every_death_costs_what_was_not_saved_and_no_more(steps, monkeypatch, tmp_path):
    # As if exact diagonalization went no further than three spins 1: one cluster, for which sectors are compared, and
    # three apart, two of them equal.
    monkeypatch.setattr(ground_state, "_SMALL", 5)
    monkeypatch.setattr(ground_state, "_affordable", lambda cost, settings: False)
    functions = [chains(TOGETHER), chains(4, 3, 4)]
    study = study_from_functions(functions, spins=[1], rules=["wick"], settings=Settings(starts=4, accuracy=1e-6))
    tasks = [task for task in study_tasks(study) if task.kind != "bounds"]

    def run(folder):
        steps.clear()
        with Journal(folder) as journal:
            counts = run_tasks(tasks, run_part, journal, InProcess(8e9), attempts=1000)
            assert counts.finished == len(tasks)
            found = {key: unpack(data) for key, data in journal.data(task.key for task in tasks).items()}
            return {key: part for key, part in found.items() if "quantum_energy" in part}, journal.entries()

    alone, _ = run(None)
    undisturbed = len(steps)

    class Dying(worker.Checkpoint):
        pauses = 0

        def due(self):
            Dying.pauses += 1
            return Dying.pauses % 31 == 0

        def save(self, state):
            super().save(state)
            raise KeyboardInterrupt("as if the process were gone")

    monkeypatch.setattr(worker, "Checkpoint", Dying)
    found, entries = run(tmp_path)
    assert len(found) == 2 and sum(entry.attempts - 1 for entry in entries.values()) >= undisturbed // 31
    for key, part in alone.items():
        again = found[key]
        assert abs(again["quantum_energy"] - part["quantum_energy"]) <= part["quantum_energy_error"]
        assert again["status"] == part["status"] == "converged" and again["sector"] == part["sector"]
    assert abs(len(steps) - undisturbed) <= 0.1 * undisturbed
    # What is finished needs no state any more.
    assert not (tmp_path / "states.sqlite").exists()
