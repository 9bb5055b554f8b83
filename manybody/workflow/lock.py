"""One run per folder: an operating-system lock on a small file that also says who holds it.

The lock goes with the process that holds it, however that process ends, so a lock file left by a dead run never
stands in the way. Where the file system has no locks, and between machines that do not see each other's locks, the
recorded host, process and heartbeat decide.
"""

from __future__ import annotations

import contextlib
import json
import os
import socket
import time
from datetime import datetime
from pathlib import Path

HEARTBEAT = 20.0  # seconds between signs of life
SILENCE = 120.0  # a holder on another host that is silent for longer counts as dead


class FolderInUse(RuntimeError):
    """Another run works on this folder."""


def _lock(handle) -> bool | None:
    """True: locked. False: somebody else holds it. None: this file system cannot lock."""
    try:
        import fcntl
    except ImportError:
        import msvcrt

        try:
            handle.seek(2**20)  # far behind the text, which others must be able to read
            msvcrt.locking(handle.fileno(), msvcrt.LK_NBLCK, 1)
            return True
        except OSError:
            return False
    try:
        fcntl.flock(handle, fcntl.LOCK_EX | fcntl.LOCK_NB)
        return True
    except BlockingIOError:
        return False
    except OSError:
        return None


def _alive(pid: int, born: float) -> bool:
    import psutil

    try:
        return abs(psutil.Process(pid).create_time() - born) < 2.0
    except psutil.Error:
        return False


def read_holder(path: Path) -> dict | None:
    """Who the lock file names (host, pid, born, since), or None."""
    try:
        holder = json.loads(path.read_text())
        return holder if isinstance(holder, dict) and "pid" in holder else None
    except (OSError, ValueError):
        return None


def is_held(path: Path) -> bool:
    """Whether the run that the lock file names seems alive, seen from here; locks nothing."""
    holder = read_holder(path)
    if holder is None:
        return False
    if holder.get("host") == socket.gethostname():
        return _alive(int(holder["pid"]), float(holder.get("born", 0.0)))
    return time.time() - path.stat().st_mtime < SILENCE


class FolderLock:
    """Holds the folder from construction to `release`. Raises FolderInUse when another run has it.

    `previous` is the holder that died without releasing, or None.
    """

    def __init__(self, path: Path):
        self.path = Path(path)
        # never inherited by workers: a worker that outlives its run must not keep the folder locked
        self._handle = open(self.path, "a+")  # noqa: SIM115
        try:
            self._acquire()
        except BaseException:
            self._handle.close()
            raise
        self._beat = time.monotonic()

    def _acquire(self) -> None:
        import psutil

        holder = read_holder(self.path)
        got = _lock(self._handle)
        host = socket.gethostname()
        if got is False:
            self._refuse(holder)
        if holder is not None:
            if holder.get("host") != host:
                if time.time() - self.path.stat().st_mtime < SILENCE:
                    self._refuse(holder, f" If that run is dead, wait {SILENCE:.0f} s or delete {self.path}.")
            elif got is None and _alive(int(holder["pid"]), float(holder.get("born", 0.0))):
                self._refuse(holder)
        self.previous = holder
        self._write({"host": host, "pid": os.getpid(), "born": psutil.Process().create_time(), "since": time.time()})

    def _refuse(self, holder: dict | None, hint: str = "") -> None:
        who = "another run"
        if holder:
            since = datetime.fromtimestamp(holder.get("since", 0)).strftime("%Y-%m-%d %H:%M")
            who = f"process {holder['pid']} on {holder.get('host', '?')}, since {since}"
        raise FolderInUse(
            f"{self.path.parent} is in use by {who}. One run at a time may write to a folder: wait for it, stop it, or "
            f"choose another --out. `manybody status {self.path.parent}` shows how far it is.{hint}"
        )

    def _write(self, holder: dict | None) -> None:
        self._handle.seek(0)
        self._handle.truncate()
        if holder:
            self._handle.write(json.dumps(holder))
        self._handle.flush()

    def heartbeat(self) -> None:
        """Show that this run lives; cheap, call it often."""
        now = time.monotonic()
        if now - self._beat > HEARTBEAT:
            self._beat = now
            os.utime(self.path)

    def release(self) -> None:
        if not self._handle.closed:
            with contextlib.suppress(OSError):  # the folder is gone or full: closing frees the lock all the same
                self._write(None)
            self._handle.close()
