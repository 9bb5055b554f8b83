"""What is finished, on disk, safe against a kill at any moment.

One SQLite file, ``journal.sqlite``, with one writer (the run that holds the folder's lock) and any number of readers. A
transaction is on disk (synchronous=FULL, rollback journal: it also works on network file systems, which write-ahead
logs do not) before its parts count as finished, so a kill loses only what was in flight. Each entry carries the SHA-256
of its content; an entry that does not match is dropped and its part computed again. A damaged file is set aside and its
good entries are carried over.

States of long parts live in ``states.sqlite`` beside it, so that storing a large state never delays a reader.
"""

from __future__ import annotations

import contextlib
import hashlib
import os
import sqlite3
import time
from collections.abc import Iterable, Iterator
from dataclasses import dataclass
from pathlib import Path

from manybody.workflow.lock import FolderLock
from manybody.workflow.tasks import Outcome, Task

JOURNAL, STATES, LOCK = "journal.sqlite", "states.sqlite", "run.lock"
CHUNK = 2**26  # bytes of a state per row, below SQLite's limit on one value
COLUMNS = "key, kind, status, data, message, seconds, estimate, peak_bytes, host, attempts, checksum, at"

SCHEMA = """
create table if not exists parts (
    key text primary key, kind text, status text, data blob, message text, seconds real, estimate real,
    peak_bytes real, host text, attempts integer, checksum blob, at real);
create table if not exists study (
    place integer primary key, key text, kind text, label text);
create table if not exists notes (name text primary key, value text);
"""
STATE_SCHEMA = """
create table if not exists states (key text, place integer, data blob, checksum blob, primary key (key, place));
"""


class JournalError(RuntimeError):
    """The journal cannot be read or written; the message says why and what to do."""


class NoStudy(JournalError):
    """The folder holds no journal."""


@dataclass(frozen=True)
class Entry:
    """One stored part without its result."""

    key: str
    kind: str
    status: str
    message: str
    seconds: float
    estimate: float
    peak_bytes: float
    host: str
    attempts: int
    checksum: bytes


def checksum(key: str, kind: str, status: str, data: bytes, message: str) -> bytes:
    digest = hashlib.sha256("\0".join((key, kind, status, message)).encode() + b"\0")
    digest.update(data)
    return digest.digest()


def _explain(error: Exception, folder: Path) -> str:
    text = str(error)
    if not folder.is_dir():
        return f"the folder {folder} has been removed while the run was going on. Finished parts in it are gone."
    tail = "Everything finished so far is safe; run the same command again to go on."
    if "disk is full" in text or (isinstance(error, OSError) and error.errno == 28):
        return f"no space left for {folder} ({text}). {tail}"
    if "readonly" in text or "unable to open" in text or isinstance(error, PermissionError):
        return f"{folder} cannot be written any more ({text}). {tail}"
    return f"the journal in {folder} cannot be used ({text}). {tail}"


