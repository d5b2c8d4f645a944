"""Executors, one a file: how blocks are spread over workers.

An executor is a function `run(task, blocks, jobs, given_up)` that yields (block, result) in the order in which they
finish:

1. `blocks` is taken from step by step, so that its end (a request to stop) ends the work early;
2. a block whose task raises does not end the others: the exception takes the place of its result;
3. at most a few blocks a worker wait for the caller, however slow the caller is;
4. closing the generator early leaves no worker behind;
5. a worker that dies costs nothing, and a block that ends two of them has `WorkersLost` for its result;
6. once `given_up()` is true, what runs outside this process is ended; what runs within it looks for itself.
"""

from __future__ import annotations

import importlib
import pkgutil
from collections.abc import Callable, Iterable, Iterator
from typing import Any, Protocol

from roa.errors import UserError
from roa.sweep.block import Block

Task = Callable[[Block], Any]
# What the task returned, or the exception in its place.
Result = Any


class Executor(Protocol):
    """The contract above."""

    def __call__(
        self, task: Task, blocks: Iterable[Block], jobs: int, given_up: Callable[[], bool] = ...
    ) -> Iterator[tuple[Block, Result]]:
        """Yield every block with its result as it finishes."""
        ...


class WorkersLost(Exception):
    """A block ended two workers that ran it, the second one alone: it is not tried again."""


def available() -> list[str]:
    """Return the names of the executors, sorted."""
    return sorted(module.name for module in pkgutil.iter_modules(__path__))


def never() -> bool:
    """Return False: nobody gives up."""
    return False


def load(name: str) -> Executor:
    """Return the executor called `name`; only its file is imported.

    Raises
    ------
    UserError
        There is no such executor, or a package that it needs is missing.
    """
    if name not in available():
        raise UserError(f"--executor {name}: no such executor; available: {', '.join(available())}")
    executor: Executor = importlib.import_module(f"{__name__}.{name}").run
    return executor


def attempt(task: Task, block: Block) -> Result:
    """Return the task's result, or the exception that it raised."""
    try:
        return task(block)
    except Exception as error:
        return error
