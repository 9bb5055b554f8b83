"""Kills at random moments and malformed workflow files, in full.

PYTHONPATH=.:tests python tests/benchmarks/faults.py [kills=500] [seed=1] [bad files=1000]

Every round starts a run of a study of short parts in a process of its own and kills it, or one of its workers, at a
random moment, and resumes. Checked: nothing that the journal had as finished is computed again, no entry is torn, and
the results equal those of an undisturbed run.
"""

import contextlib
import io
import random
import sys
import tempfile
import time
from pathlib import Path

from fake_parts import run_fake
from killed_run import kill_and_resume, study, torn

from manybody.workflow.encoding import unpack
from manybody.workflow.engine import run_tasks
from manybody.workflow.inprocess import InProcess
from manybody.workflow.journal import Journal

ROOT = Path(__file__).parents[2]
VALUES = [
    "0",
    "-1",
    "nan",
    "true",
    '""',
    "[]",
    "{}",
    "[[]]",
    "0.3",
    '"1/0"',
    '"/etc/passwd"',
    '"x.__class__"',
    "[0, 0, 0]",
]
PIECES = ["[", "]", '"', "=", ",", "#", "\\", "[[term]]", '"""', "\x00", "é", "9", "-", "e400"]
ROUNDS = (  # workers, parts, seconds of a part, kills per study
    (0, 400, 0.02, 25),
    (2, 400, 0.02, 10),
)


def malformed(count, seed):
    """Mutations of the ready workflow files: each that is none any more ends with status 2 and its places named."""
    from manybody import command
    from manybody.workflow.problems import DocumentError
    from manybody.workflow.study import as_study

    tables = [path for path in (ROOT / "data").glob("*.csv") if path.name != "reference_values.csv"]
    texts = [path.read_bytes() for path in sorted((ROOT / "workflows").glob("*.toml"))]
    draw, bad, began = random.Random(seed), 0, time.time()
    with tempfile.TemporaryDirectory() as folder:
        (Path(folder) / "data").mkdir()
        for path in tables:
            (Path(folder) / "data" / path.name).write_bytes(path.read_bytes())
        file, out = Path(folder) / "workflows" / "mutant.toml", Path(folder) / "out"
        file.parent.mkdir()
        while bad < count:
            text = draw.choice(texts)
            for _ in range(draw.randint(1, 3)):
                text = mutate(text, draw)
            file.write_bytes(text)
            try:
                as_study(file)
                continue
            except DocumentError as error:
                problems = error.problems
            bad += 1
            sys.argv = ["manybody", "run", str(file), "--out", str(out)]
            words = io.StringIO()
            with contextlib.redirect_stderr(words):
                code = 0
                try:
                    command.main()
                except SystemExit as ended:
                    code = ended.code
            told = words.getvalue()
            assert code == 2 and "Traceback" not in told and not out.exists(), (text, told)
            assert all(problem.place in told for problem in problems), (text, told)
    print(
        f"{bad} malformed workflow files: each status 2, its places named, nothing written, {time.time() - began:.0f} s"
    )


def mutate(text, draw):
    lines = text.split(b"\n")
    at = draw.randrange(len(lines))
    kind = draw.randrange(5)
    if kind == 0:
        lines[at] = lines[at].split(b"=")[0] + b"= " + draw.choice(VALUES).encode()
    elif kind == 1:
        del lines[at]
    elif kind == 2:
        lines.insert(draw.randrange(len(lines) + 1), lines[at])
    elif kind == 3:
        cut = draw.randrange(len(lines[at]) + 1)
        lines[at] = lines[at][:cut] + draw.choice(PIECES).encode() + lines[at][cut:]
    else:
        cut = draw.randrange(len(lines[at]) + 1)
        lines[at] = lines[at][:cut] + lines[at][cut + draw.randint(1, 8) :]
    return b"\n".join(lines)


def main(kills=500, seed=1, bad_files=1000):
    malformed(bad_files, seed)
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
