"""Parts in this very process, one after another, in a thread beside the run, which so stays free to stop."""

from __future__ import annotations

import queue
import socket
import threading
import time
from collections.abc import Callable

from manybody.workflow.tasks import Batch, Slot
from manybody.workflow.worker import run_batch


def available_memory() -> float:
    """Bytes this process may use: the machine's or its container's limit, less what is in use."""
    import psutil

    return float(psutil.virtual_memory().available)


class InProcess:
    """Executor for `--workers 0`."""

    dashboard = ""

    def __init__(self, memory: float | None = None):
        self.memory = available_memory() if memory is None else memory
        self._work: queue.SimpleQueue = queue.SimpleQueue()
        self._events: queue.SimpleQueue = queue.SimpleQueue()
        self._stopping = threading.Event()
        self._thread = threading.Thread(target=self._loop, name="manybody-parts", daemon=True)

    def start(self, parts: int, wait: Callable[[str], None] | None = None) -> list[Slot]:
        self._thread.start()
        return [Slot("this process", socket.gethostname(), 1, self.memory)]

    def submit(self, batch: Batch, run_part, inputs: dict, states: dict, slice_seconds: float) -> None:
        self._work.put((batch, run_part, inputs, states, slice_seconds))

    def events(self, timeout: float) -> list[tuple]:
        found = []
        try:
            found.append(self._events.get(timeout=timeout))
            while True:
                found.append(self._events.get_nowait())
        except queue.Empty:
            return found

    def ask_to_stop(self) -> None:
        self._stopping.set()

    def close(self, at_once: bool = False) -> None:
        self._stopping.set()
        self._work.put(None)
        if not at_once and self._thread.is_alive():
            self._thread.join(timeout=5.0)

    # the way back for parts (see worker.DaskChannel)

    def report(self, key: str, info: dict) -> None:
        self._events.put(("report", key, info))

    def state(self, key: str, state: bytes) -> None:
        self._events.put(("state", key, state))

    def stopping(self) -> bool:
        return self._stopping.is_set()

    def _loop(self) -> None:
        while (work := self._work.get()) is not None:
            batch, run_part, inputs, states, slice_seconds = work
            items = [(task.key, task.payload, task.depends) for task in batch.tasks]
            try:
                outcomes = [] if self.stopping() else run_batch(run_part, items, inputs, states, self, slice_seconds)
                self._events.put(("done", batch.number, outcomes))
            except BaseException as error:  # run_batch catches what parts raise; this is for the rest
                self._events.put(("broken", batch.number, f"{type(error).__name__}: {error}"))
            time.sleep(0)  # let the run have the interpreter before the next batch
