"""The words the engine speaks: a task, what became of it, and what a running part may say meanwhile.

A study is a set of tasks (its parts). The engine knows nothing of spins: it runs

    run_part(payload, inputs, report, checkpoint) -> dict

once for every task, a top-level function that workers can import. `inputs` maps the keys the task depends on to
their results; the returned dict must suit `encoding.pack`.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Any

KINDS = ("classical", "quantum", "bounds")
STATUSES = ("finished", "failed", "refused")
FOLLOWS = "needs the "  # how the message of a part begins that was not run because another has no result

RunPart = Callable[[Any, Mapping[str, dict], Callable[[dict], None], "Any"], dict]


@dataclass(frozen=True)
class Task:
    """One part of a study.

    key      : hash of everything that determines the result; its name in the journal
    kind     : which sort of part ("classical", "quantum", "bounds"); costs are calibrated kind by kind
    label    : for people
    depends  : keys of the tasks whose results it needs
    payload  : small picklable description, handed to run_part
    seconds, bytes : estimates of the cost model, before calibration
    """

    key: str
    kind: str
    label: str
    depends: tuple[str, ...] = ()
    payload: Any = None
    seconds: float = 0.1
    bytes: float = 0.0


@dataclass(frozen=True)
class Outcome:
    """What became of one part. `data` is the packed result, empty unless finished.

    On its way from a worker `status` may also be "stopped": broken off on request, `data` being the saved state.
    """

    key: str
    status: str
    data: bytes = b""
    message: str = ""
    seconds: float = 0.0
    peak_bytes: float = 0.0
    host: str = ""
    attempts: int = 1

    @property
    def follows(self) -> bool:
        """Not run only because a part that it needs has no result."""
        return self.status != "finished" and self.message.startswith(FOLLOWS)


@dataclass
class Batch:
    """Parts that travel to a worker together; `alone` ones share their worker with nothing else."""

    number: int
    tasks: list[Task]
    alone: bool = False
    seconds: float = 0.0
    bytes: float = 0.0
    place: str = ""
    started: float = 0.0


@dataclass(frozen=True)
class Slot:
    """A worker as the engine sees it: how many parts at once, and how many bytes for all of them (inf: not limited)."""

    place: str
    host: str
    threads: int
    memory: float


@dataclass(frozen=True)
class Counts:
    """How a run stands, in parts; `waiting`: no outcome yet, `reused`: finished by an earlier run."""

    finished: int = 0
    failed: int = 0
    refused: int = 0
    waiting: int = 0
    running: int = 0
    reused: int = 0
    seconds_left: float = float("nan")


class EngineError(RuntimeError):
    """The run cannot go on for a reason outside the study; the message says what to do. Finished parts are kept."""


class Interrupted(EngineError):
    """The run was stopped on request; running it again resumes."""
