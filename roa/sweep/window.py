"""Blocks on workers that may die: a few are handed out ahead, and a block whose worker died is run once more, alone.

What executors with workers outside this process have in common; each brings a `Pool` of its own.
"""

from __future__ import annotations

import queue
from collections.abc import Callable, Iterable, Iterator
from typing import Any, Protocol

from roa.sweep.block import Block
from roa.sweep.executors import Result, WorkersLost

# Blocks handed out for each worker: one at work and one waiting, so that no worker idles.
AHEAD = 2
# How often somebody looks whether to give up, s.
POLL = 0.2


class Future(Protocol):
    """Work that was handed out, as the standard library has it."""

    def add_done_callback(self, fn: Callable[[Any], Any]) -> Any:
        """Call when it is done."""
        ...

    def result(self) -> Any:
        """Return the result, or raise what the task or the pool raised."""
        ...


class Pool(Protocol):
    """Workers."""

    def submit(self, block: Block) -> Future:
        """Hand a block out."""
        ...

    def is_loss(self, error: BaseException) -> bool:
        """Whether the error says that a worker died, rather than that the task raised it."""
        ...

    def renew(self) -> None:
        """See to it that there are workers again."""
        ...


class GivenUp(Exception):
    """Nobody waits for the running blocks any more."""


def windowed(
    pool: Pool, blocks: Iterable[Block], jobs: int, given_up: Callable[[], bool]
) -> Iterator[tuple[Block, Result]]:
    """Yield every block with its result, as they finish; end early where `given_up` becomes true."""
    window = _Window(pool, given_up)
    try:
        for block in blocks:
            window.hand_out(block)
            while window.running and (len(window.running) >= AHEAD * jobs or window.suspects):
                yield from window.next()
            yield from window.alone()
        while window.running:
            yield from window.next()
        yield from window.alone()
    except GivenUp:
        return


class _Window:
    """What is handed out.

    Attributes
    ----------
    running : future -> block
    suspects : blocks that were handed out when a worker died: one of them may have been the reason
    """

    def __init__(self, pool: Pool, given_up: Callable[[], bool]) -> None:
        self._pool, self._given_up = pool, given_up
        self._done: queue.SimpleQueue[Future] = queue.SimpleQueue()
        self.running: dict[Any, Block] = {}
        self.suspects: list[Block] = []

    def hand_out(self, block: Block) -> None:
        """Hand a block out; it is suspect at once where the pool is broken."""
        try:
            future = self._pool.submit(block)
        except Exception as error:
            if not self._pool.is_loss(error):
                raise
            self.suspects.append(block)
            return
        self.running[future] = block
        future.add_done_callback(self._done.put)

    def next(self) -> Iterator[tuple[Block, Result]]:
        """Wait for the next future; yield its block with the result, if its worker lived to its end."""
        block, result = self._wait()
        if isinstance(result, Exception) and self._pool.is_loss(result):
            self.suspects.append(block)
        else:
            yield block, result

    def alone(self) -> Iterator[tuple[Block, Result]]:
        """Run the suspects one by one, and yield the one that ends its worker again with `WorkersLost`."""
        if not self.suspects:
            return
        suspects, self.suspects = self.suspects, []
        self._pool.renew()
        for block in suspects:
            self.hand_out(block)
            found = list(self.next()) if self.running else []
            if not found:
                self.suspects.clear()
                self._pool.renew()
                found = [(block, WorkersLost("it ended two workers that ran it, the second time alone"))]
            yield from found

    def _wait(self) -> tuple[Block, Result]:
        while True:
            if self._given_up():
                raise GivenUp
            try:
                future = self._done.get(timeout=POLL)
            except queue.Empty:
                continue
            block = self.running.pop(future)
            try:
                return block, future.result()
            except Exception as error:
                return block, error
