"""The workers of a sweep: which executor, how many, and what happens to a block that fails."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from functools import partial

from roa.kernel.trajectories import Trajectories
from roa.sweep import executors
from roa.sweep.block import Block
from roa.sweep.means import Means
from roa.sweep.simulation import Simulation
from roa.sweep.stop import StopRequest

# Executors whose workers are this process.
WITHIN = ("serial", "threads")


class Crew:
    """Workers of one kind.

    Attributes
    ----------
    words : how many of what kind
    failed : a sentence for each block that failed whenever it was tried
    """

    def __init__(self, name: str, jobs: int) -> None:
        self._name = name
        self._jobs = jobs
        self.words = f"{jobs} at a time" + ("" if name in WITHIN else f" on {name}")
        self.failed: list[str] = []

    @classmethod
    def of(cls, means: Means, blocks: int) -> Crew:
        """Return the crew for so many blocks."""
        jobs = min(means.jobs or _processors(), blocks)
        return cls(means.executor or ("serial" if jobs == 1 else "threads"), jobs)

    def run(
        self, simulation: Simulation, blocks: list[Block], stop: StopRequest, say: Callable[[str], None]
    ) -> Iterator[tuple[Block, Trajectories]]:
        """Yield the blocks with their rows as they finish, until all are done or a stop is asked for."""
        troubled = []
        for block, result in self._results(simulation, blocks, stop, self._jobs):
            if isinstance(result, Trajectories):
                yield block, result
            elif isinstance(result, executors.WorkersLost):
                self._give_up(block, result, say)
            elif result is not None:
                troubled.append(block)
        for block in troubled:  # perhaps for want of memory: once more, alone
            if stop.made:
                return
            say(f"{block} failed and is tried again alone")
            for _, result in self._results(simulation, [block], stop, 1):
                if isinstance(result, Trajectories):
                    yield block, result
                elif result is not None:
                    self._give_up(block, result, say)

    def _results(
        self, simulation: Simulation, blocks: list[Block], stop: StopRequest, jobs: int
    ) -> Iterator[tuple[Block, executors.Result]]:
        run = executors.load(self._name)
        if self._name in WITHIN:
            yield from run(partial(_unless, stop, simulation), _until(stop, blocks), jobs)
            return
        for block, result in run(simulation.elsewhere, _until(stop, blocks), jobs, lambda: stop.impatient):
            yield block, simulation.received(block, result) if isinstance(result, dict) else result

    def _give_up(self, block: Block, error: Exception, say: Callable[[str], None]) -> None:
        self.failed.append(f"{block} failed twice ({type(error).__name__}: {error})")
        say(self.failed[-1])


def _unless(stop: StopRequest, simulation: Simulation, block: Block) -> Trajectories | None:
    """Run a block; not one that was handed out before, but had not begun when the stop was asked for."""
    return None if stop.made else simulation(block, lambda: stop.impatient)


def _until(stop: StopRequest, blocks: list[Block]) -> Iterator[Block]:
    for block in blocks:
        if stop.made:
            return
        yield block


def _processors() -> int:
    from roa.sweep.executors.threads import cpu_count

    return cpu_count()
