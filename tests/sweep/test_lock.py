"""One writer: a live owner is respected, a dead one is not, one on another host is believed."""

import json
import os
import signal
import socket
import time

import pytest

from roa.errors import UserError
from roa.sweep.lock import locked


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
        assert json.loads((tmp_path / "lock").read_text()) == {"host": socket.gethostname(), "pid": os.getpid()}
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


def test_other_host_is_believed_and_the_cure_named(tmp_path):
    (tmp_path / "lock").write_text(json.dumps({"host": "elsewhere", "pid": 12}))
    with pytest.raises(UserError, match=r"process 12 on host elsewhere.*remove .*lock"), locked(tmp_path / "lock"):
        pass
    assert (tmp_path / "lock").exists()
