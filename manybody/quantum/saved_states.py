"""What a long solve keeps, so that it can go on after it was broken off at any moment.

A checkpoint keeps one piece of bytes. It holds named states, each a set of arrays: the runs of the sectors compared so
far, the main run, the guard run, the results of clusters that are done. All of them are written together, so what is
found again belongs together. Names may be nested: a solver sees only what lies within its own name.
"""

import hashlib
import io
import os
import time
from collections.abc import Callable
from dataclasses import dataclass, field
from pathlib import Path
from typing import Protocol

import numpy as np

from manybody.model.quantization import SpinOperator
from manybody.quantum.result import QuantumSettings

FORMAT = 1
"""To be raised whenever states of earlier versions can no longer be taken up."""
SAVE_EVERY = 120.0
"""Seconds between two savings, where the checkpoint does not decide itself."""
OWNER = "owner"

Arrays = dict[str, np.ndarray]


class Checkpoint(Protocol):
    """Where the state of a long run is kept. save() replaces what was kept, in one step. One that also has
    due() -> bool says itself when to save; remove() is called, where there is one, when the state is of no more use."""

    def load(self) -> bytes | None: ...

    def save(self, data: bytes) -> None: ...


class FileCheckpoint:
    """A checkpoint in a file."""

    def __init__(self, path: Path):
        self.path = path

    def load(self) -> bytes | None:
        return self.path.read_bytes() if self.path.exists() else None

    def save(self, data: bytes) -> None:
        partial = self.path.with_name(self.path.name + ".partial")
        with open(partial, "wb") as file:
            file.write(data)
            file.flush()
            os.fsync(file.fileno())
        partial.replace(self.path)

    def remove(self) -> None:
        self.path.unlink(missing_ok=True)


@dataclass
class _Store:
    checkpoint: Checkpoint | None
    entries: dict[str, Callable[[], Arrays]] = field(default_factory=dict)
    saved: float = field(default_factory=time.monotonic)


@dataclass(frozen=True)
class SavedStates:
    """The named states of a checkpoint, or those whose names lie within `prefix`. Without a checkpoint nothing is kept
    and nothing found."""

    store: _Store
    prefix: str = ""

    @property
    def kept(self) -> bool:
        """Whether there is a checkpoint at all."""
        return self.store.checkpoint is not None

    def within(self, name: str) -> "SavedStates":
        return SavedStates(self.store, f"{self.prefix}{name}/")

    def claim(self, owner: str) -> None:
        """Drop all states here unless the same owner left them."""
        mark = text_array(owner)
        found = self.get(OWNER)
        if found is None or not np.array_equal(found["name"], mark):
            for name in [name for name in self.store.entries if name.startswith(self.prefix)]:
                del self.store.entries[name]
        self.put(OWNER, lambda: {"name": mark})

    def get(self, name: str) -> Arrays | None:
        make = self.store.entries.get(self.prefix + name)
        return None if make is None else make()

    def put(self, name: str, make: Callable[[], Arrays]) -> None:
        """From now on keep what make() gives at the moment of saving, in place of what had this name."""
        if self.store.checkpoint is not None:
            self.store.entries[self.prefix + name] = make

    def drop(self, name: str) -> None:
        """Forget a state and all within its name."""
        whole = self.prefix + name
        for other in [other for other in self.store.entries if other == whole or other.startswith(f"{whole}/")]:
            del self.store.entries[other]

    def pause(self) -> None:
        """Save if it is time to; to be called often, whenever all that was put is fit to go on from."""
        store = self.store
        if store.checkpoint is None:
            return
        due = getattr(store.checkpoint, "due", None)
        if due() if due is not None else time.monotonic() - store.saved >= SAVE_EVERY:
            arrays = {"format": np.array([FORMAT])}
            for name, make in store.entries.items():
                arrays |= {f"{name}:{label}": array for label, array in make().items()}
            store.checkpoint.save(pack(arrays))
            store.saved = time.monotonic()

    def finish(self) -> None:
        """The solve is done: its states are of no more use."""
        self.store.entries.clear()
        remove = getattr(self.store.checkpoint, "remove", None)
        if remove is not None:
            remove()


def open_states(checkpoint: Checkpoint | str | Path | None) -> SavedStates:
    """The states of a checkpoint or file; none where its bytes are damaged or of another format."""
    if isinstance(checkpoint, str | Path):
        checkpoint = FileCheckpoint(Path(checkpoint))
    store = _Store(checkpoint)
    data = checkpoint.load() if checkpoint is not None else None
    if data:
        try:
            arrays = unpack(data)
        except Exception:  # damaged bytes may raise anything; they only cost time
            arrays = {}
        if np.array_equal(arrays.pop("format", None), [FORMAT]):
            entries: dict[str, Arrays] = {}
            for label, array in arrays.items():
                name, _, own = label.rpartition(":")
                entries.setdefault(name, {})[own] = array
            store.entries = {name: lambda found=found: found for name, found in entries.items()}
    return SavedStates(store)


def pack(arrays: Arrays) -> bytes:
    buffer = io.BytesIO()
    np.savez(buffer, **arrays)
    return buffer.getvalue()


def unpack(data: bytes) -> Arrays:
    with np.load(io.BytesIO(data), allow_pickle=False) as archive:
        return {name: archive[name] for name in archive.files}


def text_array(text: str) -> np.ndarray:
    return np.frombuffer(text.encode(), np.uint8)


def owner(op: SpinOperator, settings: QuantumSettings, scale: float) -> str:
    """Hash of the operator and all that says how it is to be solved."""
    content = (op.symbol.fingerprint(), op.spins.tobytes().hex(), repr(settings), repr(float(scale)))
    return hashlib.sha256("\n".join(content).encode()).hexdigest()
