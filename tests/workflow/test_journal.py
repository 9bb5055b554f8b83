"""The journal against damage: torn entries, damaged files, two runs, full disks, folders that vanish."""

import os
import resource
import shutil
import socket
import sqlite3
import subprocess
import sys
import time

import numpy as np
import pytest
from fake_parts import fake_task
from hypothesis import given
from hypothesis import strategies as st

from manybody.workflow import lock
from manybody.workflow.encoding import EncodingError, pack, unpack
from manybody.workflow.journal import JOURNAL, Journal, JournalError
from manybody.workflow.lock import FolderInUse
from manybody.workflow.tasks import Outcome


def stored(folder, count=5, size=1000):
    tasks = [fake_task(i) for i in range(count)]
    with Journal(folder) as journal:
        for task in tasks:
            data = pack({"number": task.payload["number"], "noise": np.arange(size)})
            journal.store([(task, Outcome(task.key, "finished", data))])
    return tasks


def test_entries_survive_closing(tmp_path):
    tasks = stored(tmp_path)
    with Journal(tmp_path) as journal:
        assert list(journal.entries()) == [task.key for task in tasks]
        assert not journal.dropped
        data = journal.data([tasks[3].key, "unknown"])
    assert list(data) == [tasks[3].key]
    assert unpack(data[tasks[3].key])["number"] == 3


def test_torn_entry_is_dropped_and_the_others_kept(tmp_path):
    tasks = stored(tmp_path)
    with sqlite3.connect(tmp_path / JOURNAL) as database:
        (data,) = database.execute("select data from parts where key = ?", (tasks[2].key,)).fetchone()
        torn = data[:500] + bytes([data[500] ^ 1]) + data[501:]
        database.execute("update parts set data = ? where key = ?", (torn, tasks[2].key))
        database.execute("update parts set data = null where key = ?", (tasks[4].key,))
    database.close()
    with Journal(tmp_path) as journal:
        assert sorted(journal.dropped) == [tasks[2].key, tasks[4].key]
        assert sorted(journal.entries()) == [tasks[i].key for i in (0, 1, 3)]


