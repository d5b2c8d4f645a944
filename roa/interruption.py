"""Signals outside a sweep: whatever a command is at, it ends within seconds, by one sentence and exit code 130.

A sweep catches signals itself and ends between blocks (`roa.sweep.stop`). All else is quick to do again, so it just
ends: by an exception where Python runs, and by a thread that watches where compiled code does not let Python run.
Files appear complete or not at all, so nothing can be half written.
"""

from __future__ import annotations

import os
import select
import signal
import sys
import threading
from collections.abc import Iterator
from contextlib import contextmanager, suppress
from types import FrameType

SIGNALS = (signal.SIGINT, signal.SIGTERM, signal.SIGHUP)
EXIT_CODE = 130
# What a command has to end in by itself, s; a batch system kills after ten or more.
PATIENCE = 9.0

_carry_on: list[str] = []


@contextmanager
def resumable_by(command: str) -> Iterator[None]:
    """While the block runs, an interruption ends with the line that carries on."""
    _carry_on.append(command)
    try:
        yield
    except KeyboardInterrupt:
        raise KeyboardInterrupt(sentence()) from None
    finally:
        _carry_on.pop()


def sentence() -> str:
    """What to say of an interruption now."""
    return f"interrupted; carry on with `{_carry_on[-1]}`" if _carry_on else "interrupted"


@contextmanager
def watched() -> Iterator[None]:
    """Turn a signal into KeyboardInterrupt; end the process at the second one, or where the first takes no effect.

    A signal that is ignored (as under `nohup`) stays ignored. Outside the main thread nothing is caught.
    """
    if threading.current_thread() is not threading.main_thread():
        yield
        return
    before = {number: signal.getsignal(number) for number in SIGNALS}
    caught = [number for number in SIGNALS if before[number] != signal.SIG_IGN]
    reading, writing = os.pipe()
    os.set_blocking(writing, False)
    earlier = signal.set_wakeup_fd(writing, warn_on_full_buffer=False)
    for number in caught:
        signal.signal(number, _raise)
    watcher = threading.Thread(target=_watch, args=(reading, {int(number) for number in caught}), daemon=True)
    watcher.start()
    try:
        yield
    finally:
        signal.set_wakeup_fd(earlier)
        for number in caught:
            signal.signal(number, before[number])
        os.close(writing)
        watcher.join()
        os.close(reading)


def _raise(_number: int, _frame: FrameType | None) -> None:
    raise KeyboardInterrupt()


def _watch(reading: int, caught: set[int]) -> None:
    """Read the numbers of signals as they come; end when the other end of the pipe is closed."""
    signals = 0
    while True:
        waiting = PATIENCE if signals else None
        if not select.select([reading], [], [], waiting)[0]:
            _end()
        numbers = os.read(reading, 64)
        if not numbers:
            return
        signals += sum(number in caught for number in numbers)
        if signals > 1:
            _end()


def _end() -> None:
    with suppress(OSError):
        os.write(sys.__stderr__.fileno() if sys.__stderr__ else 2, f"roa: {sentence()}\n".encode())
    os._exit(EXIT_CODE)
