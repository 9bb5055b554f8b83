"""Parts on dask.distributed: local processes, an existing cluster, or batch jobs.

Every batch is sent to one chosen worker, so the run knows what is where: which part a dying worker was busy with, how
much memory is spoken for, and that nothing waits for a worker that no longer exists. Security (TLS) is whatever dask's
own configuration says.
"""

from __future__ import annotations

import abc
import asyncio
import contextlib
import logging
import os
import queue
import time
import uuid
from collections.abc import Callable
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path

from manybody.workflow import worker as remote
from manybody.workflow.tasks import Batch, EngineError, Slot

BASE = 0.35e9  # bytes a worker holds before it has any part: interpreter and libraries
SHARE = 0.9  # of a worker's limit; dask ends a worker at 0.95
POLL = 5.0  # seconds between looks at the list of workers; changes are also announced
MESSAGES = 20
PATIENCE = 60.0  # seconds to wait for a scheduler

THREADS = ("OMP_NUM_THREADS", "MKL_NUM_THREADS", "OPENBLAS_NUM_THREADS", "NUMBA_NUM_THREADS")

BATCH_SYSTEMS = {
    "htcondor": "HTCondorCluster",
    "lsf": "LSFCluster",
    "moab": "MoabCluster",
    "oar": "OARCluster",
    "pbs": "PBSCluster",
    "sge": "SGECluster",
    "slurm": "SLURMCluster",
    "local": "LocalCluster",  # the same machinery with jobs as plain processes, to try a configuration
}


def cores() -> int:
    """Processors this process may use (affinity and container limits respected)."""
    from dask.system import CPU_COUNT

    return CPU_COUNT


def local_memory(workers: int) -> float:
    """Bytes a part may use on one of `workers` local processes."""
    from distributed.system import MEMORY_LIMIT

    return SHARE * MEMORY_LIMIT / max(workers, 1) - BASE


def _restore_environment(earlier: dict[str, str | None]) -> None:
    for name, value in earlier.items():
        if value is None:
            os.environ.pop(name, None)
        else:
            os.environ[name] = value


