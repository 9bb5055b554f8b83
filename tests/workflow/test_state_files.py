"""States kept in files by a solver travel as bytes and come back."""

import pytest

from manybody.workflow.state_files import state_files
from manybody.workflow.worker import Checkpoint, StopPart


class Channel:
    def __init__(self):
        self.states, self.stop = [], False

    def state(self, key, state):
        self.states.append(state)

    def stopping(self):
        return self.stop


def test_files_are_sent_when_new_and_restored_elsewhere():
    channel, reports = Channel(), []
    with state_files(Checkpoint("a", None, channel), reports.append) as (path, progress):
        assert not path.exists()
        progress({"sweep": 1})
        path.write_bytes(b"tensors")
        path.with_name("state.1").write_bytes(b"second cluster")
        path.with_name("state.partial").write_bytes(b"half")
        progress({"sweep": 2})
        progress({"sweep": 3})
    assert [info["sweep"] for info in reports] == [1, 2, 3]
    assert len(channel.states) == 1 and not path.parent.exists()
    with state_files(Checkpoint("a", channel.states[0], channel), reports.append) as (path, progress):
        assert path.read_bytes() == b"tensors"
        assert path.with_name("state.1").read_bytes() == b"second cluster"
        assert sorted(file.name for file in path.parent.iterdir()) == ["state", "state.1"]
        progress({})
    assert len(channel.states) == 1  # nothing new


def test_stopping_leaves_the_part_after_sending():
    channel = Channel()
    with pytest.raises(StopPart), state_files(Checkpoint("a", None, channel), dict) as (path, progress):
        path.write_bytes(b"x")
        channel.stop = True
        progress({})
    assert len(channel.states) == 1


def test_damaged_state_is_a_fresh_start():
    with state_files(Checkpoint("a", b"no state", Channel()), dict) as (path, _):
        assert not path.exists()
