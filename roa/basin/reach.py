"""Whether a claim can come out as its configuration asks, foreseen before the run from a few timed starts.

Foreseeing decides nothing: the answer is an estimate, and a claim that seems within reach may still fall.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from roa.basin.claimed_set import THROW, THROWS, ClaimedSet
from roa.basin.counterexample import REFUTING
from roa.basin.intervals import clopper_pearson_upper, success_run_samples
from roa.bound.bounds import Bounds
from roa.bound.lyapunov_function import Quadratic
from roa.kernel.outcomes import Outcome
from roa.kernel.trajectories import Trajectories
from roa.loop.configuration import Configuration

# Vectors of the states that are held for each draw: starts, what becomes of them, and what drawing itself takes.
VECTORS_A_DRAW = 8
# Timed starts whose membership is verified; with more, their share would only be larger.
MOST_VERIFIED = 256


@dataclass(frozen=True)
class Reach:
    """What *supported* takes, and what stands in its way.

    Attributes
    ----------
    draws : independent draws from the claimed set, none of which may fail to converge; the samples of the sweep
        never count among them
    memory : bytes that they take
    inside, failing : timed starts in the claimed set, and those of them that did not converge
    obstacles : sentences, what was found and what would be needed; none where the claim is within reach
    """

    draws: int
    memory: int
    inside: int
    failing: int
    obstacles: tuple[str, ...]


def foresee(configuration: Configuration, bounds: Bounds, timed: Trajectories, memory: int) -> Reach | None:
    """Foresee what becomes of a claim; None where there is none, or where no draws would ever support it.

    Parameters
    ----------
    configuration : Configuration
    bounds : with the V of the claim
    timed : starts of the domain that were simulated already
    memory : of this machine, bytes
    """
    table, verdict = configuration.bound, configuration.verdict
    if table.level is None or table.inner is not None or configuration.loop.disturbances:
        return None
    claimed = ClaimedSet(bounds.V, float(table.level))
    among = bounds.V.value(timed.initial) <= claimed.level
    suspects = np.flatnonzero(among & (timed.outcome != Outcome.CONVERGED))[:MOST_VERIFIED]
    outcomes = timed.outcome[[i for i in suspects if claimed.contains(timed.initial[i])]]
    draws = success_run_samples(verdict.fraction, verdict.confidence)
    reach = Reach(draws, draws * VECTORS_A_DRAW * 8 * configuration.loop.n, int(among.sum()), len(outcomes), ())
    obstacles = _refuting(outcomes)
    if verdict.accept == "supported":
        obstacles = obstacles or _too_many_failures(reach, verdict.fraction, verdict.confidence)
        obstacles += _too_many_draws(reach, memory, isinstance(bounds.V, Quadratic), verdict.confidence)
    return Reach(reach.draws, reach.memory, reach.inside, reach.failing, obstacles)


def _refuting(outcomes: NDArray[np.uint8]) -> tuple[str, ...]:
    """One confirmed start would refute the claim."""
    count = int(np.isin(outcomes, [int(outcome) for outcome in REFUTING]).sum())
    if not count:
        return ()
    starts = (
        "a timed start inside the claimed set does"
        if count == 1
        else f"{count} or more timed starts inside the claimed set do"
    )
    return (f"{starts} not come back, and one that is confirmed refutes it; a smaller level is needed (simulated)",)


def _too_many_failures(reach: Reach, fraction: float, confidence: float) -> tuple[str, ...]:
    """So many fail that all draws would pass with a probability below 1 - confidence."""
    if not reach.failing:
        return ()
    least = 1 - clopper_pearson_upper(reach.inside - reach.failing, reach.inside, confidence)
    if least <= 1 - fraction:
        return ()
    return (
        f"of {reach.inside:,} timed starts inside the claimed set {reach.failing:,} did not converge, at least "
        f"{100 * least:.3g} % of the set; [verdict] fraction = {fraction:.9g} allows {100 * (1 - fraction):.3g} %: "
        "a smaller level, a longer horizon or a smaller fraction is needed (estimated)",
    )


def _too_many_draws(reach: Reach, memory: int, quadratic: bool, confidence: float) -> tuple[str, ...]:
    """More draws than this machine can hold, or than are ever thrown for a V that is a formula."""
    most = memory * reach.draws // reach.memory
    if not quadratic:
        most = min(most, THROW * THROWS)
    if reach.draws <= most:
        return ()
    largest = float(np.exp(np.log1p(-confidence) / most))
    return (
        f"{reach.draws:,} independent draws are needed, {most:,} can be had on this machine; "
        f"[verdict] fraction = {np.floor(largest * 1e9) / 1e9:.9g} or less is within reach",
    )