def test_damaged_file_is_set_aside_and_good_entries_carried_over(tmp_path):
    tasks = stored(tmp_path, count=40, size=2000)
    path = tmp_path / JOURNAL
    content = bytearray(path.read_bytes())
    for start in range(len(content) // 2, len(content) // 2 + 40_000):
        content[start] = 0xA5
    path.write_bytes(content)
    with Journal(tmp_path) as journal:
        kept = journal.entries()
        if journal.salvaged:
            assert list(tmp_path.glob("journal.sqlite.damaged-*"))
        assert 10 < len(kept) < 40
        for key, data in journal.data(kept).items():
            assert key == tasks[unpack(data)["number"]].key
        journal.store([(tasks[0], Outcome(tasks[0].key, "finished", pack({"number": 0})))])


def test_reading_after_a_kill_in_the_middle_of_writing(tmp_path):
    tasks = stored(tmp_path)
    script = (
        "import os, sqlite3, sys; database = sqlite3.connect(sys.argv[1], isolation_level=None)\n"
        "database.execute('pragma cache_size = 1'); database.execute('begin immediate')\n"
        "database.execute('update parts set message = ?', ('x' * 100_000,)); os.kill(os.getpid(), 9)"
    )
    subprocess.run([sys.executable, "-c", script, str(tmp_path / JOURNAL)], check=False)
    assert (tmp_path / f"{JOURNAL}-journal").stat().st_size > 0  # what SQLite rolls back from
    with Journal(tmp_path, write=False) as journal:
        assert [entry.message for entry in journal.entries().values()] == [""] * len(tasks)
    with Journal(tmp_path) as journal:
        assert not journal.dropped and len(journal.entries()) == len(tasks)


def test_file_that_is_no_database_is_set_aside(tmp_path):
    (tmp_path / JOURNAL).write_bytes(b"something else entirely" * 1000)
    with Journal(tmp_path) as journal:
        assert journal.entries() == {}
    assert list(tmp_path.glob("journal.sqlite.damaged-*"))


def test_second_run_on_a_folder_is_refused_and_told_who_has_it(tmp_path):
    script = (
        "import sys, time; from manybody.workflow.journal import Journal\n"
        "journal = Journal(sys.argv[1]); print('open', flush=True); time.sleep(60)"
    )
    holder = subprocess.Popen([sys.executable, "-c", script, str(tmp_path)], stdout=subprocess.PIPE, text=True)
    try:
        assert holder.stdout.readline() == "open\n"
        with pytest.raises(FolderInUse, match=f"process {holder.pid} on {socket.gethostname()}"):
            Journal(tmp_path)
        assert Journal(tmp_path, write=False).entries() == {}  # reading is allowed
    finally:
        holder.kill()
        holder.wait()
        holder.stdout.close()
    with Journal(tmp_path) as journal:  # the dead process's lock does not stand in the way
        assert journal.lock.previous["pid"] == holder.pid


def test_lock_of_another_host_counts_while_it_shows_life(tmp_path):
    path = tmp_path / "run.lock"
    path.write_text('{"host": "elsewhere", "pid": 1, "born": 0, "since": 0}')
    with pytest.raises(FolderInUse, match="elsewhere"):
        lock.FolderLock(path)
    os.utime(path, (time.time() - 2 * lock.SILENCE,) * 2)
    taken = lock.FolderLock(path)
    assert taken.previous["host"] == "elsewhere"
    taken.release()


def test_without_file_locks_the_recorded_process_decides(tmp_path, monkeypatch):
    monkeypatch.setattr(lock, "_lock", lambda handle: None)
    path = tmp_path / "run.lock"
    first = lock.FolderLock(path)
    with pytest.raises(FolderInUse, match=f"process {os.getpid()}"):
        lock.FolderLock(path)
    first.release()
    path.write_text(f'{{"host": "{socket.gethostname()}", "pid": {os.getpid()}, "born": 1.0, "since": 0}}')
    lock.FolderLock(path).release()  # the number has passed to another process since


def test_removed_folder_is_noticed(tmp_path):
    folder = tmp_path / "out"
    folder.mkdir()
    task = fake_task(1)
    journal = Journal(folder)
    shutil.rmtree(folder)
    with pytest.raises(JournalError, match="has been removed"):
        journal.store([(task, Outcome(task.key, "finished", b"x"))])
    journal.close()


def test_read_only_file_stops_with_a_message_and_keeps_what_was_there(tmp_path):
    tasks = stored(tmp_path)
    with Journal(tmp_path) as journal:
        journal._database.execute("pragma query_only = on")  # what SQLite does on a file system turned read-only
        with pytest.raises(JournalError, match=r"cannot be written any more.*run the same command again"):
            journal.store([(fake_task(9), Outcome("quantum-9", "finished", b"x"))])
    with Journal(tmp_path) as journal:
        assert len(journal.entries()) == len(tasks)


def test_full_disk_stops_with_a_message_and_keeps_what_was_there(tmp_path):
    """A limit on the size of files stands for the full disk."""
    script = (
        "import resource, sys; from manybody.workflow.journal import Journal, JournalError\n"
        "from manybody.workflow.tasks import Outcome, Task\n"
        "resource.setrlimit(resource.RLIMIT_FSIZE, (400_000, 400_000))\n"
        "journal = Journal(sys.argv[1]); n = 0\n"
        "try:\n"
        "    while True:\n"
        "        outcome = Outcome(str(n), 'finished', bytes(20_000))\n"
        "        journal.store([(Task(str(n), 'exact', 'x'), outcome)]); n += 1\n"
        "except JournalError as error:\n"
        "    print(n, error)\n"
    )
    if not hasattr(resource, "RLIMIT_FSIZE"):
        pytest.skip("this system cannot limit the size of files")
    done = subprocess.run([sys.executable, "-c", script, str(tmp_path)], capture_output=True, text=True, timeout=60)
    count, message = done.stdout.split(" ", 1)
    assert done.returncode == 0, done.stderr
    assert "run the same command again" in message
    with Journal(tmp_path) as journal:
        assert len(journal.entries()) == int(count) > 5
        assert not journal.dropped and not journal.salvaged


def test_states_are_replaced_checked_and_dropped(tmp_path):
    state = np.random.default_rng(1).bytes(3_000_000)
    with Journal(tmp_path) as journal:
        assert journal.state("a") is None
        journal.store_state("a", b"first")
        journal.store_state("a", state)
        journal.store_state("b", b"other")
        assert journal.state("a") == state
    with sqlite3.connect(tmp_path / "states.sqlite") as database:
        database.execute("update states set data = ? where key = 'b'", (b"torn",))
    database.close()
    with Journal(tmp_path) as journal:
        assert journal.state("a") == state
        assert journal.state("b") is None
        journal.drop_states(["a", "b"])
    assert not (tmp_path / "states.sqlite").exists()


def test_journal_in_memory_leaves_nothing(tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    with Journal(None) as journal:
        journal.store([(fake_task(1), Outcome("quantum-1", "finished", b"x"))])
        journal.store_state("quantum-1", b"state")
        assert journal.data(["quantum-1"]) == {"quantum-1": b"x"}
        assert journal.state("quantum-1") == b"state"
    assert list(tmp_path.iterdir()) == []


plain = st.none() | st.booleans() | st.integers(-(2**53), 2**53) | st.floats() | st.text(max_size=20)
arrays = st.sampled_from([np.float64, np.int32, np.complex128, np.bool_]).flatmap(
    lambda dtype: st.lists(st.integers(0, 3), max_size=3).map(lambda shape: np.ones(shape, dtype))
)
values = st.recursive(plain | arrays, lambda inner: st.lists(inner, max_size=3), max_leaves=6)


def same(a, b):
    if isinstance(a, np.ndarray):
        return isinstance(b, np.ndarray) and a.dtype == b.dtype and a.shape == b.shape and a.tobytes() == b.tobytes()
    if isinstance(a, list):
        return isinstance(b, list) and len(a) == len(b) and all(map(same, a, b))
    return type(a) is type(b) and (a == b or (a != a and b != b))


@given(st.dictionaries(st.text(max_size=8), values, max_size=5))
def test_results_survive_packing_exactly(result):
    back = unpack(pack(result))
    assert back.keys() == result.keys()
    assert all(same(result[name], back[name]) for name in result)


@given(st.data())
def test_cut_results_are_never_read(data):
    packed = pack({"energy": -1.5, "array": np.arange(12.0).reshape(3, 4), "text": "é"})
    length = data.draw(st.integers(0, len(packed) - 1))
    with pytest.raises(EncodingError):
        unpack(packed[:length])


def test_objects_are_refused_by_name():
    with pytest.raises(TypeError, match=r"result\.state"):
        pack({"state": object()})
    with pytest.raises(TypeError, match=r"result\.array"):
        pack({"array": np.array([object()])})
