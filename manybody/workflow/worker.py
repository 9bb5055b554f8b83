"""What runs where the computing is done: batches of parts, their reports, and the states of long parts.

Workers write nothing to disk and need only the installed package: results, reports and states travel back to the run.
"""

from __future__ import annotations

import os
import socket
import sys
import time
import traceback

from manybody.workflow.encoding import pack, unpack
from manybody.workflow.tasks import Outcome

REPORT_EVERY = 1.0  # seconds between reports of one part
SAVE_EVERY = 180.0  # seconds between saved states of one part


class StopPart(BaseException):
    """Raised inside a part that saves its state after a stop was asked for; not an error of the part."""

    def __init__(self, state: bytes):
        super().__init__()
        self.state = state


class Checkpoint:
    """How a long part keeps its state: handed to run_part as `checkpoint`.

    load() : what an earlier, broken-off run saved last (bytes), or None
    due() : True when it is time to save, which it also is when the run is asked to stop
    save(state) : hand over the present state, opaque bytes; replaces the previous one. Does not return when the run
        is asked to stop
    """

    def __init__(self, key: str, state: bytes | None, channel, every: float = SAVE_EVERY):
        self._state = state
        self._key, self._channel, self._every = key, channel, every
        self._last = time.monotonic()

    def load(self) -> bytes | None:
        return self._state

    def due(self) -> bool:
        return time.monotonic() - self._last >= self._every or self._channel.stopping()

    def save(self, state: bytes) -> None:
        if self._channel.stopping():
            raise StopPart(bytes(state))
        self._channel.state(self._key, bytes(state))
        self._last = time.monotonic()


def _reporter(key: str, channel):
    last = 0.0

    def report(info: dict | None = None, **more) -> None:
        """Say how far a part is: numbers and text by name, e.g. sweep=3, bond_dimension=128, energy=-7.1."""
        nonlocal last
        now = time.monotonic()
        if now - last >= REPORT_EVERY:
            last = now
            channel.report(key, {name: _plain(value) for name, value in {**(info or {}), **more}.items()})

    return report


def _plain(value):
    if isinstance(value, (bool, int, str)) or value is None:
        return value
    try:
        return float(value)
    except (TypeError, ValueError):
        return str(value)[:80]


def _reset_peak() -> float:
    """Memory of this process now, with the kernel's high-water mark put back to it; NaN where that cannot be had."""
    try:
        with open("/proc/self/clear_refs", "w") as file:
            file.write("5")
        return _status("VmRSS:")
    except OSError:
        return float("nan")


def _status(name: str) -> float:
    with open("/proc/self/status") as file:
        for line in file:
            if line.startswith(name):
                return 1024.0 * int(line.split()[1])
    return float("nan")


def _describe(error: BaseException) -> str:
    text = str(error).strip() or "no message"
    frames = traceback.extract_tb(error.__traceback__)
    where = f" [{os.path.basename(frames[-1].filename)}, line {frames[-1].lineno}]" if frames else ""
    return f"{type(error).__name__}: {text}{where}"[:4000]


def set_threads(count: int) -> None:
    """Give numba `count` threads; BLAS reads its number from the environment when the worker starts."""
    os.environ.setdefault("NUMBA_NUM_THREADS", str(count))
    numba = sys.modules.get("numba")
    if numba is not None:
        numba.set_num_threads(min(count, numba.config.NUMBA_NUM_THREADS))


def run_batch(run_part, items, inputs, states, channel, slice_seconds, measure_memory=True) -> list[Outcome]:
    """Run parts one after another: items are (key, payload, dependencies), inputs packed results, states saved bytes.

    Returns the outcomes of those that ran. After `slice_seconds`, or when asked to stop, the rest is left to the run; a
    part that saved its state then is "stopped", its data that state, so that no run ends before it has it.
    """
    host = socket.gethostname()
    results: dict[str, dict] = {}
    outcomes: list[Outcome] = []
    begun = time.monotonic()
    for key, payload, depends in items:
        if outcomes and (time.monotonic() - begun > slice_seconds or channel.stopping()):
            break
        base = _reset_peak() if measure_memory else float("nan")
        start = time.perf_counter()
        status, data, message = "finished", b"", ""
        try:
            for name in depends:
                if name not in results:
                    results[name] = unpack(inputs[name])
            checkpoint = Checkpoint(key, states.get(key), channel)
            given = {name: results[name] for name in depends}
            data = pack(run_part(payload, given, _reporter(key, channel), checkpoint))
        except StopPart as stop:
            outcomes.append(Outcome(key, "stopped", stop.state))
            break
        except (Exception, SystemExit) as error:
            status, message = "failed", _describe(error)
        seconds = time.perf_counter() - start
        peak = _status("VmHWM:") - base if base == base else 0.0
        outcomes.append(Outcome(key, status, data, message, seconds, max(peak, 0.0), host))
    return outcomes


class DaskChannel:
    """The way back from a dask worker: short reports as events; a state waits here until the run fetches it.

    States do not travel as events, since the scheduler keeps a log of those in its memory.
    """

    def __init__(self, topic: str, threads: int = 1):
        self.topic, self.threads = topic, threads

    def report(self, key: str, info: dict) -> None:
        self._event({"what": "report", "key": key, "info": info})

    def state(self, key: str, state: bytes) -> None:
        _STATES[self.topic, key] = state
        self._event({"what": "state", "key": key, "bytes": len(state)})

    def _event(self, message: dict) -> None:
        from distributed import get_worker

        worker = get_worker()
        worker.log_event(self.topic, {**message, "place": worker.address})

    def stopping(self) -> bool:
        if self.topic in _STOPPING:
            return True
        from distributed import get_worker

        # a run that was killed has left its parts behind: the scheduler has let go of them
        try:
            worker = get_worker()
            task = worker.state.tasks.get(worker.get_current_task())
        except ValueError:
            return False
        return task is not None and task.state in ("cancelled", "resumed")


_STATES: dict[tuple[str, str], bytes] = {}
_STOPPING: set[str] = set()


def run_on_dask(run_part, items, inputs, states, channel, slice_seconds) -> list[Outcome]:
    from distributed import get_worker

    set_threads(channel.threads)
    try:
        return run_batch(run_part, items, inputs, states, channel, slice_seconds, get_worker().state.nthreads == 1)
    finally:
        # a state handed over at the very end is of no use once its part is done
        for key, *_ in items:
            _STATES.pop((channel.topic, key), None)


def take_state(topic: str, key: str) -> bytes | None:
    """Called by the run on the worker: fetch a waiting state."""
    return _STATES.pop((topic, key), None)


def ask_to_stop(topic: str) -> None:
    """Called by the run on the worker: finish the part in hand, or save its state, and stop."""
    _STOPPING.add(topic)


def describe_worker() -> dict:
    """Called by the run on the worker: who it is and what is installed there."""
    import manybody

    return {"host": socket.gethostname(), "manybody": manybody.__version__, "python": sys.version.split()[0]}


def ignore_interrupts() -> None:
    """Called on local workers: Ctrl-C reaches the whole terminal, but stopping is the run's to decide."""
    import signal
    import threading

    if threading.current_thread() is threading.main_thread():
        signal.signal(signal.SIGINT, signal.SIG_IGN)
