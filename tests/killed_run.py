"""A study of short parts in a process of its own, to be killed: python killed_run.py FOLDER PARTS WORKERS SLEEP."""

import contextlib
import os
import random
import signal
import sqlite3
import subprocess
import sys
import time
from collections import Counter
from pathlib import Path

from fake_parts import fake_study, run_fake

from manybody.workflow.cluster import LocalProcesses
from manybody.workflow.encoding import unpack
from manybody.workflow.engine import run_tasks
from manybody.workflow.inprocess import InProcess
from manybody.workflow.journal import Journal


def study(folder, parts, sleep):
    return fake_study(parts, log=str(Path(folder) / "computed"), sleep=sleep)


def main(folder, parts, workers, sleep):
    tasks = study(folder, int(parts), float(sleep))
    executor = LocalProcesses(int(workers), dashboard=False) if int(workers) else InProcess(1e9)
    with Journal(folder) as journal:
        run_tasks(tasks, run_fake, journal, executor)


def start(folder, parts, workers, sleep):
    here = Path(__file__).parent
    environment = {**os.environ, "PYTHONPATH": f"{here}{os.pathsep}{here.parent}", "OPENBLAS_NUM_THREADS": "1"}
    command = [sys.executable, __file__, str(folder), str(parts), str(workers), str(sleep)]
    return subprocess.Popen(command, env=environment, stderr=subprocess.PIPE, text=True)


def finished(folder):
    """Keys that the journal holds, read as `status` would."""
    try:
        with Journal(folder, write=False) as journal:
            return {key for key, entry in journal.entries().items() if entry.status == "finished"}
    except Exception:
        return set()  # the first run was killed before it made a journal


def computed(folder):
    log = Path(folder) / "computed"
    return [line.split()[0] for line in log.read_text().splitlines()] if log.exists() else []


def worker_processes(pid):
    import psutil

    found = []
    with contextlib.suppress(psutil.Error):
        for child in psutil.Process(pid).children(recursive=True):
            with contextlib.suppress(psutil.Error):
                if "spawn_main" in " ".join(child.cmdline()):
                    found.append(child)
    return found


def kill_and_resume(folder, kills, parts, workers, sleep, seed):
    """Kill runs at random moments, coordinator or a worker in turn, then let one finish.

    A moment is a random number of parts after the start and up to 0.1 s; one in five a random time of starting up.
    Parts beyond those of a kill and a few in flight are held back, so that no machine is fast enough to escape it.

    Returns (results by key, times each part was computed, parts that were computed again although they had been
    finished, kills that hit a running process).
    """
    draw = random.Random(seed)
    again, hits = [], 0
    total, hold = len(study(folder, parts, sleep)), Path(folder) / "hold"
    for number in range(kills):
        begun = len(computed(folder))
        share = (total - len(finished(folder))) // (kills - number + 1)
        hold.write_text(str(begun + share))
        process = start(folder, parts, workers, sleep)
        if draw.random() < 0.2:
            time.sleep(draw.uniform(0, 2.0 if workers else 0.4))
        else:
            wanted = begun + draw.uniform(0, 0.7 * share)
            while process.poll() is None and len(computed(folder)) < wanted:
                time.sleep(0.005)
            time.sleep(draw.uniform(0, 0.1))
        target = worker_processes(process.pid) if workers and number % 2 else []
        if target:
            with contextlib.suppress(Exception):
                draw.choice(target).send_signal(signal.SIGKILL)
                hits += 1
            time.sleep(draw.uniform(0, 0.5))
        if process.poll() is None:
            hits += not target
            process.kill()
        process.wait()
        process.stderr.close()
        for child in worker_processes(process.pid):
            child.wait(10)
        before, known = len(computed(folder)), finished(folder)
        again.append((before, known))
    hold.unlink()
    process = start(folder, parts, workers, sleep)
    _, errors = process.communicate(timeout=300)
    if process.returncode:
        raise RuntimeError(f"the last run ended with {process.returncode}: {errors}")
    names = computed(folder)
    twice = [name for before, known in again for name in names[before:] if name in known]
    with Journal(folder) as journal:
        if journal.dropped or journal.salvaged:
            raise RuntimeError(f"a kill tore the journal: {journal.dropped}, {journal.salvaged}")
        keys = [task.key for task in study(folder, parts, sleep)]
        results = {key: unpack(data) for key, data in journal.data(keys).items()}
    return results, Counter(names), twice, hits


def torn(folder):
    with contextlib.closing(sqlite3.connect(Path(folder) / "journal.sqlite")) as database:
        return database.execute("pragma integrity_check").fetchone()[0] != "ok"


if __name__ == "__main__":
    main(*sys.argv[1:])
