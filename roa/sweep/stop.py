"""A request to stop: a signal asks for it, the sweep sees it between blocks."""

from __future__ import annotations

import signal
import threading
from collections.abc import Iterator
from contextlib import contextmanager
from types import FrameType

# Interrupt from the keyboard, end of a batch job, loss of the terminal.
SIGNALS = (signal.SIGINT, signal.SIGTERM, signal.SIGHUP)


class StopRequest:
    """Whether somebody asked to stop; nothing is saved or ended by the request itself."""

    def __init__(self) -> None:
        self.made = False

    def make(self) -> None:
        """Ask to stop."""
        self.made = True


@contextmanager
def stop_on_signals() -> Iterator[StopRequest]:
    """Turn the first signal into a request to stop; the second ends the process at once, by the system's own rule.

    A signal that is ignored (as under `nohup`) stays ignored. Outside the main thread no signal can be caught.
    """
    request = StopRequest()
    if threading.current_thread() is not threading.main_thread():
        yield request
        return
    before = {number: signal.getsignal(number) for number in SIGNALS}
    caught = [number for number in SIGNALS if before[number] != signal.SIG_IGN]

    def handle(_number: int, _frame: FrameType | None) -> None:
        request.make()
        for number in caught:
            signal.signal(number, signal.SIG_DFL)

    for number in caught:
        signal.signal(number, handle)
    try:
        yield request
    finally:
        for number in caught:
            signal.signal(number, before[number])
