"""The engine in-process, on parts that do what the test wants: order, admission, failures, states, stopping."""

import io
import os
import re
import signal
import threading

import pytest
from fake_parts import fake_study, fake_task, run_fake

from manybody.workflow.encoding import unpack
from manybody.workflow.engine import pending, run_tasks
from manybody.workflow.inprocess import InProcess
from manybody.workflow.journal import Journal
from manybody.workflow.progress import Display, Lines
from manybody.workflow.tasks import Interrupted


class Recorder(Display):
    every = 0.0

    def __init__(self):
        super().__init__()
        self.order, self.said, self.heard = [], [], []

    def finished(self, task, outcome):
        super().finished(task, outcome)
        self.order.append(task.key)

    def report(self, key, info):
        super().report(key, info)
        self.heard.append((key, info))

    def say(self, text):
        self.said.append(text)


def run(tasks, folder=None, **options):
    display = Recorder()
    memory = options.pop("memory", 1e9)
    with Journal(folder) as journal:
        counts = run_tasks(tasks, run_fake, journal, InProcess(memory), display, **options)
        results = {key: unpack(data) for key, data in journal.data([task.key for task in tasks]).items()}
        return counts, results, journal.entries(), display


def computed(log):
    return [line.split()[0] for line in log.read_text().splitlines()] if log.exists() else []


def test_shared_parts_are_computed_once_and_reach_their_dependents(tmp_path):
    log = tmp_path / "log"
    tasks = fake_study(20, shared=5, log=str(log))
    counts, results, _, _ = run(tasks)
    assert counts.finished == 24 and counts.failed == counts.waiting == 0
    assert sorted(computed(log)) == sorted(task.key for task in tasks)
    for i in range(20):
        assert results[f"quantum-{i}"]["value"] == i + i // 5


def test_second_run_computes_only_what_is_missing(tmp_path):
    log = tmp_path / "log"
    tasks = fake_study(10, log=str(log))
    run(tasks[:7], tmp_path)
    before = len(computed(log))
    counts, _, _, _ = run(tasks, tmp_path)
    assert before == 7 and len(computed(log)) == len(tasks) == counts.finished
    assert counts.reused == 7
    counts, _, _, display = run(tasks, tmp_path)
    assert counts.reused == counts.finished == len(tasks) and display.order == []
    assert len(computed(log)) == len(tasks)


def test_torn_entry_is_computed_again_with_the_same_result(tmp_path):
    import sqlite3

    log = tmp_path / "log"
    tasks = fake_study(6, log=str(log))
    _, first, _, _ = run(tasks, tmp_path)
    with sqlite3.connect(tmp_path / "journal.sqlite") as database:
        database.execute("update parts set data = substr(data, 1, 40) where key = 'quantum-3'")
    database.close()
    _, second, _, _ = run(tasks, tmp_path)
    assert computed(log).count("quantum-3") == 2 and len(computed(log)) == len(tasks) + 1
    assert first["quantum-3"]["array"].tobytes() == second["quantum-3"]["array"].tobytes()


def test_longest_first_counting_what_waits_for_a_part():
    lengths = {0: 10.0, 1: 50.0, 2: 30.0, 3: 90.0}
    tasks = [fake_task(i, seconds=length, sleep=length / 500) for i, length in lengths.items()]
    tasks += [fake_task(9, "classical", seconds=5.0), fake_task(10, seconds=80.0, sleep=0.16, depends=["classical-9"])]
    _, _, _, display = run(tasks)
    # 90 s, then 5 s with 80 s waiting for it, ...
    assert display.order == [f"quantum-{i}" if i != 9 else "classical-9" for i in (3, 9, 10, 1, 2, 0)]


def test_too_large_parts_are_refused_before_anything_starts(tmp_path):
    log = tmp_path / "log"
    tasks = [*fake_study(3, log=str(log)), fake_task(50, "classical", bytes=18.3e9, log=str(log))]
    tasks.append(fake_task(51, depends=["classical-50"], log=str(log)))
    counts, _, entries, display = run(tasks, tmp_path, memory=4e9)
    assert display.order[:2] == ["classical-50", "quantum-51"] and counts.refused == 2 and counts.finished == 4
    assert entries["classical-50"].message == "needs 18.3 GB of memory; a worker can give 4.0 GB"
    assert "classical-50, which was refused" in entries["quantum-51"].message
    assert len(computed(log)) == 4
    counts, _, _, _ = run(tasks, tmp_path, memory=40e9)  # more memory: no flag is needed to run them
    assert counts.finished == 6


