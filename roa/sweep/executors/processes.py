"""Worker processes on this machine, by joblib's loky: for what cannot release the interpreter lock."""

from __future__ import annotations

import os
import signal
import warnings
from collections.abc import Callable, Iterable, Iterator
from concurrent.futures import BrokenExecutor
from contextlib import suppress
from typing import Any

import cloudpickle
from joblib.externals.loky import ProcessPoolExecutor

from roa.sweep.block import Block
from roa.sweep.executors import Result, Task, never
from roa.sweep.window import Future, windowed

# One level of parallelism: a worker is one thread, whatever its libraries would like.
SINGLE_THREADED = {
    f"{name}_NUM_THREADS": "1" for name in ("OMP", "OPENBLAS", "MKL", "BLIS", "VECLIB", "NUMEXPR", "NUMBA")
}

_task: Task | None = None


def run(
    task: Task, blocks: Iterable[Block], jobs: int, given_up: Callable[[], bool] = never
) -> Iterator[tuple[Block, Result]]:
    """Yield every block with its result, as they finish."""
    pool = _Processes(task, jobs)
    whole = False
    try:
        yield from windowed(pool, blocks, jobs, given_up)
        whole = not given_up()
    finally:
        pool.end(at_once=not whole)


class _Processes:
    """A pool that is made again when a worker died, since loky's then takes no more work."""

    def __init__(self, task: Task, jobs: int) -> None:
        self._content = cloudpickle.dumps(task)
        self._jobs = jobs
        self._pool = self._make()

    def _make(self) -> Any:
        return ProcessPoolExecutor(self._jobs, initializer=_begin, initargs=(self._content,), env=SINGLE_THREADED)

    def submit(self, block: Block) -> Future:
        future: Future = self._pool.submit(_work, block)
        return future

    def is_loss(self, error: BaseException) -> bool:
        return isinstance(error, BrokenExecutor)

    def renew(self) -> None:
        self.end(at_once=True)
        self._pool = self._make()

    def end(self, at_once: bool) -> None:
        if at_once:
            # Not by loky's own way, whose thread may stumble over work that was just handed out.
            for process in list((self._pool._processes or {}).values()):
                with suppress(ProcessLookupError):
                    os.kill(process.pid, signal.SIGKILL)
        with warnings.catch_warnings():
            # loky replaces a worker that grew, and says so in a warning that reads like a fault.
            warnings.simplefilter("ignore")
            self._pool.shutdown(wait=True)


def _begin(content: bytes) -> None:
    """Make a worker ready: the task comes once, and Ctrl-C, which reaches the whole group, is for the parent."""
    global _task
    for number in (signal.SIGINT, signal.SIGHUP):
        signal.signal(number, signal.SIG_IGN)
    _task = cloudpickle.loads(content)


def _work(block: Block) -> Any:
    assert _task is not None
    return _task(block)
