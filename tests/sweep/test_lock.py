"""One writer: a live owner is respected, a dead one is not, one on another host is believed."""

import json
import os
import signal
import socket
import time

import pytest

from roa.errors import UserError
from roa.sweep.lock import SILENCE, lives, locked
from roa.sweep.lock import owner as owner_of


def hold(path, held):
    with locked(path):
        held.set()
        time.sleep(60)


@pytest.fixture
def owner(tmp_path, spawner):
    """Another process that holds the lock."""
    held = spawner.Event()
    child = spawner.Process(target=hold, args=(tmp_path / "lock", held))
    child.start()
    assert held.wait(60)
    yield child
    child.kill()
    child.join()


def test_is_gone_afterwards(tmp_path):
    with locked(tmp_path / "lock"):
        found = owner_of(tmp_path / "lock")
        assert (found["host"], found["pid"]) == (socket.gethostname(), os.getpid())
        assert lives(found)
    assert list(tmp_path.iterdir()) == []


def test_is_gone_after_an_error(tmp_path):
    with pytest.raises(ZeroDivisionError), locked(tmp_path / "lock"):
        1 / 0  # noqa: B018
    assert list(tmp_path.iterdir()) == []


def test_live_owner_is_named(tmp_path, owner):
    with pytest.raises(UserError, match=f"process {owner.pid} on host"), locked(tmp_path / "lock"):
        pass
    assert (tmp_path / "lock").exists()


def test_same_process_cannot_hold_it_twice(tmp_path):
    with locked(tmp_path / "lock"), pytest.raises(UserError), locked(tmp_path / "lock"):
        pass


def test_killed_owner_holds_nothing(tmp_path, owner):
    os.kill(owner.pid, signal.SIGKILL)
    owner.join()
    assert (tmp_path / "lock").exists()
    with locked(tmp_path / "lock"):
        pass


def test_process_number_in_use_by_another_does_not_count(tmp_path):
    (tmp_path / "lock").write_text(json.dumps({"host": socket.gethostname(), "pid": os.getppid()}))
    with locked(tmp_path / "lock"):
        pass


def test_half_written_lock_of_a_dead_owner(tmp_path):
    (tmp_path / "lock").write_text('{"ho')
    with locked(tmp_path / "lock"):
        pass


def test_other_host_is_believed_while_it_gives_signs_of_life(tmp_path):
    (tmp_path / "lock").write_text(json.dumps({"host": "elsewhere", "pid": 12}))
    refused = r"process 12 on host elsewhere holds this run and gave its last sign of life \d+ s ago"
    with pytest.raises(UserError, match=refused), locked(tmp_path / "lock"):
        pass
    assert [path.name for path in tmp_path.iterdir()] == ["lock"]
    assert lives(owner_of(tmp_path / "lock")) is None


def test_other_host_that_fell_silent_holds_nothing(tmp_path):
    path = tmp_path / "lock"
    path.write_text(json.dumps({"host": "elsewhere", "pid": 12}))
    os.utime(path, (0, path.stat().st_mtime - SILENCE - 5))
    with locked(path):
        assert owner_of(path)["pid"] == os.getpid()


def test_owner_gives_signs_of_life(tmp_path, monkeypatch):
    monkeypatch.setattr("roa.sweep.lock.HEARTBEAT", 0.01)
    path = tmp_path / "lock"
    with locked(path):
        os.utime(path, (0, 0))
        for _ in range(500):
            if path.stat().st_mtime > 0:
                break
            time.sleep(0.01)
        assert path.stat().st_mtime > 0


def test_dead_owner(tmp_path, owner):
    found = owner_of(tmp_path / "lock")
    assert lives(found)
    assert not lives(found | {"started": 1})  # its number is used again
    os.kill(owner.pid, signal.SIGKILL)
    owner.join()
    assert not lives(found)
    assert not lives({"host": socket.gethostname(), "pid": "12"})
