"""Runs the parts of a study: what is missing, longest first, nothing lost, nothing twice.

`run_tasks` is generic: it knows tasks (tasks.py), a journal and an executor (inprocess.py, cluster.py), not what the
parts compute. It is the only writer. Parts whose estimates are small travel in batches, so that ten thousand of them
cost little, yet each is journaled for itself. A part counts as finished once the journal has it on disk.
"""

from __future__ import annotations

import json
import time
from collections import Counter, defaultdict, deque
from collections.abc import Callable, Sequence
from dataclasses import replace

from manybody.workflow.costs import CostModel, gigabytes
from manybody.workflow.interrupts import Interrupts
from manybody.workflow.journal import Journal
from manybody.workflow.progress import Display
from manybody.workflow.tasks import FOLLOWS, Batch, Counts, EngineError, Interrupted, Outcome, RunPart, Slot, Task
from manybody.workflow.waiting import Waiting

ATTEMPTS = 3  # how often a part may be in hand when its worker dies
SLICE_SECONDS = 1.0  # a batch that takes longer than this hands back what it has
PREFETCH_SECONDS = 2.0  # a worker gets its next batch ahead of time while its present ones are shorter than this
GRACE = 30.0  # seconds that parts in hand are given after the first Ctrl-C
CACHE = 64e6  # bytes of results kept at hand for the parts that need them
IDLE = 60.0  # seconds without anything to do before saying so
NOTE_EVERY = 10.0  # seconds between notes in the journal on what is running
MEANWHILE = 900.0  # seconds between writings of the results so far
LEFT_EVERY = 3.0  # seconds between estimates of the time left


def pending(tasks: Sequence[Task], journal: Journal, retry_failed: bool = False) -> list[Task]:
    """The tasks that a run would still have to do."""
    entries = journal.entries()
    done = {"finished"} if retry_failed else {"finished", "failed"}
    return [task for task in tasks if not (task.key in entries and entries[task.key].status in done)]


def run_tasks(
    tasks: Sequence[Task],
    run_part: RunPart,
    journal: Journal,
    executor,
    display: Display | None = None,
    attempts: int = ATTEMPTS,
    retry_failed: bool = False,
    meanwhile: Callable[[], object] | None = None,
) -> Counts:
    """Run every task that the journal does not have yet; return how the study stands.

    meanwhile: called now and then during long runs, when there are new results.

    Raises Interrupted after a first Ctrl-C (a second one raises KeyboardInterrupt at once), EngineError when no cluster
    can be had or it is lost, JournalError when the disk fails; whatever was finished before is in the journal.
    """
    run = _Run(tasks, run_part, journal, executor, display or Display(), attempts, meanwhile)
    run.sort_out(retry_failed)
    return run.go()


