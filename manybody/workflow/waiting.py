"""What is ready to run, in which order, and how much of it travels to a worker at once."""

from __future__ import annotations

import heapq
from collections import defaultdict, deque
from collections.abc import Mapping

from manybody.workflow.costs import CostModel
from manybody.workflow.tasks import Task

BATCH_SECONDS = 0.3  # expected length of a batch of short parts
BATCH_PARTS = 200
UNKNOWN_PARTS = 8  # parts per batch while nothing of their kind has been measured
SKIP = 64  # parts looked at for one that fits a worker's free memory


class Waiting:
    """Tasks by what they still wait for, and the ready ones, longest first.

    The length of a task counts the longest task that waits for it. Suspects are tasks that were in hand when a worker
    died: they are handed out one by one.
    """

    def __init__(self, tasks: Mapping[str, Task], costs: CostModel):
        self._tasks, self._costs = tasks, costs
        self._order = {key: place for place, key in enumerate(tasks)}
        self._ready: list[tuple[float, int, str]] = []
        self._suspects: deque[str] = deque()
        self._blockers: dict[str, int] = {}
        self._dependents: dict[str, list[str]] = defaultdict(list)
        self._sorted_with = 0  # measurements behind the present order

    def __bool__(self) -> bool:
        return bool(self._ready or self._suspects)

    @property
    def ready(self) -> int:
        return len(self._ready)

    @property
    def suspects(self) -> bool:
        return bool(self._suspects)

    def add(self, key: str, missing: list[str]) -> None:
        """A task and what it waits for."""
        self._blockers[key] = len(missing)
        for name in missing:
            self._dependents[name].append(key)

    def release(self, keys: list[str]) -> None:
        """Make those ready that wait for nothing."""
        for key in keys:
            if self._blockers[key] == 0:
                self.push(key)

    def dependents(self, key: str) -> list[str]:
        return self._dependents.get(key, [])

    def unblock(self, key: str) -> list[str]:
        """A task is finished: those that now wait for nothing."""
        free = []
        for name in self._dependents.pop(key, []):
            self._blockers[name] -= 1
            if self._blockers[name] == 0:
                free.append(name)
        return free

    def seconds(self, key: str) -> float:
        return self._costs.seconds(self._tasks[key].kind, self._tasks[key].seconds)

    def bytes(self, key: str) -> float:
        return self._costs.bytes(self._tasks[key].kind, self._tasks[key].bytes)

    def push(self, key: str) -> None:
        tail = max((self.seconds(name) for name in self.dependents(key)), default=0.0)
        heapq.heappush(self._ready, (-self.seconds(key) - tail, self._order[key], key))

    def suspect(self, key: str) -> None:
        self._suspects.append(key)

    def resort(self) -> None:
        """Put the ready tasks in order again once many more have been measured than when they were put in."""
        if self._costs.total < 1.2 * self._sorted_with + 1:
            return
        self._sorted_with = self._costs.total
        keys, self._ready = [key for *_, key in self._ready], []
        for key in keys:
            self.push(key)

    def take_suspect(self, free: float) -> list[str]:
        """One suspect that fits into `free` bytes, if there is one."""
        for key in self._suspects:
            if self.bytes(key) <= free:
                self._suspects.remove(key)
                return [key]
        return []

    def take(self, free: float, threads: int) -> list[str]:
        """The longest task that fits into `free` bytes, with as many more as make a batch worth sending.

        threads: of all workers; the last batches are made small enough for all of them to have one.
        """
        chosen: list[str] = []
        skipped = []
        seconds, limit = 0.0, min(BATCH_PARTS, max(1, len(self._ready) // (2 * max(threads, 1))))
        while self._ready and len(chosen) < limit and len(skipped) < SKIP:
            item = heapq.heappop(self._ready)
            key = item[2]
            if self.bytes(key) > free:
                skipped.append(item)
                continue
            length = self.seconds(key)
            if chosen and seconds + length > BATCH_SECONDS:
                heapq.heappush(self._ready, item)
                break
            chosen.append(key)
            seconds += length
            if self._costs.known(self._tasks[key].kind) < UNKNOWN_PARTS:
                limit = min(limit, UNKNOWN_PARTS)
        for item in skipped:
            heapq.heappush(self._ready, item)
        return chosen

    def smallest(self) -> float:
        """Bytes of the least demanding task that is ready."""
        keys = [*self._suspects, *(key for *_, key in self._ready)]
        return min((self.bytes(key) for key in keys), default=0.0)
