"""A request to stop: a signal or the end of the granted time asks for it, the sweep sees it between kernel calls."""

from __future__ import annotations

import signal
import threading
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from types import FrameType

# Interrupt from the keyboard, end of a batch job, loss of the terminal.
SIGNALS = (signal.SIGINT, signal.SIGTERM, signal.SIGHUP)
# What a running block has to end in, s; then it is given up between two kernel calls. A batch system that has asked
# waits about this long before it kills.
GRACE = 5.0


class StopRequest:
    """Whether somebody asked to stop; nothing is saved or ended by the request itself.

    Parameters
    ----------
    deadline : by `clock`, s; after it the sweep has no more time
    clock : a monotonic one, because the time of day may be set back
    """

    def __init__(self, deadline: float | None = None, clock: Callable[[], float] = time.monotonic) -> None:
        self.signalled = False
        self._clock = clock
        self._deadline = deadline
        self._since: float | None = None

    def make(self) -> None:
        """Ask to stop."""
        self.signalled = True

    @property
    def made(self) -> bool:
        """Whether no new block may begin."""
        if not self.signalled and (self._deadline is None or self._clock() < self._deadline):
            return False
        if self._since is None:
            self._since = self._clock()
        return True

    @property
    def impatient(self) -> bool:
        """Whether running blocks have had their time to end."""
        return self.made and self._since is not None and self._clock() - self._since > GRACE


@contextmanager
def stop_on_signals(deadline: float | None = None) -> Iterator[StopRequest]:
    """Turn the first signal into a request to stop; the second ends the process at once, by the system's own rule.

    A signal that is ignored (as under `nohup`) stays ignored. Outside the main thread no signal can be caught.
    """
    request = StopRequest(deadline)
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
