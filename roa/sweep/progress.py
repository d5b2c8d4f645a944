"""Progress of a sweep: a bar on a terminal, elsewhere a plain line a minute, or nothing.

All kinds share one interface, so that who reports never asks whether anybody listens.
"""

from __future__ import annotations

import sys
import time
from collections.abc import Callable
from contextlib import suppress
from datetime import datetime, timedelta
from pathlib import Path
from typing import TYPE_CHECKING, TextIO

import numpy as np
from numpy.typing import NDArray

from roa.kernel.outcomes import Outcome
from roa.sweep.memory import peak_memory

if TYPE_CHECKING:
    from rich.progress import Progress as RichBar

# Between two plain lines, s: what a log can hold over a night.
INTERVAL = 60.0


class Progress:
    """Nothing is shown; the interface of all kinds."""

    def say(self, sentence: str) -> None:
        """Report a sentence."""

    def begin(self, done: int, total: int) -> None:
        """Start to count: `done` of `total` starts are finished already."""

    def add(self, outcomes: NDArray[np.uint8]) -> None:
        """Count newly finished starts by their outcomes, uint8 (m,)."""

    def end(self) -> None:
        """Stop to count."""


class Pace:
    """How far a sweep is and how fast; the rate counts new work alone, so that a resumed sweep does not flatter."""

    def __init__(self, done: int, total: int, clock: Callable[[], float] = time.monotonic) -> None:
        self.done = done
        self.total = total
        self._new = np.zeros(len(Outcome), dtype=np.int64)
        self._clock = clock
        self._begun = clock()

    def add(self, outcomes: NDArray[np.uint8]) -> None:
        """Count newly finished starts."""
        self.done += len(outcomes)
        self._new += np.bincount(outcomes, minlength=len(Outcome))

    def in_short(self) -> str:
        """Share done, rate and time left: what fits beside a bar."""
        share = self.done / self.total if self.total else 1.0
        return ", ".join([f"{share:6.1%}", *self._forecast()])

    def _forecast(self) -> list[str]:
        rate = self._new.sum() / max(self._clock() - self._begun, 1e-9)
        if not rate > 0:
            return []
        left = timedelta(seconds=round((self.total - self.done) / rate))
        return [f"{rate:,.0f} a second", f"{left} left"]

    def sentence(self) -> str:
        """Done and total, rate, time left, outcomes of the new starts, memory."""
        share = self.done / self.total if self.total else 1.0
        parts = [f"{self.done:,} of {self.total:,} starts ({share:.1%})"]
        if forecast := self._forecast():
            parts.append(", ".join(forecast))
        new = ", ".join(f"{outcome.word} {self._new[outcome]:,}" for outcome in Outcome if self._new[outcome])
        if new:
            parts.append(f"new: {new}")
        parts.append(f"peak memory {peak_memory() / 1e9:.2f} GB")
        return "; ".join(parts)


class Lines(Progress):
    """A plain line a minute, with the time, to a stream that only grows."""

    def __init__(self, stream: TextIO, clock: Callable[[], float] = time.monotonic) -> None:
        self._stream = stream
        self._clock = clock
        self._pace: Pace | None = None
        self._last = 0.0

    def say(self, sentence: str) -> None:
        """Write the sentence at once."""
        # A terminal that went away, or a full disk, must not end a sweep: the store says what matters.
        with suppress(OSError):
            self._stream.write(f"{datetime.now():%Y-%m-%d %H:%M:%S} {sentence}\n")
            self._stream.flush()

    def begin(self, done: int, total: int) -> None:
        """Start to count."""
        self._pace = Pace(done, total, self._clock)
        self._last = self._clock()

    def add(self, outcomes: NDArray[np.uint8]) -> None:
        """Count, and write a line if the last one is a minute old."""
        if self._pace is None:
            return
        self._pace.add(outcomes)
        if self._clock() - self._last >= INTERVAL:
            self._last = self._clock()
            self.say(self._pace.sentence())

    def end(self) -> None:
        """Write the last state."""
        if self._pace is not None:
            self.say(self._pace.sentence())
        self._pace = None


class Log(Lines):
    """Plain lines at the end of a file, which is opened for every line: it may not exist yet, or move."""

    def __init__(self, path: Path) -> None:
        super().__init__(sys.stderr)
        self._path = path

    def say(self, sentence: str) -> None:
        """Append the sentence to the file."""
        with suppress(OSError), self._path.open("a", encoding="utf-8") as self._stream:
            super().say(sentence)


class Bar(Progress):
    """One line on a terminal that is drawn again and again."""

    def __init__(self) -> None:
        self._bar: RichBar | None = None
        self._pace: Pace | None = None

    def say(self, sentence: str) -> None:
        """Print the sentence above the bar."""
        with suppress(OSError):
            if self._bar is not None:
                self._bar.console.print(sentence, markup=False, highlight=False)
            else:
                print(sentence, file=sys.stderr, flush=True)

    def begin(self, done: int, total: int) -> None:
        """Draw the bar."""
        from rich.console import Console
        from rich.progress import BarColumn, TextColumn
        from rich.progress import Progress as RichBar

        self._pace = Pace(done, total)
        self._bar = RichBar(
            BarColumn(bar_width=20),
            TextColumn("{task.description}", markup=False),
            console=Console(file=sys.stderr),
            transient=True,
        )
        self._bar.add_task("", total=total, completed=done)
        with suppress(OSError):
            self._bar.start()

    def add(self, outcomes: NDArray[np.uint8]) -> None:
        """Count and redraw."""
        if self._bar is None or self._pace is None:
            return
        self._pace.add(outcomes)
        with suppress(OSError):
            self._bar.update(self._bar.task_ids[0], completed=self._pace.done, description=self._pace.in_short())

    def end(self) -> None:
        """Remove the bar and leave its last sentence."""
        if self._bar is None or self._pace is None:
            return
        bar, self._bar = self._bar, None
        with suppress(OSError):
            bar.stop()
        self.say(self._pace.sentence())


class Both(Progress):
    """Two at once: the screen and the log."""

    def __init__(self, one: Progress, other: Progress) -> None:
        self._each = (one, other)

    def say(self, sentence: str) -> None:
        """Report a sentence to both."""
        for progress in self._each:
            progress.say(sentence)

    def begin(self, done: int, total: int) -> None:
        """Start to count in both."""
        for progress in self._each:
            progress.begin(done, total)

    def add(self, outcomes: NDArray[np.uint8]) -> None:
        """Count in both."""
        for progress in self._each:
            progress.add(outcomes)

    def end(self) -> None:
        """Stop to count in both."""
        for progress in self._each:
            progress.end()


def on_standard_error(quiet: bool) -> Progress:
    """Return what suits standard error: a bar on a terminal, else plain lines; nothing where `quiet`."""
    if quiet:
        return Progress()
    return Bar() if sys.stderr.isatty() else Lines(sys.stderr)
