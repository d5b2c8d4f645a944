"""What a sweep will cost on this machine, from timed batches of its own starts. Decides no result."""

from __future__ import annotations

import time
from dataclasses import dataclass, fields

import numpy as np

from roa.kernel.lanes import Lanes
from roa.kernel.outcomes import Outcome
from roa.kernel.trajectories import Trajectories
from roa.sweep.plan import Plan
from roa.sweep.rounds import Course, Round
from roa.sweep.space import space_needed

# Batches spread over the whole design: its first starts alone may all settle quickly.
BATCHES, BATCH = 5, 1024
# Drawing, writing and merging, and workers that wait for the last block, on top of the kernel's own time.
OVERHEAD_SECONDS_PER_BYTE = 1e-8


@dataclass(frozen=True)
class Cost:
    """Forecast for the whole sweep.

    Attributes
    ----------
    samples, jobs : of the sweep
    seconds : least and most, from the quickest and the slowest batch
    disk : bytes, while blocks and merged file are both there
    steps : mean of accepted steps a start
    shares : of the timed starts, by outcome word
    timed : the timed starts themselves
    """

    samples: int
    jobs: int
    seconds: tuple[float, float]
    disk: int
    steps: float
    shares: dict[str, float]
    timed: Trajectories


def _starts_known(plan: Plan) -> Round:
    """What can be drawn before anything is known: of a design that refines, its first round stands for all."""
    known = Course(plan).first()
    assert known is not None
    return known


def forecast(plan: Plan, lanes: Lanes, jobs: int | None) -> Cost:
    """Time batches of the design's own starts and extrapolate to all of them."""
    from roa.sweep.executors.threads import cpu_count

    workers = jobs or cpu_count()
    known = _starts_known(plan)
    count = min(BATCH, known.stop)
    firsts = np.linspace(0, known.stop - count, BATCHES).astype(np.int64)
    rates, timed = [], []
    for first in firsts:
        points = known.drawn.points(int(first), count)
        begun = time.perf_counter()
        trajectories = lanes.run(points)
        rates.append((time.perf_counter() - begun) / count)
        timed.append(trajectories)
    together = Trajectories(
        **{part.name: np.concatenate([getattr(one, part.name) for one in timed]) for part in fields(Trajectories)}
    )
    disk = space_needed(plan, plan.samples)
    least, most = (
        rate * plan.samples / workers + OVERHEAD_SECONDS_PER_BYTE * disk for rate in (min(rates), max(rates))
    )
    share = np.bincount(together.outcome, minlength=len(Outcome)) / len(together)
    return Cost(
        samples=plan.samples,
        jobs=workers,
        seconds=(least, most),
        disk=disk,
        steps=float(together.steps.mean()),
        shares={outcome.word: float(share[outcome]) for outcome in Outcome if share[outcome]},
        timed=together,
    )