class DaskExecutor(abc.ABC):
    """Executor on a dask cluster that `connect` opens; see LocalProcesses, ExistingCluster and BatchJobs.

    Raises EngineError where the cluster cannot be had.
    """

    def __init__(self) -> None:
        self.topic = f"manybody-{uuid.uuid4().hex}"
        self.dashboard = ""
        self.threads = 1
        self._events: queue.SimpleQueue = queue.SimpleQueue()
        self._fetcher = ThreadPoolExecutor(1, thread_name_prefix="manybody-states")
        self._futures: dict[int, object] = {}
        self._closing = False
        self._loop_tasks: list = []
        self._client = None
        self._stack = contextlib.ExitStack()

    @abc.abstractmethod
    def connect(self, parts: int):
        """The client of the cluster to use, for a run of `parts` parts."""

    # what the engine calls

    def start(self, parts: int, wait: Callable[[str], None]) -> list[Slot]:
        import dask

        self._quieten()
        # dask remembers this many messages with all they carried, a thousand unless told otherwise
        self._stack.enter_context(dask.config.set({"distributed.admin.low-level-log-length": MESSAGES}))
        # a saved state travels with its part, however large it is
        self._stack.enter_context(dask.config.set({"distributed.admin.large-graph-warning-threshold": "1TB"}))
        client = self._client = self.connect(parts)
        self.dashboard = getattr(client, "dashboard_link", "") or ""
        client.subscribe_topic(self.topic, self._on_message)
        client.subscribe_topic("all", self._on_change)
        slots = self._wait_for_workers(wait)
        self._check_workers([slot.place for slot in slots])
        self._spawn(self._watch())
        return slots

    def submit(self, batch: Batch, run_part, inputs: dict, states: dict, slice_seconds: float) -> None:
        items = [(task.key, task.payload, task.depends) for task in batch.tasks]
        channel = remote.DaskChannel(self.topic, self.threads)
        future = self._client.submit(
            remote.run_on_dask,
            *(run_part, items, inputs, states, channel, slice_seconds),
            key=f"{self.topic}-{batch.number}",
            workers=[batch.place],
            allow_other_workers=False,
            pure=False,
        )
        self._futures[batch.number] = future
        self._spawn(self._collect(batch.number, future))

    def forget(self, number: int) -> None:
        """Let go of a batch whose worker is lost."""
        future = self._futures.pop(number, None)
        if future is not None:
            with contextlib.suppress(Exception):
                future.cancel()

    def events(self, timeout: float) -> list[tuple]:
        found = []
        try:
            found.append(self._events.get(timeout=timeout))
            while True:
                found.append(self._events.get_nowait())
        except queue.Empty:
            return found

    def ask_to_stop(self) -> None:
        self._fetcher.submit(self._run_everywhere, remote.ask_to_stop, self.topic)

    def close(self, at_once: bool = False) -> None:
        self._closing = True
        client = self._client
        if client is not None:
            with contextlib.suppress(Exception):
                client.cancel(list(self._futures.values()), force=True)
            for topic in ("all", self.topic):
                with contextlib.suppress(Exception):
                    client.unsubscribe_topic(topic)
            for task in self._loop_tasks:
                client.loop.add_callback(task.cancel)
        self._fetcher.shutdown(wait=not at_once, cancel_futures=True)
        with contextlib.suppress(Exception):
            self._stack.close()

    # inside

    def _quieten(self) -> None:
        """Deaths of workers and lost connections are told in our own words; dask's loggers get their levels back."""
        import distributed  # noqa: F401 - sets the levels that are raised here

        loggers = [
            logging.getLogger(name) for name in logging.root.manager.loggerDict if name.startswith("distributed")
        ]
        for logger in loggers:
            self._stack.callback(logger.setLevel, logger.level)
            logger.setLevel(logging.CRITICAL)

    def _spawn(self, coroutine) -> None:
        loop = self._client.loop.asyncio_loop
        if len(self._loop_tasks) > 500:
            self._loop_tasks = [task for task in self._loop_tasks if not task.done()]
        self._loop_tasks.append(asyncio.run_coroutine_threadsafe(coroutine, loop))

    async def _collect(self, number: int, future) -> None:
        try:
            outcomes = await self._client.gather(future, asynchronous=True)
        except asyncio.CancelledError:
            if self._closing or number not in self._futures:
                return
            self._events.put(("broken", number, "the cluster dropped it"))
        except Exception as error:
            self._events.put(("broken", number, f"{type(error).__name__}: {error}"))
        else:
            self._events.put(("done", number, outcomes))
        self._futures.pop(number, None)

    async def _watch(self) -> None:
        while not self._closing:
            await self._look()
            await asyncio.sleep(POLL)

    async def _look(self) -> None:
        try:
            info = await asyncio.wait_for(self._client.scheduler.identity(n_workers=-1), 30.0)
        except Exception:
            if not self._closing and self._client.status not in ("running", "connecting"):
                self._events.put(("gone", "the scheduler is gone"))
            return
        self._events.put(("slots", self._slots(info)))

    def _slots(self, info: dict) -> list[Slot]:
        slots = []
        for address, entry in info["workers"].items():
            limit = entry.get("memory_limit") or float("inf")
            host = entry.get("host") or address.split("//")[-1].rsplit(":", 1)[0]
            slots.append(Slot(address, host, int(entry.get("nthreads", 1)), SHARE * limit - BASE))
        return slots

    def _on_change(self, event) -> None:
        _, message = event
        if not isinstance(message, dict) or self._closing:
            return
        if message.get("action") == "remove-worker":
            self._events.put(("lost", message.get("worker"), bool(message.get("expected"))))
        elif message.get("action") == "add-worker":
            asyncio.ensure_future(self._look())  # noqa: RUF006 - short, and the loop outlives it

    def _on_message(self, event) -> None:
        _, message = event
        if message["what"] == "report":
            self._events.put(("report", message["key"], message["info"]))
        elif not self._closing:
            with contextlib.suppress(RuntimeError):
                self._fetcher.submit(self._fetch, message["place"], message["key"])

    def _fetch(self, place: str, key: str) -> None:
        with contextlib.suppress(Exception):  # the worker may be gone: then the older state stays
            state = self._client.run(remote.take_state, self.topic, key, workers=[place])[place]
            if state is not None:
                self._events.put(("state", key, state))

    def _run_everywhere(self, function, *arguments) -> dict:
        with contextlib.suppress(Exception):
            return self._client.run(function, *arguments, on_error="return")
        return {}

    def _wait_for_workers(self, wait: Callable[[str], None]) -> list[Slot]:
        told = False
        start = time.monotonic()
        while not (slots := self._slots(self._client.scheduler_info(n_workers=-1))):
            late = time.monotonic() - start > 5.0
            wait("" if told or not late else "The cluster has no workers yet; waiting for the first. Ctrl-C stops.")
            told = told or late
            time.sleep(0.2)
        return slots

    def _check_workers(self, places: list[str]) -> None:
        import manybody

        try:
            answers = self._client.run(remote.describe_worker, workers=places, on_error="return")
        except Exception as error:
            raise EngineError(f"the workers cannot be used: {error}. Is manybody installed where they run?") from error
        bad = {place: answer for place, answer in answers.items() if not isinstance(answer, dict)}
        if bad:
            place, error = next(iter(bad.items()))
            raise EngineError(f"the worker {place} cannot be used ({error}). Is manybody installed where it runs?")
        versions = {answer["manybody"] for answer in answers.values()} - {manybody.__version__}
        if versions:
            raise EngineError(
                f"workers have manybody {', '.join(sorted(versions))}, this run has {manybody.__version__}: install "
                "the same version everywhere."
            )


