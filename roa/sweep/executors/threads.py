"""Threads of this process, by joblib: the kernel releases the interpreter lock."""

from __future__ import annotations

import threading
from collections import deque
from collections.abc import Callable, Iterable, Iterator

import joblib

from roa.sweep.block import Block
from roa.sweep.executors import Result, Task, attempt, never

# Blocks handed out for each worker: one at work and one waiting, so that no worker idles.
AHEAD = 2


def cpu_count() -> int:
    """Return how many processors this process may use: affinity and container quota count."""
    return int(joblib.cpu_count())


def run(
    task: Task, blocks: Iterable[Block], jobs: int, given_up: Callable[[], bool] = never
) -> Iterator[tuple[Block, Result]]:
    """Yield every block with its result, as they finish."""
    # joblib hands out a new block whenever one ends, whether or not the caller keeps up: a slow disk would pile
    # results up in memory. So a block starts only when the results that wait for the caller are few.
    room = threading.Semaphore(AHEAD * jobs)
    closed = threading.Event()

    def until_closed() -> Iterator[Block]:
        for block in blocks:
            if closed.is_set():
                return
            yield block

    def work(block: Block) -> tuple[Block, Result]:
        room.acquire()
        if closed.is_set():
            room.release()  # hands the way out on to the next block that waits
            return block, None
        return block, attempt(task, block)

    workers = joblib.Parallel(
        n_jobs=jobs,
        prefer="threads",
        return_as="generator_unordered",
        batch_size=1,  # joblib's own batching waits for quick blocks to add up
        pre_dispatch=AHEAD * jobs,
    )
    results = workers(joblib.delayed(work)(block) for block in until_closed())
    try:
        for finished in results:
            yield finished
            room.release()
    finally:
        closed.set()
        room.release()
        deque(results, maxlen=0)  # what is still at work; closing joblib's generator instead warns of lost results
