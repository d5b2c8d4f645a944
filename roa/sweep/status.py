"""How far a sweep is, read from its folder alone: nothing is locked, and the writer does not notice."""

from __future__ import annotations

import json
import re
from dataclasses import dataclass
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

from roa.sweep import designs, lock, store
from roa.sweep.header import Header
from roa.sweep.run_folder import RunFolder

BLOCK = re.compile(r"block-(\d{9})\.h5")


@dataclass(frozen=True)
class Status:
    """How far a sweep is.

    Attributes
    ----------
    state : "running", "stopped" (by a signal, or out of time), "failed", "dead" (its process vanished) or "done"
    phase : what a running sweep is at
    done, samples : finished starts, and how many there shall be
    rate : new starts a second of the last launch, None where nothing is known
    left : s, None where nothing is known or nothing runs
    counts : outcome word -> finished starts by replicate; quick blocks first, so no fair sample before the end
    memory : bytes of the process now, and at most so far; None where it is gone
    owner : host and process that hold the run; None where nobody does
    updated, age : when the writer last said something (ISO 8601), and s since then by this machine's clock
    last : its last sentence
    header : Header
    """

    state: str
    phase: str
    done: int
    samples: int
    rate: float | None
    left: float | None
    counts: dict[str, list[int]]
    memory: dict[str, int] | None
    owner: dict[str, Any] | None
    updated: str | None
    age: float | None
    last: str
    header: Header


def read_status(folder: RunFolder) -> Status:
    """Read how far the sweep in a folder is.

    Raises
    ------
    MachineError
        What the folder says of itself is damaged.
    """
    header = Header.read(folder.plan)
    said = _said(folder.status)
    owner = lock.owner(folder.lock)
    alive = owner is not None and lock.lives(owner) is not False
    done, samples = _done(folder, header, said)
    state = _state(said, alive, done, samples)
    running = state == "running"
    new, seconds = said.get("new", 0), said.get("seconds", 0.0)
    rate = new / seconds if new and seconds > 0 else None
    left = (samples - done) / rate if rate and running else None
    updated = said.get("updated")
    age = None if updated is None else (datetime.now(UTC) - datetime.fromisoformat(updated)).total_seconds()
    return Status(
        state=state,
        phase=said.get("phase", "") if running else "",
        done=done,
        samples=samples,
        rate=rate,
        left=left,
        counts=said.get("counts", {}),
        memory=said.get("memory") if running else None,
        owner=owner if running else None,
        updated=updated,
        age=age,
        last=said.get("last", ""),
        header=header,
    )


def _said(path: Path) -> dict[str, Any]:
    """Return what the writer last said; nothing where it said nothing that can be read."""
    try:
        said = json.loads(path.read_bytes())
    except (OSError, ValueError):
        return {}
    return said if isinstance(said, dict) else {}


def _state(said: dict[str, Any], alive: bool, done: int, samples: int) -> str:
    if alive and said.get("state", "running") == "running":
        return "running"
    if done >= samples and said.get("state") != "running":
        return "done"
    return str(said.get("state")) if said.get("state") in ("stopped", "failed") else "dead"


def _done(folder: RunFolder, header: Header, said: dict[str, Any]) -> tuple[int, int]:
    """Return how many starts are stored, and how many there shall be.

    Stored are those whose block has a file, since a file that exists is complete.
    """
    merged = 0
    if folder.sweep.exists():
        whole = store.read_header(folder.sweep)
        merged = whole.samples
        if whole.asked == header.asked:  # a sweep in rounds may be done with fewer starts than it was granted
            return merged, merged
    if designs.load(header.design).in_rounds:  # the names of their blocks alone say too little
        return max(merged, int(said.get("done", 0))), header.samples
    done = merged
    for path in folder.blocks.glob("block-*.h5"):
        if match := BLOCK.fullmatch(path.name):
            first = int(match[1]) * header.block_size
            stop = min(first + header.block_size, header.samples)
            done += max(stop - max(first, merged), 0)
    return done, header.samples
