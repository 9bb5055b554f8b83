"""The `manybody` command: parses, calls, prints. No science; everything heavy is imported where it is used.

Exit status: 0 all points finished, 1 stopped by the outside (disk, cluster), 2 bad input and nothing written,
3 finished with failed or refused points, 130 interrupted.
"""

import contextlib
import os
import shlex
import sys
from pathlib import Path
from typing import Annotated

import typer

app = typer.Typer(
    add_completion=False,
    no_args_is_help=True,
    rich_markup_mode=None,
    pretty_exceptions_enable=False,
    help="The gap between quantum and classical ground energies of interacting moments, from one workflow file.",
)

File = Annotated[Path, typer.Argument(metavar="FILE", help="The workflow file (TOML).")]
Workers = Annotated[int | None, typer.Option(help="Local processes; 0 runs in this one. Default: the cores.")]
Folder = Annotated[Path, typer.Argument(metavar="DIR", help="The folder of a run.")]


@app.command()
def plan(
    file: File,
    workers: Workers = None,
    out: Annotated[Path | None, typer.Option(help="A folder whose finished parts count and calibrate times.")] = None,
) -> None:
    """Show points, expected time and memory, and what would be refused. Runs nothing."""
    from manybody.workflow.study import plan as make_plan
    from manybody.workflow.summary import plan_text

    print(plan_text(make_plan(file, _workers(workers), out)))


@app.command()
def run(
    file: File,
    out: Annotated[Path, typer.Option(help="Folder for results; what it has already is not computed again.")],
    workers: Workers = None,
    scheduler: Annotated[str | None, typer.Option(help="Address of a dask scheduler, or its scheduler file.")] = None,
    scheduler_file: Annotated[Path | None, typer.Option(help="Scheduler file of a dask cluster.")] = None,
    batch: Annotated[
        str | None, typer.Option(help="Batch system (slurm, pbs, ...); --workers jobs are started.")
    ] = None,
    retry_failed: Annotated[bool, typer.Option("--retry-failed", help="Run failed parts again.")] = False,
) -> None:
    """Run what is missing in DIR, so also resume, and write DIR/results.nc."""
    from manybody.workflow.progress import choose_display
    from manybody.workflow.study import as_study, make_executor, run_study
    from manybody.workflow.summary import gap_table
    from manybody.workflow.tasks import Interrupted

    options = {"--workers": workers, "--scheduler": scheduler, "--scheduler-file": scheduler_file, "--batch": batch}
    given = [word for name, value in options.items() if value is not None for word in (name, str(value))]
    again = shlex.join(["manybody", "run", str(file), "--out", str(out), *given])
    if workers is not None and (scheduler or scheduler_file):
        raise BadInput("--workers starts local processes and does not go with --scheduler: give one of them")
    study = as_study(file)
    for note in study.notes:
        print(note, file=sys.stderr)
    remote = scheduler or scheduler_file
    try:
        executor = make_executor(0 if remote else _workers(workers), scheduler, scheduler_file, batch)
    except ValueError as error:
        raise BadInput(str(error)) from None
    try:
        result = run_study(study, out, executor, retry_failed, choose_display())
    except (Interrupted, KeyboardInterrupt):
        print(f"Stopped. Everything finished is safe; `{again}` goes on from here.", file=sys.stderr)
        leave(130)
    print(gap_table(result.tree))
    counts = result.counts
    print(f"\n{counts.finished} parts finished, {counts.reused} of them before. Dataset: {result.path}")
    if counts.failed or counts.refused:
        told = " and ".join(f"{n} {word}" for n, word in ((counts.failed, "failed"), (counts.refused, "refused")) if n)
        retry = f"; `{again} --retry-failed` runs failed ones again" if counts.failed else ""
        print(f"{told}: `manybody status {out}` says why{retry}.", file=sys.stderr)
        raise typer.Exit(3)


@app.command()
def status(folder: Folder) -> None:
    """Show what is finished, failed and waiting, and why; also while a run is going on."""
    from manybody.workflow.summary import status_text

    print(status_text(folder))


Normalization = Annotated[str, typer.Option(help="energy, or spin for H = sum J S.S, where that is one factor.")]


@app.command()
def draw(
    folder: Folder,
    out: Annotated[Path | None, typer.Option(help="Folder for the pictures. Default: DIR/figures.")] = None,
    form: Annotated[list[str] | None, typer.Option("--format", help="png, svg or pdf; may be repeated.")] = None,
    normalization: Normalization = "energy",
) -> None:
    """Draw the figures of a dataset, and say which are left out and why."""
    from manybody.results.figures import draw as draw_figures

    with _about(folder):
        outcome = draw_figures(folder, out or folder / "figures", form or ("png", "svg"), normalization)
    for figure in outcome.drawn:
        for path in figure.paths:
            print(path)
    for name, reason in outcome.left_out.items():
        print(f"not drawn: {name}: {reason}")


@app.command()
def report(
    folder: Folder,
    normalization: Normalization = "energy",
    tolerance: Annotated[float, typer.Option(help="Relative gap that counts as good enough.")] = 0.05,
) -> None:
    """Write DIR/report.html, one self-contained page."""
    from manybody.results.report import write_report

    with _about(folder):
        path = write_report(folder, None, normalization, tolerance)
    print(path)


class BadInput(ValueError):
    """A wrong combination of options."""


@contextlib.contextmanager
def _about(folder: Path):
    """What is wrong with a results file or with the choice of figures is the user's to know."""
    from manybody.results.dataset import open_results

    try:
        open_results(folder)
        yield
    except (ValueError, FileNotFoundError) as error:
        raise BadInput(str(error)) from None


def _workers(workers: int | None) -> int:
    if workers is None:
        from manybody.workflow.cluster import cores

        return cores()
    if workers < 0:
        raise BadInput(f"--workers must not be negative, got {workers}")
    return workers


def leave(code: int) -> None:
    """End now: threads and child processes that are still computing must not hold us up."""
    sys.stdout.flush()
    sys.stderr.flush()
    os._exit(code)


def main() -> None:
    try:
        app()
    except KeyboardInterrupt:
        print("Stopped.", file=sys.stderr)
        leave(130)
    except Exception as error:
        code = _exit_code(error)
        if code is None:
            raise
        print(f"manybody: {error}", file=sys.stderr)
        sys.exit(code)


def _exit_code(error: Exception) -> int | None:
    """2 for what a user can put right before anything is written, 1 for trouble outside; None: a fault of ours."""
    from manybody.workflow.journal import JournalError, NoStudy
    from manybody.workflow.lock import FolderInUse
    from manybody.workflow.problems import DocumentError
    from manybody.workflow.study import FolderError
    from manybody.workflow.tasks import EngineError

    if isinstance(error, (DocumentError, FolderError, FolderInUse, BadInput, NoStudy, FileNotFoundError)):
        return 2
    if isinstance(error, (JournalError, EngineError, OSError)):
        return 1
    return None


if __name__ == "__main__":
    main()