class LocalProcesses(DaskExecutor):
    """`workers` processes on this machine; with fewer parts than that, fewer processes with more threads each."""

    def __init__(self, workers: int, dashboard: bool = True):
        super().__init__()
        self.workers, self._dashboard = workers, dashboard

    def connect(self, parts: int):
        import dask
        from distributed import Client, LocalCluster
        from distributed.system import MEMORY_LIMIT

        workers = max(1, min(self.workers, parts))
        self.threads = max(1, min(self.workers, cores()) // workers) if parts < cores() else 1
        # dask passes these on from our own environment, and writes there too: it is put back when we are done
        self._stack.callback(_restore_environment, {name: os.environ.get(name) for name in THREADS})
        os.environ.update({name: str(self.threads) for name in THREADS})
        try:
            with dask.config.set({f"distributed.nanny.pre-spawn-environ.{name}": self.threads for name in THREADS}):
                cluster = LocalCluster(
                    n_workers=workers,
                    threads_per_worker=1,
                    processes=True,
                    memory_limit=int(MEMORY_LIMIT / workers),
                    dashboard_address="127.0.0.1:0",  # any free port: the usual one may be taken, and dask would warn
                    scheduler_kwargs={"dashboard": self._dashboard},
                    silence_logs=logging.CRITICAL,
                )
        except Exception as error:
            cause = error.__cause__ or error
            raise EngineError(f"local workers cannot be started: {cause}. `--workers 0` does without them.") from error
        self._stack.callback(cluster.close, timeout=10)
        client = Client(cluster, set_as_default=False)
        self._stack.callback(client.close, timeout=10)
        client.run(remote.ignore_interrupts)
        return client


class ExistingCluster(DaskExecutor):
    """A cluster that is there already: `address` such as tcp://host:8786 or tls://host:8786, or a scheduler file."""

    def __init__(self, address: str | None = None, scheduler_file: str | Path | None = None):
        super().__init__()
        self.address, self.scheduler_file = address, scheduler_file

    def connect(self, parts: int):
        from distributed import Client

        if self.scheduler_file is not None:
            path = Path(self.scheduler_file)
            if not path.is_file():
                raise EngineError(f"there is no scheduler file {path}: is the scheduler running?")
            where, arguments = str(path), {"scheduler_file": str(path)}
        else:
            where, arguments = self.address, {"address": self.address}
        try:
            client = Client(**arguments, timeout=PATIENCE / 4, set_as_default=False)
        except Exception as error:
            raise EngineError(f"no scheduler answers at {where}: {str(error) or type(error).__name__}") from error
        self._stack.callback(client.close, timeout=10)
        return client


class BatchJobs(DaskExecutor):
    """`jobs` batch jobs through dask-jobqueue, configured by dask's own configuration files (jobqueue.yaml)."""

    def __init__(self, system: str, jobs: int):
        super().__init__()
        self.system, self.jobs = system, jobs

    def connect(self, parts: int):
        from distributed import Client

        try:
            import dask_jobqueue
            from dask_jobqueue.local import LocalCluster
        except ImportError:
            raise EngineError('batch systems need dask-jobqueue: pip install "manybody[batch]"') from None
        kind = LocalCluster if self.system == "local" else getattr(dask_jobqueue, BATCH_SYSTEMS[self.system])
        try:
            cluster = kind()
            self._stack.callback(cluster.close, timeout=30)
            cluster.scale(jobs=min(self.jobs, parts))
        except Exception as error:
            raise EngineError(f"the batch system {self.system} cannot be used: {error}") from error
        client = Client(cluster, set_as_default=False)
        self._stack.callback(client.close, timeout=10)
        return client
