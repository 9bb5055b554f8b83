"""Kills at random moments, in small: the full 500 are in tests/benchmarks/faults.py."""

from fake_parts import run_fake
from killed_run import kill_and_resume, study, torn

from manybody.workflow.engine import run_tasks
from manybody.workflow.inprocess import InProcess
from manybody.workflow.journal import Journal


def undisturbed(folder, parts):
    from manybody.workflow.encoding import unpack

    folder.mkdir()
    tasks = study(folder, parts, 0)
    with Journal(None) as journal:
        run_tasks(tasks, run_fake, journal, InProcess(1e9))
        return {key: unpack(data) for key, data in journal.data([task.key for task in tasks]).items()}


def equal(results, expected):
    assert results.keys() == expected.keys()
    for key, result in results.items():
        assert result["value"] == expected[key]["value"]
        assert result["array"].tobytes() == expected[key]["array"].tobytes()


def test_kills_of_the_run_lose_and_repeat_nothing(tmp_path):
    expected = undisturbed(tmp_path / "calm", 60)
    folder = tmp_path / "rough"
    folder.mkdir()
    results, _, twice, hits = kill_and_resume(folder, 5, 60, 0, 0.01, seed=1)
    assert hits == 5 and twice == [] and not torn(folder)
    equal(results, expected)


def test_kills_of_run_and_worker_lose_and_repeat_nothing(tmp_path):
    expected = undisturbed(tmp_path / "calm", 60)
    folder = tmp_path / "rough"
    folder.mkdir()
    results, _, twice, hits = kill_and_resume(folder, 2, 60, 2, 0.02, seed=2)
    assert hits == 2 and twice == [] and not torn(folder)
    equal(results, expected)
