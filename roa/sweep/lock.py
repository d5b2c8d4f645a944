"""One writer for a run folder: a lock that a dead process cannot keep.

The lock is the kernel's own (`flock`), so it ends with its owner, however that ended; a list of process numbers, which
are used again, was rejected. What the lock file says (host and process) is for people, and for file systems
that do not carry the lock from one host to another: what another host wrote is believed.
"""

from __future__ import annotations

import fcntl
import json
import os
import socket
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

from roa.errors import UserError


@contextmanager
def locked(path: Path) -> Iterator[None]:
    """Hold the lock file while the block runs.

    Raises
    ------
    UserError
        Another process holds it, or another host may hold it.
    """
    handle = _take(path)
    try:
        yield
    finally:
        path.unlink(missing_ok=True)
        os.close(handle)


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
            os.ftruncate(handle, 0)
            os.pwrite(handle, json.dumps({"host": socket.gethostname(), "pid": os.getpid()}).encode(), 0)
        except BlockingIOError:
            owner = _owner(handle)
            os.close(handle)
            raise UserError(
                f"{path.parent}: process {owner.get('pid', 'unknown')} on host {owner.get('host', 'unknown')} is "
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
    owner = _owner(handle)
    if owner and owner.get("host") != socket.gethostname():
        raise UserError(
            f"{path.parent}: process {owner.get('pid', 'unknown')} on host {owner.get('host', 'unknown')} holds this "
            f"run, and from here nobody can see whether it still lives; if it does not, remove {path} and try again"
        )


def _owner(handle: int) -> dict[str, object]:
    """Return what the file says of its owner; nothing where it was not written to its end."""
    try:
        owner = json.loads(os.pread(handle, 4096, 0))
    except ValueError:
        return {}
    return owner if isinstance(owner, dict) else {}
