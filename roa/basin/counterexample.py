"""Two searches in a claimed set: a start that does not come back, and a point at which V does not decrease.

Both spread points over the boundary and the inside, then draw ever closer around the worst of them. The worst start
is the one that takes longest to converge, because the time grows without limit towards the edge of the basin.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from roa.basin.claimed_set import ClaimedSet, inside_ball, sphere
from roa.basin.independent import Decision, decide
from roa.basin.replay import TIGHTER
from roa.bound.point_checks import decrease_witness, member
from roa.kernel.integration import Integration
from roa.kernel.outcomes import Outcome
from roa.kernel.target import Target
from roa.kernel.trajectories import Trajectories

Array = NDArray[np.float64]
Run = Callable[[Array], Trajectories]

# Outcomes that refute a claim once they are confirmed; the others only fail to support it.
REFUTING = (Outcome.ESCAPED, Outcome.SETTLED_ELSEWHERE)

# First throw: starts on the boundary and inside. Then rounds about the worst, each closer than the one before.
ON_BOUNDARY, INSIDE = 8192, 8192
ROUNDS, OFFSPRING, PARENTS = 16, 2048, 32
SPREAD, CLOSER = 0.3, 0.5
# Suspects, or points of increase, that are examined one by one.
EXAMINED = 8


@dataclass(frozen=True)
class Counterexample:
    """A start of the claimed set that does not converge, confirmed by another integrator.

    Attributes
    ----------
    initial : float64 (n,), state units
    V : V at the start
    decision : what the independent integration at ten times tighter tolerance found
    """

    initial: Array
    V: float
    decision: Decision


class _Worst:
    """The worst points of the unit ball so far, and further points ever closer about them."""

    def __init__(self, n: int, rng: np.random.Generator) -> None:
        self.n, self.rng = n, rng
        self.ball, self.score = np.empty((0, n)), np.empty(0)
        self.spread = SPREAD

    def throw(self) -> Array:
        """Points to try next, float64 (m, n): all over the ball at first, then about the worst."""
        if not len(self.ball):
            boundary = sphere(ON_BOUNDARY, self.n, self.rng)
            return np.concatenate([boundary, inside_ball(INSIDE, self.n, self.rng)])
        parents = self.ball[self.rng.integers(len(self.ball), size=OFFSPRING)]
        children = parents + self.spread / np.sqrt(self.n) * self.rng.standard_normal(parents.shape)
        self.spread *= CLOSER
        # Back onto the sphere from outside, so that the boundary keeps half of its offspring.
        return np.asarray(children / np.maximum(np.linalg.norm(children, axis=1, keepdims=True), 1.0))

    def keep(self, ball: Array, score: Array) -> None:
        """Remember the points of the largest scores, float64 (m,)."""
        ball, score = np.concatenate([self.ball, ball]), np.concatenate([self.score, score])
        worst = np.argsort(-score, kind="stable")[:PARENTS]
        self.ball, self.score = ball[worst], score[worst]


def search(claimed: ClaimedSet, run: Run, rng: np.random.Generator, refuting: tuple[Outcome, ...] = REFUTING) -> Array:
    """Return starts of the set that escaped or settled elsewhere, float64 (m, n); none if m = 0."""
    worst = _Worst(claimed.loop.n, rng)
    for _ in range(1 + ROUNDS):
        ball = worst.throw()
        trajectories = run(claimed.at(ball))
        suspects = suspects_of(claimed, trajectories, refuting)
        if len(suspects):
            return suspects
        worst.keep(ball, trajectories.time)
    return np.empty((0, claimed.loop.n))


def suspects_of(claimed: ClaimedSet, trajectories: Trajectories, refuting: tuple[Outcome, ...] = REFUTING) -> Array:
    """Starts whose outcome would refute a claim, float64 (m, n), m <= EXAMINED, the most telling first.

    In turn the innermost, which says most about the level, and the soonest to end, which is the clearest case.
    """
    against = np.flatnonzero(np.isin(trajectories.outcome, refuting))
    starts, time = trajectories.initial[against], trajectories.time[against]
    innermost = np.argsort(claimed.V.value(starts), kind="stable")
    soonest = np.argsort(time, kind="stable")
    in_turn = np.stack([innermost, soonest], axis=1).ravel()
    return starts[list(dict.fromkeys(in_turn.tolist()))[:EXAMINED]]


def confirm(
    claimed: ClaimedSet,
    suspects: Array,
    target: Target,
    integration: Integration,
    refuting: tuple[Outcome, ...] = REFUTING,
) -> Counterexample | None:
    """Return the first suspect that verifiably lies in the set and ends so under the independent integrator too."""
    for start in suspects:
        if not claimed.contains(start):
            continue
        tolerances = integration.rtol / TIGHTER, integration.atol / TIGHTER
        decision = decide(claimed.loop, target, integration, start, *tolerances)
        if decision.outcome in refuting:
            return Counterexample(start, float(claimed.V.value(start)), decision)
    return None


def find_increase(claimed: ClaimedSet, rng: np.random.Generator) -> Array | None:
    """Return a point of the set, float64 (n,), at which V̇ > 0 is verified; None where none was found."""
    worst = _Worst(claimed.loop.n, rng)
    for _ in range(1 + ROUNDS):
        ball = worst.throw()
        x = claimed.at(ball)
        with np.errstate(all="ignore"):  # by |b|², because V̇ alone vanishes towards the equilibrium whatever its sign
            growth = claimed.V.decrease(x) / np.sum(ball**2, axis=1)
        worst.keep(ball, np.where(np.isfinite(growth), growth, -np.inf))
    for suspect, score in zip(claimed.at(worst.ball[:EXAMINED]), worst.score, strict=False):
        if score > 0 and claimed.contains(suspect) and decrease_witness(claimed.V, suspect):
            return np.asarray(suspect)
    return None


def find_not_positive(claimed: ClaimedSet, rng: np.random.Generator) -> Array | None:
    """Return a point of the set other than the equilibrium, float64 (n,), at which V <= 0 is verified."""
    x = claimed.at(_Worst(claimed.loop.n, rng).throw())
    lowest = np.asarray(x[np.argmin(np.nan_to_num(claimed.V.value(x), nan=np.inf))])
    apart = bool(np.any(lowest != claimed.equilibrium))
    return lowest if apart and member(claimed.V, 0.0, lowest) and claimed.contains(lowest) else None
