"""One writer for a run folder: a lock that a dead process cannot keep.

The lock is the kernel's own (`flock`), so it ends with its owner, however that ended; a list of process numbers, which
are used again, was rejected. What the lock file says (host and process) is for people, and for file systems
that do not carry the lock from one host to another: there its owner shows that it lives by touching the file.
"""

from __future__ import annotations

import fcntl
import json
import os
import socket
import tempfile
import threading
from collections.abc import Iterator, Mapping
from contextlib import contextmanager, suppress
from pathlib import Path
from typing import Any

from roa.errors import UserError

# How often an owner touches the file, and after what silence another host may take the lock, s.
HEARTBEAT, SILENCE = 60.0, 900.0


@contextmanager
def locked(path: Path) -> Iterator[None]:
    """Hold the lock file while the block runs.

    Raises
    ------
    UserError
        Another process holds it, or another host may hold it.
    """
    handle = _take(path)
    ended = threading.Event()
    heart = threading.Thread(target=_beat, args=(path, ended), daemon=True)
    heart.start()
    try:
        yield
    finally:
        ended.set()
        heart.join()
        # Where the disk is gone or read-only the name stays; the kernel's lock ends with the handle all the same.
        with suppress(OSError):
            path.unlink(missing_ok=True)
        os.close(handle)


def owner(path: Path) -> dict[str, Any] | None:
    """Return the host, pid and start of the process that a lock file names; None where there is no such file."""
    try:
        return _read(path.read_bytes()) or None
    except OSError:
        return None


def lives(found: Mapping[str, Any]) -> bool | None:
    """Whether the process lives that a lock file names; None where it is on another host, which nobody can see."""
    if found.get("host") != socket.gethostname():
        return None
    pid = found.get("pid")
    if not isinstance(pid, int):
        return False
    try:
        os.kill(pid, 0)
    except ProcessLookupError:
        return False
    except PermissionError:  # somebody else's
        pass
    return not _is_zombie(pid) and found.get("started") in (None, started(pid))


def started(pid: int) -> int | None:
    """Return when a process began, in ticks since the machine did; None where the system does not say.

    With the number of the process it names a process for good: numbers are used again.
    """
    fields = _stat(pid)
    return int(fields[19]) if len(fields) > 19 else None


def _is_zombie(pid: int) -> bool:
    """Whether a process has ended and only waits for its parent to take notice."""
    return _stat(pid)[:1] == ["Z"]


def _stat(pid: int) -> list[str]:
    """Return what the system says of a process, from its state on; nothing where it says nothing."""
    try:
        # The name of the program, in parentheses, may hold anything; what counts stands behind it.
        return Path(f"/proc/{pid}/stat").read_text().rpartition(")")[2].split()
    except OSError:
        return []


def _take(path: Path) -> int:
    """Return the open file that holds the lock."""
    while True:
        handle = os.open(path, os.O_RDWR | os.O_CREAT, 0o644)
        try:
            fcntl.flock(handle, fcntl.LOCK_EX | fcntl.LOCK_NB)
            if not _is_still(path, handle):  # its last owner removed it after we had opened it
                os.close(handle)
                continue
            _refuse_other_host(path, handle)
            us = {"host": socket.gethostname(), "pid": os.getpid(), "started": started(os.getpid())}
            os.ftruncate(handle, 0)
            os.pwrite(handle, json.dumps(us).encode(), 0)
        except BlockingIOError:
            found = _read(os.pread(handle, 4096, 0))
            os.close(handle)
            raise UserError(
                f"{path.parent}: process {found.get('pid', 'unknown')} on host {found.get('host', 'unknown')} is "
                "writing to this run; wait until it ends, or give another folder"
            ) from None
        except BaseException:
            os.close(handle)
            raise
        return handle


def _is_still(path: Path, handle: int) -> bool:
    try:
        return os.path.samestat(os.stat(path), os.fstat(handle))
    except FileNotFoundError:
        return False


def _refuse_other_host(path: Path, handle: int) -> None:
    found = _read(os.pread(handle, 4096, 0))
    if not found or found.get("host") == socket.gethostname():
        return
    silent = _silence(path)
    if silent < SILENCE:
        raise UserError(
            f"{path.parent}: process {found.get('pid', 'unknown')} on host {found.get('host', 'unknown')} holds this "
            f"run and gave its last sign of life {silent:.0f} s ago; wait until it ends, or, if it is dead, try again "
            f"after {SILENCE - silent:.0f} s"
        )


def _silence(path: Path) -> float:
    """Return the age of the last sign of life, s, by the clock of the file system alone: no two hosts have the same."""
    with tempfile.NamedTemporaryFile(dir=path.parent, prefix=".now.", suffix=".aside") as now:
        return os.fstat(now.fileno()).st_mtime - path.stat().st_mtime


def _beat(path: Path, ended: threading.Event) -> None:
    while not ended.wait(HEARTBEAT):
        with suppress(OSError):
            os.utime(path)


def _read(content: bytes) -> dict[str, Any]:
    """Return what the file says of its owner; nothing where it was not written to its end."""
    try:
        found = json.loads(content)
    except ValueError:
        return {}
    return found if isinstance(found, dict) else {}
