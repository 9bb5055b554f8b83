"""Figures of the engine, as ratios and costs per point.

PYTHONPATH=.:tests python tests/benchmarks/engine.py [points=10000]

1. overhead: a study of two-spin points whose parts do nothing, per point, on 1 and 2 local processes and in-process;
2. memory of the coordinating process over that run;
3. resuming the finished study;
4. time of two workers over time of one for 100 equal parts of 0.5 s.
"""

import resource
import sys
import tempfile
import time

from fake_parts import fake_task, run_fake

from manybody.workflow.cluster import LocalProcesses
from manybody.workflow.engine import run_tasks
from manybody.workflow.inprocess import InProcess
from manybody.workflow.journal import Journal
from manybody.workflow.progress import Display


class Watch(Display):
    """Memory of this process, as parts finish."""

    def __init__(self):
        super().__init__()
        self.seen, self.sizes = 0, {}

    def finished(self, task, outcome):
        super().finished(task, outcome)
        self.seen += 1
        if self.seen % 1000 == 0:
            self.sizes[self.seen] = resident()


def resident():
    with open("/proc/self/status") as file:
        return next(int(line.split()[1]) / 1e3 for line in file if line.startswith("VmRSS"))


def two_spin_study(points):
    """Four parts a point, as a real study has: classical, harmonic, quantum, bounds, each with cluster of its own."""
    tasks = []
    for i in range(points):
        tasks.append(fake_task(i, "classical"))
        tasks.append(fake_task(i, "harmonic", depends=[f"classical-{i}"]))
        for kind in ("exact", "bounds"):
            tasks.append(fake_task(i, kind, depends=[f"classical-{i}", f"harmonic-{i}"]))
    return tasks


def timed(tasks, executor, folder, display=None):
    start = time.perf_counter()
    with Journal(folder) as journal:
        counts = run_tasks(tasks, run_fake, journal, executor, display)
    assert counts.finished == len(tasks)
    return time.perf_counter() - start


def main(points=10_000):
    tasks = two_spin_study(points)
    for name, executor in (
        ("in-process", InProcess()),
        ("1 worker", LocalProcesses(1, dashboard=False)),
        ("2 workers", LocalProcesses(2)),
    ):
        with tempfile.TemporaryDirectory() as folder:
            watch = Watch()
            took = timed(tasks, executor, folder, watch)
            sizes = list(watch.sizes.values())
            print(
                f"{name}: {took / points * 1e3:.2f} ms a point ({points} points of 4 parts in {took:.1f} s); "
                f"coordinator {sizes[0]:.0f} MB after 1000 parts, {sizes[-1]:.0f} MB at the end, "
                f"peak {resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1e3:.0f} MB",
                flush=True,
            )
            print(f"    resuming it: {timed(tasks, InProcess(), folder):.2f} s", flush=True)
    equal = [fake_task(i, sleep=0.5, seconds=0.5) for i in range(100)]
    one, two = (timed(equal, LocalProcesses(count, dashboard=False), None) for count in (1, 2))
    print(f"100 parts of 0.5 s: one worker {one:.1f} s, two {two:.1f} s, ratio {two / one:.3f} (wanted: at most 0.55)")


if __name__ == "__main__":
    main(*map(int, sys.argv[1:]))
