"""Kills at random moments, in full: PYTHONPATH=.:tests python tests/benchmarks/faults.py [kills=500] [seed=1].

Every round starts a run of a study of short parts in a process of its own and kills it, or one of its workers, at a
random moment, and resumes. Checked: nothing that the journal had as finished is computed again, no entry is torn, and
the results equal those of an undisturbed run.
"""

import sys
import tempfile
import time

from fake_parts import run_fake
from killed_run import kill_and_resume, study, torn

from manybody.workflow.encoding import unpack
from manybody.workflow.engine import run_tasks
from manybody.workflow.inprocess import InProcess
from manybody.workflow.journal import Journal

ROUNDS = (  # workers, parts, seconds of a part, kills per study
    (0, 400, 0.02, 25),
    (2, 400, 0.02, 10),
)


def main(kills=500, seed=1):
    done = hits = repeated = 0
    began = time.time()
    while done < kills:
        workers, parts, sleep, each = ROUNDS[1 if done * 5 >= kills * 3 else 0]
        each = min(each, kills - done)
        with tempfile.TemporaryDirectory() as folder:
            results, counts, twice, hit = kill_and_resume(folder, each, parts, workers, sleep, seed + done)
            with Journal(None) as journal:
                tasks = study(folder, parts, 0)
                run_tasks(tasks, run_fake, journal, InProcess(1e9))
                calm = {key: unpack(data) for key, data in journal.data([task.key for task in tasks]).items()}
            assert not torn(folder) and twice == [], f"computed again although finished: {twice}"
            assert results.keys() == calm.keys()
            for key, result in results.items():
                assert result["value"] == calm[key]["value"]
                assert result["array"].tobytes() == calm[key]["array"].tobytes()
        done, hits = done + each, hits + hit
        repeated += sum(counts.values()) - len(calm)
        print(
            f"{done} kills ({hits} hit a running process), {repeated} parts in flight lost and computed again, "
            f"0 finished ones, {time.time() - began:.0f} s",
            flush=True,
        )


if __name__ == "__main__":
    main(*map(int, sys.argv[1:]))