def test_failure_is_recorded_and_the_rest_goes_on(tmp_path):
    log = tmp_path / "log"
    tasks = [*fake_study(6, shared=3, log=str(log)), fake_task(7, "classical", error="no minimum", log=str(log))]
    tasks.append(fake_task(8, depends=["classical-7"], log=str(log)))
    counts, _, entries, _ = run(tasks, tmp_path)
    assert (counts.finished, counts.failed) == (8, 2)
    assert entries["classical-7"].message.startswith("ValueError: no minimum [fake_parts.py, line ")
    assert entries["quantum-8"].message == "needs the classical part of classical-7, which failed"
    assert [task.key for task in pending(tasks, _Entries(entries))] == []
    counts, _, _, _ = run(tasks, tmp_path)
    assert counts.failed == 2 and computed(log).count("classical-7") == 1
    repaired = [*tasks[:-2], fake_task(7, "classical", log=str(log)), tasks[-1]]
    counts, _, _, _ = run(repaired, tmp_path, retry_failed=True)
    assert counts.failed == 0 and counts.finished == 10
    assert computed(log).count("classical-7") == 2 and len(computed(log)) == 9 + 2


class _Entries:
    def __init__(self, entries):
        self._entries = entries

    def entries(self):
        return self._entries


def test_unstorable_result_and_exit_fail_their_part_only():
    def odd(payload, inputs, report, checkpoint):
        if payload["number"] == 0:
            return {"state": object()}
        if payload["number"] == 1:
            raise SystemExit(3)
        return {"value": 1}

    with Journal(None) as journal:
        counts = run_tasks([fake_task(i) for i in range(3)], odd, journal, InProcess(1e9))
        entries = journal.entries()
    assert (counts.finished, counts.failed) == (1, 2)
    assert "result.state: a object cannot be stored" in entries["quantum-0"].message
    assert entries["quantum-1"].message.startswith("SystemExit: 3")


def test_long_parts_report_and_save(tmp_path):
    tasks = [fake_task(1, steps=4, save_always=True, seconds=60.0)]
    _, results, _, display = run(tasks, tmp_path)
    assert results["quantum-1"]["first"] == 0
    assert display.heard[0] == ("quantum-1", {"step": 0})
    assert not (tmp_path / "states.sqlite").exists()


class Pressing(Recorder):
    """Presses Ctrl-C at the first report of a part, and again, if told to, when the run says that it is stopping."""

    def __init__(self, twice=False):
        super().__init__()
        self.twice = twice

    def report(self, key, info):
        if not self.heard:
            os.kill(os.getpid(), signal.SIGINT)
        super().report(key, info)

    def say(self, text):
        super().say(text)
        if self.twice and text.startswith("Stopping"):
            os.kill(os.getpid(), signal.SIGINT)


def test_interrupt_saves_states_and_a_second_run_resumes_from_them(tmp_path):
    tasks = [fake_task(1, steps=10, await_stop=4, seconds=60.0), fake_task(2, seconds=50.0)]
    with Journal(tmp_path) as journal, pytest.raises(Interrupted):
        run_tasks(tasks, run_fake, journal, InProcess(1e9), Pressing())
    assert (tmp_path / "states.sqlite").exists()
    _, results, _, _ = run(tasks, tmp_path)
    assert results["quantum-1"]["first"] == 5
    assert results["quantum-2"]["value"] == 2.0


def test_second_interrupt_stops_at_once(tmp_path):
    release = threading.Event()

    def endless(payload, inputs, report, checkpoint):
        report(step=0)
        release.wait()

    display = Pressing(twice=True)
    try:
        with Journal(tmp_path) as journal, pytest.raises(KeyboardInterrupt):
            run_tasks([fake_task(1, seconds=60.0)], endless, journal, InProcess(1e9), display)
    finally:
        release.set()
    assert "Ctrl-C again stops at once" in display.said[-1]
    with Journal(tmp_path) as journal:
        assert journal.entries() == {}
    assert signal.getsignal(signal.SIGINT) is signal.default_int_handler


