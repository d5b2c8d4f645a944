"""One block after the other in the calling thread."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Iterator

from roa.sweep.block import Block
from roa.sweep.executors import Result, Task, attempt, never


def run(
    task: Task, blocks: Iterable[Block], jobs: int = 1, given_up: Callable[[], bool] = never
) -> Iterator[tuple[Block, Result]]:
    """Yield every block with its result, in the given order."""
    for block in blocks:
        yield block, attempt(task, block)
