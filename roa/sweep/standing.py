"""The standing of a sweep, written down every few seconds for whoever asks from another shell.

It is a file of its own beside the data, so that asking disturbs nobody, and nothing but `roa status` reads it.
"""

from __future__ import annotations

import json
import os
import socket
import time
from collections.abc import Callable
from contextlib import suppress
from datetime import UTC, datetime
from pathlib import Path
from types import TracebackType

import numpy as np
from numpy.typing import NDArray

from roa.errors import Interrupted, MachineError
from roa.sweep.lock import started
from roa.sweep.memory import memory_now, peak_memory
from roa.sweep.progress import Progress
from roa.sweep.run_folder import write_atomically
from roa.sweep.tally import Tally

# Between two states on disk, s.
INTERVAL = 5.0


class Standing(Progress):
    """Writes `status.json`; as a context it says at its end how the sweep ended.

    Parameters
    ----------
    path : of the file
    tally : of all finished samples; kept up by whoever stores them
    command : as it was given
    """

    def __init__(
        self, path: Path, tally: Tally, samples: int, command: str, clock: Callable[[], float] = time.monotonic
    ) -> None:
        self._path, self._tally, self._clock = path, tally, clock
        self._samples, self._command = samples, command
        self._state, self._phase, self._last = "running", "looking through what is stored", ""
        self._done, self._new, self._begun, self._seconds = 0, 0, clock(), 0.0
        self._began = _now()
        self._written = -np.inf

    def __enter__(self) -> Standing:
        self._write()
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, _trace: TracebackType | None
    ) -> None:
        if kind is not None:
            self._state = "stopped" if issubclass(kind, (Interrupted, KeyboardInterrupt)) else "failed"
            self._last = str(error)
        self._write()

    def ends(self, state: str) -> None:
        """Say that the sweep is done, or stopped for want of time."""
        self._state = state

    def enters(self, phase: str) -> None:
        """Say what is being done."""
        self._phase = phase
        self._write()

    def say(self, sentence: str) -> None:
        """Keep the last sentence."""
        self._last = sentence

    def begin(self, done: int, total: int) -> None:
        """Start to count."""
        self._done, self._new, self._samples, self._begun = done, 0, total, self._clock()
        self.enters("sweeping")

    def add(self, outcomes: NDArray[np.uint8]) -> None:
        """Count, and write where the file is a few seconds old."""
        self._done += len(outcomes)
        self._new += len(outcomes)
        self._seconds = self._clock() - self._begun
        if self._clock() - self._written >= INTERVAL:
            self._write()

    def end(self) -> None:
        """Write the last state of the counts."""
        self._write()

    def _write(self) -> None:
        self._written = self._clock()
        content = {
            "state": self._state,
            "phase": self._phase,
            "host": socket.gethostname(),
            "pid": os.getpid(),
            "started": started(os.getpid()),
            "command": self._command,
            "began": self._began,
            "updated": _now(),
            "samples": self._samples,
            "done": self._done,
            "new": self._new,
            "seconds": self._seconds,
            "counts": self._tally.by_word(),
            "memory": {"now": memory_now(), "peak": peak_memory()},
            "last": self._last,
        }
        # A folder that has vanished is not made anew, only to hold this.
        if not self._path.parent.is_dir():
            return
        # Where the disk is full the sweep itself will say so; a lost state must not end it.
        with suppress(MachineError):
            write_atomically(self._path, (json.dumps(content, indent=1, ensure_ascii=False) + "\n").encode())


def _now() -> str:
    return datetime.now(UTC).isoformat(timespec="seconds")