class _Run:
    def __init__(self, tasks, run_part, journal, executor, display, attempts, meanwhile):
        self.tasks = {task.key: task for task in tasks}
        self.run_part, self.journal, self.executor, self.display = run_part, journal, executor, display
        self.attempts_allowed = attempts
        self.meanwhile, self.meanwhile_at = meanwhile, time.monotonic() + MEANWHILE
        self.noted_at, self.new = float("-inf"), 0
        self.left, self.left_at = float("nan"), float("-inf")
        self.costs = CostModel()
        self.waiting = Waiting(self.tasks, self.costs)
        self.status: dict[str, str] = {}
        self.tally: Counter[str] = Counter()
        self.reused = 0
        self.tries: dict[str, int] = defaultdict(int)
        self.slots: dict[str, Slot] = {}
        self.busy: dict[str, deque[Batch]] = {}
        self.batches: dict[int, Batch] = {}
        self.numbers = 0
        self.users: dict[str, int] = defaultdict(int)
        self.cache: dict[str, bytes] = {}
        self.cached = 0
        self.interrupts = Interrupts()
        self.deadline = float("inf")

    # what there is to do

    def sort_out(self, retry_failed: bool) -> None:
        """Take over what the journal has, and see what waits for what."""
        entries = self.journal.entries()
        for key, task in self.tasks.items():
            entry = entries.get(key)
            if entry is None:
                continue
            if entry.status == "finished":
                self.costs.measured(task.kind, task.seconds, entry.seconds, task.bytes, entry.peak_bytes)
                self.status[key] = "finished"
            elif entry.status == "failed" and not retry_failed:
                self.status[key] = "failed"
        self.tally = Counter(self.status.values())
        self.reused = self.tally["finished"]
        blocked = []
        for key in self.missing():
            task = self.tasks[key]
            missing = [name for name in task.depends if self.status.get(name) != "finished"]
            for name in missing:
                if name not in self.tasks:
                    raise ValueError(f"{task.label} depends on {name}, which is no task of this study")
            self.waiting.add(key, missing)
            for name in task.depends:
                self.users[name] += 1
            if any(self.status.get(name) == "failed" for name in missing):
                blocked.append(key)
        self._finish([(key, self._because(key)) for key in blocked])

    def missing(self) -> list[str]:
        return [key for key in self.tasks if key not in self.status]

    # the run

    def go(self) -> Counts:
        missing = self.missing()
        if not missing:
            return self._count()
        with self.interrupts:
            try:
                widest = Counter(self.tasks[key].kind for key in missing).most_common(1)[0][1]
                self._set_slots(self.executor.start(widest, self._wait))
                self._refuse()
                self.waiting.release(self.missing())
                self.display.start(self._count(), self.executor.dashboard, len(self.tasks))
                self._loop()
            except BaseException:
                self.display.stop()
                self.executor.close(at_once=True)
                raise
            self.display.stop()
            self.executor.close(at_once=self.interrupts.stop)
        if self.missing():
            raise Interrupted("stopped")
        return self._count()

    def _wait(self, what: str) -> None:
        """Called by the executor while it waits, now and then, with what it waits for ("" to say nothing)."""
        if self.interrupts.stop:
            raise Interrupted("stopped")
        if what:
            self.display.say(what)
        self.journal.touch()

    def _loop(self) -> None:
        idle_since = time.monotonic()
        while True:
            if not self.interrupts.stop:
                self._dispatch()
            elif self.deadline == float("inf"):
                self.deadline = time.monotonic() + GRACE
                self.executor.ask_to_stop()
                parts = "1 part" if self._in_hand() == 1 else f"{self._in_hand()} parts"
                wait = f"waiting up to {GRACE:.0f} s for {parts} in hand"
                self.display.say(f"Stopping: {wait}; Ctrl-C again stops at once.")
            if not self.batches and (self.interrupts.stop or not self.waiting):
                return
            if time.monotonic() > self.deadline:
                return
            self._handle(self.executor.events(0.2))
            self._show()
            self._housekeeping()
            if self.batches:
                idle_since = time.monotonic()
            elif time.monotonic() - idle_since > IDLE:
                idle_since = time.monotonic()
                size = gigabytes(self.waiting.smallest())
                self.display.say(f"Waiting for a worker that can give {size} of memory to a part. Ctrl-C stops.")

    def _refuse(self) -> None:
        """Mark what no worker could hold, before anything starts."""
        most = max(slot.memory for slot in self.slots.values())
        refused = []
        for key in self.missing():
            need = self.waiting.bytes(key)
            if need > most:
                message = f"needs {gigabytes(need)} of memory; a worker can give {gigabytes(max(most, 0.0))}"
                refused.append((key, Outcome(key, "refused", message=message, attempts=0)))
        self._finish(refused)

    # sending parts out

    @property
    def threads(self) -> int:
        return sum(slot.threads for slot in self.slots.values())

    def _dispatch(self) -> None:
        self.waiting.resort()
        places = sorted(self.slots, key=lambda place: len(self.busy[place]))
        for place in places:
            while len(self.busy[place]) < self.slots[place].threads and (batch := self._next_batch(place)):
                self._send(batch)
        for place in places:
            while self._may_prefetch(place) and (batch := self._next_batch(place)):
                self._send(batch)

    def _may_prefetch(self, place: str) -> bool:
        """Whether a busy worker should get a batch ahead of time: only while its own are short, and enough is left."""
        busy, threads = self.busy[place], self.slots[place].threads
        if self.waiting.suspects or not threads <= len(busy) < 2 * threads or self.waiting.ready <= self.threads:
            return False
        known = all(self.costs.known(task.kind) for batch in busy for task in batch.tasks)
        return known and max(batch.seconds for batch in busy) <= PREFETCH_SECONDS

    def _next_batch(self, place: str) -> Batch | None:
        slot, busy = self.slots[place], self.busy[place]
        if busy and busy[0].alone:
            return None
        free = slot.memory - sum(batch.bytes for batch in busy)
        if self.waiting.suspects:
            # a part that was in hand when a worker died gets a worker for itself, so that no other pays for it
            if not busy and (keys := self.waiting.take_suspect(free)):
                return self._batch(place, keys, alone=True)
            if place == min(self.slots, key=lambda name: (len(self.busy[name]), name)) and busy:
                return None
        return self._batch(place, self.waiting.take(free, self.threads), alone=False)

    def _batch(self, place: str, keys: list[str], alone: bool) -> Batch | None:
        if not keys:
            return None
        tasks = [self.tasks[key] for key in keys]
        self.numbers += 1
        seconds, need = sum(map(self.waiting.seconds, keys)), max(map(self.waiting.bytes, keys))
        return Batch(self.numbers, tasks, alone, seconds, need, place, time.monotonic())

    def _send(self, batch: Batch) -> None:
        needed = {name for task in batch.tasks for name in task.depends}
        inputs = {name: self.cache[name] for name in needed if name in self.cache}
        inputs.update(self.journal.data(needed - inputs.keys()))
        states = {}
        for task in batch.tasks:
            state = self.journal.state(task.key)
            if state is not None:
                states[task.key] = state
        for task in batch.tasks:
            for name in task.depends:
                self.users[name] -= 1
                if self.users[name] <= 0 and name in self.cache:
                    self.cached -= len(self.cache.pop(name))
        self.batches[batch.number] = batch
        self.busy[batch.place].append(batch)
        self.executor.submit(batch, self.run_part, inputs, states, SLICE_SECONDS)

    # taking results in

    def _handle(self, events: list[tuple]) -> None:
        done: list[tuple[str, Outcome]] = []
        for event in events:
            what = event[0]
            if what == "done":
                batch = self._take_back(event[1])
                if batch is None:
                    continue
                outcomes = {outcome.key: outcome for outcome in event[2]}
                for task in batch.tasks:
                    outcome = outcomes.get(task.key)
                    if outcome is not None and outcome.status != "stopped":
                        done.append((task.key, replace(outcome, attempts=self.tries[task.key] + 1)))
                        continue
                    if outcome is not None:
                        self.journal.store_state(task.key, outcome.data)
                    self._again(task.key)
            elif what == "broken":
                batch = self._take_back(event[1])
                if batch is not None:
                    done += self._blame(batch, event[2])
            elif what == "lost":
                done += self._lose(event[1], event[2])
            elif what == "slots":
                done += self._set_slots(event[1])
            elif what == "report":
                self.display.report(event[1], event[2])
            elif what == "state":
                if event[1] in self.tasks and event[1] not in self.status:
                    self.journal.store_state(event[1], event[2])
            elif what == "gone":
                raise EngineError(f"{event[1]}. Everything finished is safe; run the same command again to go on.")
        self._finish(done)

    def _take_back(self, number: int) -> Batch | None:
        batch = self.batches.pop(number, None)
        if batch is not None and batch.place in self.busy:
            self.busy[batch.place].remove(batch)
        return batch

    def _again(self, key: str) -> None:
        for name in self.tasks[key].depends:
            self.users[name] += 1
        if self.tries[key]:
            self.waiting.suspect(key)
        else:
            self.waiting.push(key)

    def _blame(self, batch: Batch, reason: str) -> list[tuple[str, Outcome]]:
        """Count a try against every part of a batch; those out of tries have failed, the others get another."""
        failed = []
        for task in batch.tasks:
            self.tries[task.key] += 1
            if self.tries[task.key] >= self.attempts_allowed:
                message = f"given up after {self.tries[task.key]} tries: {reason}"
                failed.append((task.key, Outcome(task.key, "failed", message=message, attempts=self.tries[task.key])))
            else:
                self._again(task.key)
        return failed

    def _lose(self, place: str, expected: bool) -> list[tuple[str, Outcome]]:
        slot = self.slots.pop(place, None)
        if slot is None:
            return []
        failed = []
        for position, batch in enumerate(self.busy.pop(place)):
            self.batches.pop(batch.number, None)
            self.executor.forget(batch.number)
            if position < slot.threads and not expected:
                failed += self._blame(batch, "the worker died while this part was in hand (out of memory, or killed)")
            else:
                for task in batch.tasks:
                    self._again(task.key)
        if not self.interrupts.stop and not expected:
            self.display.say(f"A worker on {slot.host} died; its parts will be tried again elsewhere.")
        return failed

    def _set_slots(self, slots: list[Slot]) -> list[tuple[str, Outcome]]:
        failed = []
        found = {slot.place: slot for slot in slots}
        for place in [place for place in self.slots if place not in found]:
            failed += self._lose(place, False)
        for place, slot in found.items():
            self.slots.setdefault(place, slot)
            self.busy.setdefault(place, deque())
        return failed

    def _because(self, key: str) -> Outcome:
        task = self.tasks[key]
        bad = next(name for name in task.depends if self.status.get(name) in ("failed", "refused"))
        verb = "was refused" if self.status[bad] == "refused" else "failed"
        message = f"{FOLLOWS}{self.tasks[bad].kind} part of {self.tasks[bad].label}, which {verb}"
        return Outcome(key, self.status[bad], message=message, attempts=0)

    def _finish(self, outcomes: list[tuple[str, Outcome]]) -> None:
        """Journal outcomes, then count them, then let their dependents go."""
        while outcomes:
            outcomes = [(key, outcome) for key, outcome in outcomes if key not in self.status]
            self.journal.store([(self.tasks[key], outcome) for key, outcome in outcomes])
            self.journal.drop_states([key for key, outcome in outcomes if outcome.status == "finished"])
            following = {}
            for key, outcome in outcomes:
                task = self.tasks[key]
                self.status[key] = outcome.status
                self.tally[outcome.status] += 1
                self.new += 1
                self.display.finished(task, outcome)
                if outcome.status == "finished":
                    self.costs.measured(task.kind, task.seconds, outcome.seconds, task.bytes, outcome.peak_bytes)
                    if self.users[key] and self.cached + len(outcome.data) < CACHE:
                        self.cache[key] = outcome.data
                        self.cached += len(outcome.data)
                    for name in self.waiting.unblock(key):
                        if name not in self.status and name not in following:
                            self.waiting.push(name)
                else:
                    names = [name for name in self.waiting.dependents(key) if name not in self.status]
                    following.update((name, self._because(name)) for name in names)
            outcomes = list(following.items())

    # telling

    def _in_hand(self) -> int:
        return sum(len(batch.tasks) for batch in self.batches.values())

    def _count(self) -> Counts:
        tally, done = self.tally, len(self.status)
        return Counts(
            finished=tally["finished"],
            failed=tally["failed"],
            refused=tally["refused"],
            waiting=len(self.tasks) - done,
            running=self._in_hand(),
            reused=self.reused,
            seconds_left=self.left,
        )

    def _show(self) -> None:
        if not self.display.due():
            return
        now = time.monotonic()
        if now - self.left_at > LEFT_EVERY:
            self.left, self.left_at = self._seconds_left(now), now
        batches = [(self.slots[batch.place], batch) for batch in self.batches.values() if batch.place in self.slots]
        self.display.update(self._count(), batches)

    def _seconds_left(self, now: float) -> float:
        running = {task.key for batch in self.batches.values() for task in batch.tasks}
        lengths = [max(batch.seconds - (now - batch.started), 0.1 * batch.seconds) for batch in self.batches.values()]
        for key in self.missing():
            if key not in running:
                lengths.append(self.waiting.seconds(key))
        return max(sum(lengths) / max(self.threads, 1), max(lengths, default=0.0))

    def _housekeeping(self) -> None:
        """Signs of life, what `status` should know, and now and then the results so far."""
        self.journal.touch()
        now = time.monotonic()
        if now - self.noted_at > NOTE_EVERY:
            self.noted_at = now
            running = []
            for batch in list(self.batches.values())[:100]:
                task, host = batch.tasks[0], self.slots[batch.place].host
                state = self.display.reports.get(task.key, {})
                running.append([task.label, task.kind, host, round(now - batch.started), state])
            self.journal.set_notes({"running": json.dumps(running)})
        if self.meanwhile is not None and self.new and now > self.meanwhile_at:
            self.new = 0
            self.meanwhile()
            self.meanwhile_at = time.monotonic() + max(MEANWHILE, 20 * (time.monotonic() - now))
