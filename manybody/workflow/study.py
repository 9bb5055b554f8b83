"""A study run from start to dataset, for the command line and for notebooks alike."""

from __future__ import annotations

import hashlib
import json
import os
import tempfile
import time
from dataclasses import dataclass, field
from pathlib import Path

from manybody.workflow.costs import CostModel, gigabytes
from manybody.workflow.engine import run_tasks
from manybody.workflow.journal import Journal, JournalError
from manybody.workflow.parts import run_part, study_tasks
from manybody.workflow.points import Study, expand
from manybody.workflow.progress import Display
from manybody.workflow.tasks import Counts, Interrupted, Task

RESULTS = "results.nc"


class FolderError(ValueError):
    """The output folder cannot be used; nothing has been written."""


@dataclass(frozen=True)
class Plan:
    """What a run would do. Times are of one core; `refused` are parts no worker could hold, with the reason.

    reused: parts that the folder has already.
    """

    study: Study
    tasks: list[Task]
    seconds: dict[str, float]
    counts: dict[str, int]
    longest: dict[str, float]
    largest: dict[str, float]
    refused: list[tuple[Task, str]]
    workers: int
    reused: int = 0
    calibrated: bool = False

    @property
    def total_seconds(self) -> float:
        """Time of the run on its workers, no shorter than its longest part."""
        return max(sum(self.seconds.values()) / max(self.workers, 1), max(self.longest.values(), default=0.0))


@dataclass(frozen=True)
class RunResult:
    """How a run ended: counts of parts, the dataset (an xarray.DataTree) and where it is, None if only in memory."""

    counts: Counts
    tree: object
    path: Path | None = None
    salvaged: int = 0
    dropped: tuple[str, ...] = field(default=())


def as_study(source) -> Study:
    """The study behind a path, a Document or a Study. DocumentError holds all problems of a workflow file."""
    if isinstance(source, Study):
        return source
    if isinstance(source, (str, os.PathLike)):
        from manybody.workflow.document import read_document

        source = read_document(source)
    return expand(source)


def plan(source, workers: int | None = None, out: str | os.PathLike | None = None) -> Plan:
    """What running a study would take; runs nothing and writes nothing. With `out`, what that folder has is counted as
    done and its measured times calibrate the estimates.
    """
    from manybody.workflow.cluster import cores, local_memory
    from manybody.workflow.inprocess import available_memory

    study = as_study(source)
    workers = cores() if workers is None else workers
    memory = local_memory(workers) if workers else available_memory()
    tasks = study_tasks(study)
    costs, done = CostModel(), set()
    if out is not None and (Path(out) / "journal.sqlite").is_file():
        with Journal(out, write=False) as journal:
            entries = journal.entries()
        for task in tasks:
            entry = entries.get(task.key)
            if entry is not None and entry.status == "finished":
                costs.measured(task.kind, task.seconds, entry.seconds, task.bytes, entry.peak_bytes)
                done.add(task.key)
    seconds, counts, longest, largest, refused = {}, {}, {}, {}, []
    for task in tasks:
        if task.key in done:
            continue
        kind, need = task.kind, costs.bytes(task.kind, task.bytes)
        if need > memory:
            refused.append((task, f"needs {gigabytes(need)} of memory; a worker can give {gigabytes(max(memory, 0))}"))
            continue
        length = costs.seconds(kind, task.seconds)
        counts[kind] = counts.get(kind, 0) + 1
        seconds[kind] = seconds.get(kind, 0.0) + length
        longest[kind] = max(longest.get(kind, 0.0), length)
        largest[kind] = max(largest.get(kind, 0.0), need)
    return Plan(study, tasks, seconds, counts, longest, largest, refused, workers, len(done), costs.total > 0)


def run(
    source,
    out: str | os.PathLike | None = None,
    *,
    workers: int = 0,
    scheduler: str | None = None,
    scheduler_file: str | os.PathLike | None = None,
    batch: str | None = None,
    retry_failed: bool = False,
    display: Display | None = None,
):
    """Run a study and return its dataset, an xarray.DataTree (see results/dataset.py).

    source: path of a workflow file, a Document or a Study. out: folder for journal and results.nc, made where missing;
    what it has already is not computed again. None keeps everything in memory. workers: 0 runs in this process, more
    start that many local processes (a script then needs the `if __name__ == "__main__"` guard); scheduler (address) or
    scheduler_file use an existing dask cluster, batch ("slurm", ...) starts `workers` jobs through dask-jobqueue.

    Raises DocumentError, FolderError, FolderInUse before anything is written; Interrupted, EngineError, JournalError
    with everything finished so far kept in `out`.
    """
    return run_study(
        as_study(source), out, make_executor(workers, scheduler, scheduler_file, batch), retry_failed, display
    ).tree  # fmt: skip