class Journal:
    """The journal of one folder.

    ``Journal(folder)`` opens it for writing and locks the folder (FolderInUse if another run has it);
    ``Journal(folder, write=False)`` reads while a run goes on; ``Journal(None)`` keeps everything in memory.
    After opening for writing, `dropped` holds the keys of entries that did not match their checksum, and `previous` the
    holder of a stale lock, if there was one.
    """

    def __init__(self, folder: Path | str | None, write: bool = True):
        self.folder = None if folder is None else Path(folder)
        self.write = write
        self.lock: FolderLock | None = None
        self.dropped: list[str] = []
        self.salvaged = 0
        self._states: sqlite3.Connection | None = None
        if self.folder is None:
            self._database = self._open(":memory:", SCHEMA)
            return
        path = self.folder / JOURNAL
        if not write:
            if not path.is_file():
                raise NoStudy(f"{self.folder} holds no study: {path} does not exist.")
            self._database = self._guard(lambda: self._open(path, None))
            return
        self.lock = FolderLock(self.folder / LOCK)
        try:
            self._database = self._guard(lambda: self._open_or_salvage(path))
            self._inode = path.stat().st_ino
        except BaseException:
            self.lock.release()
            raise

    # opening and closing

    def _open(self, path: Path | str, schema: str | None) -> sqlite3.Connection:
        if schema is None:
            # mode=rw makes no file, but lets SQLite roll back what a killed run left half written
            database = sqlite3.connect(
                f"{Path(path).resolve().as_uri()}?mode=rw", uri=True, timeout=60, isolation_level=None
            )
            database.execute("pragma query_only = on")
        else:
            database = sqlite3.connect(path, timeout=60, isolation_level=None, check_same_thread=False)
            database.execute("pragma journal_mode = delete")
            database.execute("pragma synchronous = full")
            database.executescript(schema)
        database.execute("select name from sqlite_master").fetchall()
        return database

    def _open_or_salvage(self, path: Path) -> sqlite3.Connection:
        try:
            database = self._open(path, SCHEMA)
            self._check(database)
            return database
        except sqlite3.DatabaseError as error:
            if isinstance(error, sqlite3.OperationalError) and "disk image" not in str(error):
                raise  # full, locked or not writable: nothing is wrong with the file itself
        aside = path.with_name(f"{path.name}.damaged-{time.strftime('%Y%m%d-%H%M%S')}")
        os.replace(path, aside)
        database = self._open(path, SCHEMA)
        rows = list(_readable_rows(aside))
        with database:
            database.execute("begin")
            database.executemany(f"insert or replace into parts ({COLUMNS}) values ({','.join('?' * 12)})", rows)
        self.salvaged = len(rows)
        self._check(database)
        return database

    def _check(self, database: sqlite3.Connection) -> None:
        """Drop every entry whose content is not what was written."""
        for key, kind, status, data, message, stored in database.execute(
            "select key, kind, status, data, message, checksum from parts"
        ):
            try:
                good = checksum(key, kind, status, data, message) == stored
            except TypeError:
                good = False
            if not good:
                self.dropped.append(key)
        if self.dropped:
            with database:
                database.execute("begin")
                database.executemany("delete from parts where key is ?", [(key,) for key in self.dropped])

    def close(self) -> None:
        """Close the files and free the folder; a file of states that holds none goes."""
        if self._states is not None:
            empty = False
            with contextlib.suppress(sqlite3.Error):
                empty = self._states.execute("select 1 from states limit 1").fetchone() is None
            self._states.close()
            self._states = None
            if empty and self.folder is not None:
                (self.folder / STATES).unlink(missing_ok=True)
        self._database.close()
        if self.lock is not None:
            self.lock.release()

    def __enter__(self) -> Journal:
        return self

    def __exit__(self, *exc) -> None:
        self.close()

    def _guard(self, action):
        try:
            return action()
        except (sqlite3.Error, OSError) as error:
            if self.folder is None:
                raise
            raise JournalError(_explain(error, self.folder)) from error

    def _transaction(self, database: sqlite3.Connection, action) -> None:
        def run():
            if self.folder is not None:
                # SQLite would go on writing into a file that has lost its name
                if (self.folder / JOURNAL).stat().st_ino != self._inode:
                    raise OSError("the journal has been replaced by another file")
                if self.lock is not None:
                    self.lock.heartbeat()
            database.execute("begin immediate")
            try:
                action(database)
                database.execute("commit")
            except BaseException:
                if database.in_transaction:
                    database.execute("rollback")
                raise

        self._guard(run)

    def touch(self) -> None:
        """Show others that this run lives, and see that the folder does; cheap, call it often."""
        if self.lock is not None:
            self._guard(self.lock.heartbeat)

    # parts

    def store(self, outcomes: Iterable[tuple[Task, Outcome]]) -> None:
        """Put parts on disk, all or none, whatever became of them; replaces earlier entries of the same keys."""
        now = time.time()
        rows = [
            (
                task.key, task.kind, out.status, out.data, out.message, out.seconds, task.seconds, out.peak_bytes,
                out.host, out.attempts, checksum(task.key, task.kind, out.status, out.data, out.message), now,
            )
            for task, out in outcomes
        ]  # fmt: skip
        if rows:
            statement = f"insert or replace into parts ({COLUMNS}) values ({','.join('?' * 12)})"
            self._transaction(self._database, lambda database: database.executemany(statement, rows))

    def entries(self) -> dict[str, Entry]:
        """All stored parts by key, without their results."""
        query = "select key, kind, status, message, seconds, estimate, peak_bytes, host, attempts, checksum from parts"
        return self._guard(lambda: {row[0]: Entry(*row) for row in self._database.execute(query)})

    def data(self, keys: Iterable[str]) -> dict[str, bytes]:
        """Packed results of finished parts; keys without one are left out."""
        keys, found = list(keys), {}
        for start in range(0, len(keys), 500):
            some = keys[start : start + 500]
            query = (
                "select key, kind, status, data, message, checksum from parts where status = 'finished' "
                f"and key in ({','.join('?' * len(some))})"
            )
            for key, kind, status, data, message, stored in self._guard(
                lambda query=query, some=some: self._database.execute(query, some).fetchall()
            ):
                if checksum(key, kind, status, data, message) != stored:
                    raise JournalError(
                        f"the entry {key} in {self.folder} has changed on disk; run again to recompute it."
                    )
                found[key] = data
        return found

    # the study the folder belongs to

    def set_study(self, tasks: Iterable[Task], notes: dict[str, str]) -> None:
        """Record which parts the study has and what `status` should know about it."""
        rows = [(place, task.key, task.kind, task.label) for place, task in enumerate(tasks)]

        def action(database):
            database.execute("delete from study")
            database.executemany("insert into study values (?, ?, ?, ?)", rows)
            database.executemany("insert or replace into notes values (?, ?)", list(notes.items()))

        self._transaction(self._database, action)

    def study(self) -> list[tuple[str, str, str]]:
        """(key, kind, label) of every part of the study last run here."""
        return self._guard(
            lambda: self._database.execute("select key, kind, label from study order by place").fetchall()
        )

    def set_notes(self, notes: dict[str, str]) -> None:
        statement = "insert or replace into notes values (?, ?)"
        self._transaction(self._database, lambda database: database.executemany(statement, list(notes.items())))

    def notes(self) -> dict[str, str]:
        return self._guard(lambda: dict(self._database.execute("select name, value from notes")))

    # states of long parts

    def _state_file(self) -> sqlite3.Connection:
        if self._states is None:
            path = ":memory:" if self.folder is None else self.folder / STATES
            try:
                self._states = self._guard(lambda: self._open(path, STATE_SCHEMA))
            except JournalError as error:
                if not isinstance(error.__cause__, sqlite3.DatabaseError) or self.folder is None:
                    raise
                path.unlink(missing_ok=True)  # a damaged state only costs time
                self._states = self._guard(lambda: self._open(path, STATE_SCHEMA))
        return self._states

    def store_state(self, key: str, state: bytes) -> None:
        """Replace the saved state of a long part."""
        digest = hashlib.sha256(key.encode() + b"\0" + state).digest()
        pieces = [state[start : start + CHUNK] for start in range(0, len(state), CHUNK)] or [b""]

        def action(database):
            database.execute("delete from states where key = ?", (key,))
            database.executemany(
                "insert into states values (?, ?, ?, ?)", [(key, i, piece, digest) for i, piece in enumerate(pieces)]
            )

        self._transaction(self._state_file(), action)

    def state(self, key: str) -> bytes | None:
        """The saved state of a part, or None where there is none or it is damaged."""
        if self._states is None and self.folder is not None and not (self.folder / STATES).exists():
            return None
        try:
            rows = self._state_file().execute("select data, checksum from states where key = ? order by place", (key,))
            rows = rows.fetchall()
        except sqlite3.DatabaseError:
            return None
        state = b"".join(row[0] for row in rows)
        if not rows or hashlib.sha256(key.encode() + b"\0" + state).digest() != rows[0][1]:
            return None
        return state

    def drop_states(self, keys: Iterable[str]) -> None:
        if self._states is None:
            return
        rows = [(key,) for key in keys]
        self._transaction(self._states, lambda db: db.executemany("delete from states where key = ?", rows))


def _readable_rows(path: Path) -> Iterator[tuple]:
    """Rows of a damaged file that can still be read and match their checksum."""
    try:
        database = sqlite3.connect(path, isolation_level=None)
    except sqlite3.Error:
        return
    try:
        try:
            (last,) = database.execute("select max(rowid) from parts").fetchone()
        except sqlite3.Error:
            last = None
        for rowid in range(1, (last if last is not None else 0) + 1):
            try:
                row = database.execute(f"select {COLUMNS} from parts where rowid = ?", (rowid,)).fetchone()
                if row and checksum(row[0], row[1], row[2], row[3], row[4]) == row[10]:
                    yield row
            except (sqlite3.Error, TypeError):
                continue
    finally:
        database.close()
