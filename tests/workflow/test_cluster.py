"""The engine on dask over loopback: workers that die, a scheduler of one's own, states that travel, equal numbers."""

import os
import signal
import subprocess
import sys
import threading
import time
from pathlib import Path

import pytest
from fake_parts import fake_study, fake_task, run_fake

from manybody.workflow.cluster import ExistingCluster, LocalProcesses
from manybody.workflow.encoding import unpack
from manybody.workflow.engine import run_tasks
from manybody.workflow.inprocess import InProcess
from manybody.workflow.journal import Journal
from manybody.workflow.progress import Display
from manybody.workflow.tasks import EngineError, Interrupted

TESTS = Path(__file__).parents[1]


class Listener(Display):
    def __init__(self):
        super().__init__()
        self.said, self.heard = [], []

    def say(self, text):
        self.said.append(text)

    def report(self, key, info):
        self.heard.append((key, info))


class Interrupter(Display):
    """Presses Ctrl-C as soon as a part reports."""

    pressed = False

    def report(self, key, info):
        if not self.pressed:
            self.pressed = True
            os.kill(os.getpid(), signal.SIGINT)


def run(tasks, executor, folder=None, display=None, **options):
    with Journal(folder) as journal:
        counts = run_tasks(tasks, run_fake, journal, executor, display, **options)
        results = {key: unpack(data) for key, data in journal.data([task.key for task in tasks]).items()}
        return counts, results, journal.entries()


def test_same_numbers_in_process_and_on_workers():
    tasks = fake_study(40)
    _, alone, _ = run(tasks, InProcess(1e9))
    counts, together, _ = run(tasks, LocalProcesses(2, dashboard=False))
    assert counts.finished == len(tasks) == len(alone)
    for key in alone:
        assert alone[key]["array"].tobytes() == together[key]["array"].tobytes()
        assert together[key]["value"] == alone[key]["value"] and together[key]["threads"] == "1"


def test_deaths_of_workers_cost_the_guilty_part_only(tmp_path):
    flag = str(tmp_path / "died")
    tasks = [*fake_study(30), fake_task(99, die_once=flag), fake_task(100, die=True), fake_task(101, bytes=1e13)]
    tasks.append(fake_task(102, "classical", steps=6, save_always=True, seconds=3.0))
    display = Listener()
    counts, results, entries = run(tasks, LocalProcesses(2, dashboard=False), tmp_path, display, attempts=2)
    assert (counts.finished, counts.failed, counts.refused) == (len(tasks) - 2, 1, 1)
    assert entries["quantum-100"].message == (
        "given up after 2 tries: the worker died while this part was in hand (out of memory, or killed)"
    )
    assert entries["quantum-100"].attempts == 2 and results["quantum-99"]["value"] == 99
    assert any("A worker on 127.0.0.1 died" in text for text in display.said)
    assert entries["quantum-101"].message.startswith("needs 10.0 TB of memory; a worker can give")
    assert ("classical-102", {"step": 0}) in display.heard


@pytest.fixture
def scheduler(tmp_path):
    """A scheduler and two workers as a user would start them: (scheduler file, their processes)."""
    environment = {**os.environ, "PYTHONPATH": f"{TESTS}{os.pathsep}{TESTS.parent}", "OPENBLAS_NUM_THREADS": "1"}
    file = tmp_path / "scheduler.json"
    quiet = {"env": environment, "cwd": tmp_path, "stdout": subprocess.DEVNULL, "stderr": subprocess.DEVNULL}
    dask = [sys.executable, "-m", "distributed.cli"]
    start = [f"{dask[2]}.dask_scheduler", "--host", "127.0.0.1", "--port", "0", "--no-dashboard"]
    processes = [subprocess.Popen([*dask[:2], *start, "--scheduler-file", str(file)], **quiet)]
    while not file.exists():
        time.sleep(0.05)
    worker = [*dask[:2], f"{dask[2]}.dask_worker", "--scheduler-file", str(file), "--nthreads", "1", "--no-nanny"]
    processes += [subprocess.Popen([*worker, "--no-dashboard"], **quiet) for _ in range(2)]
    yield file, processes
    for process in reversed(processes):
        process.terminate()
        try:
            process.wait(5)
        except subprocess.TimeoutExpired:
            process.kill()
            process.wait()


def wait_for_workers(file, count):
    from distributed import Client

    with Client(scheduler_file=str(file), set_as_default=False) as client:
        client.wait_for_workers(count, timeout=30)
        return client.scheduler.address


def test_existing_cluster_survives_the_death_of_a_worker_and_states_travel(tmp_path, scheduler):
    file, processes = scheduler
    address = wait_for_workers(file, 2)
    log = tmp_path / "log"
    tasks = fake_study(60, sleep=0.05, log=str(log))
    out = tmp_path / "out"
    out.mkdir()

    def kill():
        while not log.exists() or len(log.read_text().splitlines()) < 20:
            time.sleep(0.02)
        processes[1].kill()

    killer = threading.Thread(target=kill)
    killer.start()
    counts, results, _ = run(tasks, ExistingCluster(address), out)
    killer.join()
    assert counts.finished == len(tasks) and counts.failed == 0
    assert results["quantum-59"]["value"] == 59 + 11

    # a long part, interrupted: its state comes back over the network and the next run goes on from it
    # (large enough for dask to warn of what it takes for data that should have been loaded elsewhere)
    long = [fake_task(1, "sweeps", steps=10, await_stop=4, state_bytes=11_000_000, seconds=60.0)]
    with pytest.raises(Interrupted):
        run(long, ExistingCluster(scheduler_file=file), out, Interrupter())
    _, results, _ = run(long, ExistingCluster(scheduler_file=file), out)
    assert results["sweeps-1"]["first"] == 5


def test_unreachable_schedulers_are_told(tmp_path, monkeypatch):
    from manybody.workflow import cluster

    monkeypatch.setattr(cluster, "PATIENCE", 2.0)
    with pytest.raises(EngineError, match=r"no scheduler file .*nothing\.json"):
        run([fake_task(1)], ExistingCluster(scheduler_file=tmp_path / "nothing.json"))
    with pytest.raises(EngineError, match=r"no scheduler answers at tcp://127\.0\.0\.1:1"):
        run([fake_task(1)], ExistingCluster("tcp://127.0.0.1:1"))


def test_local_workers_that_do_not_start_are_told(monkeypatch):
    import distributed

    def broken(**options):
        raise RuntimeError("Nanny failed to start.") from OSError("no process can be started")

    monkeypatch.setattr(distributed, "LocalCluster", broken)
    with pytest.raises(EngineError, match=r"cannot be started: no process can be started\. `--workers 0` does"):
        run([fake_task(1)], LocalProcesses(1))


def test_fewer_parts_than_cores_get_more_threads_each(monkeypatch):
    from manybody.workflow import cluster

    monkeypatch.setattr(cluster, "cores", lambda: 4)
    _, results, _ = run([fake_task(1)], LocalProcesses(4, dashboard=False))
    assert results["quantum-1"]["threads"] == "4"