def make_executor(workers: int = 0, scheduler=None, scheduler_file=None, batch=None):
    """The executor for what a user asked for. Raises ValueError where it contradicts itself."""
    from manybody.workflow.cluster import BATCH_SYSTEMS, BatchJobs, ExistingCluster, LocalProcesses
    from manybody.workflow.inprocess import InProcess

    if sum(option is not None for option in (scheduler, scheduler_file, batch)) > 1:
        raise ValueError("give one of scheduler, scheduler file and batch system")
    if workers < 0:
        raise ValueError(f"the number of workers must not be negative, got {workers}")
    if batch is not None:
        if batch not in BATCH_SYSTEMS:
            raise ValueError(f"there is no batch system {batch!r}; known are {', '.join(BATCH_SYSTEMS)}")
        return BatchJobs(batch, max(workers, 1))
    if scheduler_file is None and scheduler is not None and "://" not in scheduler and Path(scheduler).is_file():
        scheduler, scheduler_file = None, scheduler
    if scheduler is not None or scheduler_file is not None:
        return ExistingCluster(scheduler, scheduler_file)
    return LocalProcesses(workers) if workers else InProcess()


def run_study(study: Study, out, executor, retry_failed: bool = False, display: Display | None = None) -> RunResult:
    """As `run`, with the executor given; says how the run ended. See `run` for what it raises."""
    tasks = study_tasks(study)
    folder = None if out is None else prepare_folder(out)
    display = display or Display()
    with Journal(folder) as journal:
        if journal.salvaged:
            display.say(f"The journal was damaged; {journal.salvaged} good entries were carried over.")
        if journal.dropped:
            display.say(f"{len(journal.dropped)} torn entries will be computed again.")
        journal.set_study(tasks, {"title": study.title, "workflow": study.text, "started": str(time.time())})

        def write() -> object:
            return _write_results(study, tasks, journal, folder)

        try:
            counts = run_tasks(tasks, run_part, journal, executor, display, retry_failed=retry_failed, meanwhile=write)
        except Interrupted:
            write()
            raise
        return RunResult(
            counts, write(), None if folder is None else folder / RESULTS, journal.salvaged, tuple(journal.dropped)
        )  # fmt: skip


def prepare_folder(out: str | os.PathLike) -> Path:
    """Make the output folder and see that it can be written. Raises FolderError."""
    folder = Path(out)
    made = []
    try:
        for parent in reversed([folder, *folder.parents]):
            if not parent.exists():
                parent.mkdir()
                made.append(parent)
        with tempfile.NamedTemporaryFile(dir=folder, prefix=".manybody-"):
            pass
    except OSError as error:
        for parent in reversed(made):
            parent.rmdir()
        raise FolderError(f"the output folder {folder} cannot be written: {error.strerror or error}") from None
    return folder


def _write_results(study: Study, tasks: list[Task], journal: Journal, folder: Path | None):
    """The dataset of what is finished, written unless the file has it already."""
    from manybody.results.dataset import open_results, records_to_tree, write_results
    from manybody.workflow.records import study_attrs, study_records

    entries = journal.entries()
    digest = hashlib.sha256(json.dumps([study.title, study.text, study.energy_unit]).encode())
    for point in study.points:
        digest.update(repr((point.record(), point.undefined)).encode())
    for task in tasks:
        entry = entries.get(task.key)
        digest.update(task.key.encode() + (entry.checksum if entry is not None else b"-"))
    path = None if folder is None else folder / RESULTS
    stamp = f"{digest.hexdigest()} {_stamp(path)}"
    if path is not None and path.is_file() and journal.notes().get("results") == stamp:
        return open_results(path)
    records, attrs = study_records(study, journal), study_attrs(study, journal)
    if path is None:
        return records_to_tree(records, attrs)
    try:
        tree = write_results(path, records, attrs)
    except OSError as error:
        raise JournalError(
            f"{path} cannot be written: {error.strerror or error}. Every finished part is safe in the journal; run the "
            "same command again to write the results."
        ) from error
    journal.set_notes({"results": f"{digest.hexdigest()} {_stamp(path)}"})
    return tree


def _stamp(path: Path | None) -> str:
    try:
        status = path.stat()
    except (OSError, AttributeError):
        return ""
    return f"{status.st_size} {status.st_mtime_ns}"