class Watched(io.StringIO):
    """Tells when some words have been written."""

    def __init__(self, words):
        super().__init__()
        self.words, self.seen = words, threading.Event()

    def write(self, text):
        if self.words in text:
            self.seen.set()
        return super().write(text)


def shown(seen):
    """As run_fake, but part 1 says how far it is and then waits until that has been shown."""

    def run_part(payload, inputs, report, checkpoint):
        if payload["number"] == 1:
            report(step=7)
            seen.wait()
        return run_fake(payload, inputs, report, checkpoint)

    return run_part


def test_plain_lines_tell_counts_failures_and_long_parts(monkeypatch):
    from manybody.workflow import progress

    monkeypatch.setattr(progress, "LONG", 0.0)
    stream = Watched("step 7")
    lines = Lines(stream)
    lines.every = 0.0
    tasks = [fake_task(1, seconds=60.0), *(fake_task(i, error="too bad") for i in range(2, 20))]
    with Journal(None) as journal:
        run_tasks(tasks, shown(stream.seen), journal, InProcess(1e9), lines)
    text = stream.getvalue()
    assert text.startswith("19 parts\n")
    assert re.search(r"  quantum-1 \(quantum\) on \S+ for .*: step 7\n", text)
    assert text.count("failed: quantum-") == 10 and text.count("further failures: see `manybody status`") == 1
    assert "to do, about" in text and "finished: quantum-1 (quantum) in " in text


def test_long_runs_write_what_they_have_now_and_then(monkeypatch, tmp_path):
    from manybody.workflow import engine

    def written(every, folder):
        monkeypatch.setattr(engine, "MEANWHILE", every)
        seen = []
        with Journal(folder) as journal:
            tasks = [fake_task(i, seconds=5.0) for i in range(12)]
            run_tasks(
                tasks, run_fake, journal, InProcess(1e9), meanwhile=lambda: seen.append(len(journal.entries()))
            )  # fmt: skip
        return seen

    seen = written(0.0, tmp_path)
    # The first part travels alone, since nobody knows yet how short it is; then only what is new is written.
    assert seen[0] == 1 and seen == sorted(set(seen)) and seen[-1] <= 12
    assert written(1e6, None) == []


def test_what_is_running_is_noted_for_others(monkeypatch, tmp_path):
    from manybody.workflow import engine
    from manybody.workflow.summary import status_text

    monkeypatch.setattr(engine, "NOTE_EVERY", 0.0)
    seen = threading.Event()
    told = []

    class Looking(Display):
        every = 0.0

        def update(self, counts, batches):
            told.append(status_text(tmp_path))
            if "step 7" in told[-1]:
                seen.set()

    with Journal(tmp_path) as journal:
        tasks = [fake_task(1, seconds=60.0), fake_task(2)]
        journal.set_study(tasks, {})
        run_tasks(tasks, shown(seen), journal, InProcess(1e9), Looking())
    during = next(text for text in told if "step 7" in text)
    assert f"A run is going on: process {os.getpid()} on " in during and "2 waiting" in during
    assert re.search(r"  quantum-1 \(quantum\) on \S+ for .*: step 7", during)
    assert status_text(tmp_path).startswith("2 finished\n") and "No run is going on." in status_text(tmp_path)


def test_live_display_shows_what_runs_where():
    from rich.console import Console

    from manybody.workflow.progress import Live

    stream = Watched("step 7")
    console = Console(file=stream, force_terminal=True, width=150)
    with Journal(None) as journal:
        tasks = [fake_task(1, seconds=60.0), fake_task(2, error="[red]no[/red]")]
        run_tasks(tasks, shown(stream.seen), journal, InProcess(1e9), Live(console))
    text = stream.getvalue()
    assert "quantum-1" in text and "to do" in text
    assert "failed: quantum-2 (quantum): ValueError: [red]no[/red]" in text
