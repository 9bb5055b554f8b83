"""How a run tells what it does: silent, plain lines, or a live table on a terminal."""

from __future__ import annotations

import sys
import time

from manybody.workflow.costs import duration
from manybody.workflow.tasks import Batch, Counts, Outcome, Slot, Task

LONG = 30.0  # seconds; longer parts are told one by one in plain lines
LINE_EVERY = 10.0  # seconds between plain lines of progress
ROWS = 12  # parts in hand shown live
FAILURES = 10  # failures told one by one; all are in `manybody status`


class Display:
    """Says nothing; the others build on it.

    start, update, report, finished, say, stop are called by the engine, always from its own thread.
    """

    every = float("inf")

    def __init__(self) -> None:
        self._last = float("-inf")
        self.reports: dict[str, dict] = {}
        self._failures = 0

    def due(self) -> bool:
        now = time.monotonic()
        if now - self._last < self.every:
            return False
        self._last = now
        return True

    def start(self, counts: Counts, dashboard: str, total: int) -> None:
        pass

    def update(self, counts: Counts, batches: list[tuple[Slot, Batch]]) -> None:
        pass

    def report(self, key: str, info: dict) -> None:
        self.reports[key] = info

    def finished(self, task: Task, outcome: Outcome) -> None:
        self.reports.pop(task.key, None)

    def say(self, text: str) -> None:
        pass

    def stop(self) -> None:
        pass

    def _failure(self, task: Task, outcome: Outcome) -> str:
        """One line about a part that failed or was refused; "" for what follows from it, and after the first few."""
        if outcome.follows:
            return ""
        self._failures += 1
        if self._failures > FAILURES:
            return "further failures: see `manybody status`" if self._failures == FAILURES + 1 else ""
        first = outcome.message.splitlines()[0] if outcome.message else ""
        return f"{outcome.status}: {task.label} ({task.kind}): {first}"


def progress_text(info: dict) -> str:
    """What a running part last said, in one line."""
    return ", ".join(
        f"{name.replace('_', ' ')} {value:.8g}" if isinstance(value, float) else f"{name.replace('_', ' ')} {value}"
        for name, value in info.items()
    )


def counts_text(counts: Counts) -> str:
    parts = [f"{counts.finished} finished"]
    if counts.failed:
        parts.append(f"{counts.failed} failed")
    if counts.refused:
        parts.append(f"{counts.refused} refused")
    parts.append(f"{counts.waiting} to do")
    if counts.seconds_left == counts.seconds_left and counts.waiting:
        parts.append(f"about {duration(counts.seconds_left)} left")
    return ", ".join(parts)


class Lines(Display):
    """Plain lines, for logs and pipes."""

    every = LINE_EVERY

    def __init__(self, stream=None) -> None:
        super().__init__()
        self._stream = stream or sys.stderr

    def say(self, text: str) -> None:
        print(text, file=self._stream, flush=True)

    def start(self, counts: Counts, dashboard: str, total: int) -> None:
        reused = f", {counts.reused} of them finished before" if counts.reused else ""
        self.say(f"{total} parts{reused}")
        if dashboard:
            self.say(f"dask dashboard: {dashboard}")
        self._last = time.monotonic()

    def update(self, counts: Counts, batches: list[tuple[Slot, Batch]]) -> None:
        self.say(counts_text(counts))
        now = time.monotonic()
        for slot, batch in batches:
            if now - batch.started > LONG:
                for task in batch.tasks[:1]:
                    state = progress_text(self.reports.get(task.key, {}))
                    running = duration(now - batch.started)
                    self.say(
                        f"  {task.label} ({task.kind}) on {slot.host} for {running}" + (f": {state}" if state else "")
                    )

    def finished(self, task: Task, outcome: Outcome) -> None:
        super().finished(task, outcome)
        if outcome.status != "finished":
            if text := self._failure(task, outcome):
                self.say(text)
        elif outcome.seconds > LONG:
            self.say(f"finished: {task.label} ({task.kind}) in {duration(outcome.seconds)} on {outcome.host}")


class Live(Display):
    """A live table on a terminal: a bar, what runs where, and how far the long parts are."""

    every = 0.25

    def __init__(self, console=None) -> None:
        super().__init__()
        from rich.console import Console

        self.console = console or Console(stderr=True)
        self._live = None
        self._dashboard = ""
        self._total = 1

    def start(self, counts: Counts, dashboard: str, total: int) -> None:
        from rich.live import Live as RichLive

        self._dashboard, self._total = dashboard, max(total, 1)
        self._live = RichLive(console=self.console, refresh_per_second=4, transient=True, auto_refresh=False)
        self._live.start()

    def update(self, counts: Counts, batches: list[tuple[Slot, Batch]]) -> None:
        if self._live is not None:
            self._live.update(self._picture(counts, batches), refresh=True)

    def _picture(self, counts: Counts, batches: list[tuple[Slot, Batch]]):
        from rich.console import Group
        from rich.progress_bar import ProgressBar
        from rich.table import Table
        from rich.text import Text

        head = Table.grid(padding=(0, 2))
        done = counts.finished + counts.failed + counts.refused
        head.add_row(ProgressBar(total=self._total, completed=done, width=40), Text(counts_text(counts)))
        table = Table(box=None, padding=(0, 2, 0, 0), header_style="bold")
        for column in ("part", "kind", "where", "for", "state"):
            table.add_column(column, no_wrap=True, overflow="ellipsis")
        now = time.monotonic()
        for slot, batch in sorted(batches, key=lambda pair: pair[1].started)[:ROWS]:
            task = batch.tasks[0]
            more = f" and {len(batch.tasks) - 1} more" if len(batch.tasks) > 1 else ""
            state = next((progress_text(self.reports[t.key]) for t in batch.tasks if t.key in self.reports), "")
            cells = (task.label + more, task.kind, slot.host, duration(now - batch.started), state)
            table.add_row(*(Text(cell) for cell in cells))
        if len(batches) > ROWS:
            table.add_row(Text(f"and {len(batches) - ROWS} more"), "", "", "", "")
        parts = [head, table]
        if self._dashboard:
            parts.append(Text(f"dask dashboard: {self._dashboard}", style="dim"))
        return Group(*parts)

    def finished(self, task: Task, outcome: Outcome) -> None:
        super().finished(task, outcome)
        if outcome.status != "finished" and (text := self._failure(task, outcome)):
            self.say(text)

    def say(self, text: str) -> None:
        self.console.print(text, markup=False, highlight=False)

    def stop(self) -> None:
        if self._live is not None:
            self._live.stop()
            self._live = None


def choose_display(stream=None) -> Display:
    """A live table where a person looks on, plain lines elsewhere."""
    stream = stream or sys.stderr
    return Live() if stream.isatty() else Lines(stream)
