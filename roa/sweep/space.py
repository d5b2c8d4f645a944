"""Disk that a sweep needs, against what is free where it goes."""

from __future__ import annotations

import shutil
from pathlib import Path

from roa.errors import MachineError
from roa.sweep.kept import row_bytes
from roa.sweep.plan import Plan


def space_needed(plan: Plan, starts: int) -> int:
    """Return bytes for the missing starts in blocks, and for all of the samples merged."""
    return row_bytes(plan.configuration.sweep.store, plan.configuration.loop.n) * (starts + plan.samples)


def free_space(path: Path) -> int:
    """Return the bytes that are free where a path is or would be made.

    Raises
    ------
    OSError
        The file system does not answer.
    """
    path = path.absolute()
    while not path.exists() and path != path.parent:
        path = path.parent
    return shutil.disk_usage(path).free


def lacking(plan: Plan, starts: int, free: int) -> str | None:
    """Return in words what is lacking; None where there is room."""
    needed = space_needed(plan, starts)
    if needed <= free:
        return None
    return f"the sweep needs {needed / 1e9:.2f} GB of disk, {free / 1e9:.2f} GB are free"


def require_space(plan: Plan, starts: int, path: Path, again: str) -> None:
    """Refuse to begin what the disk cannot hold.

    Raises
    ------
    MachineError
        There is too little room; `again` is the line that carries on.
    """
    if words := lacking(plan, starts, free_space(path)):
        raise MachineError(f"{path}: {words}; make room, then `{again}`")
