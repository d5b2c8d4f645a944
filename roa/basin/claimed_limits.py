"""A claimed set and the limits: whether it stays within them, by proof, or reaches beyond one."""

from __future__ import annotations

from dataclasses import dataclass
from decimal import Decimal

import numpy as np
from numpy.typing import NDArray

from roa.basin.claimed_set import ClaimedSet, inside_ball, sphere
from roa.bound.limited_level import LimitProver
from roa.bound.lyapunov_function import Quadratic
from roa.loop.model import Loop

Array = NDArray[np.float64]

# Points thrown over the boundary and the inside of the set, then about the furthest of them, ever closer.
ON_BOUNDARY, INSIDE = 8192, 8192
ROUNDS, OFFSPRING, PARENTS = 12, 2048, 32
SPREAD, CLOSER = 0.3, 0.5


@dataclass(frozen=True)
class LimitsOfSet:
    """What is known of the limits on a claimed set.

    Attributes
    ----------
    kept : whether every limited value is proved to stay within its limits all over the set; true without limits
    crossed : names whose limit is crossed at some point of the set; empty where no such point was found
    largest_level : the largest level of the same V that stays within the limits, where it is less than the claim
    is_proved : whether that of `largest_level` is proved, else it is estimated from points
    """

    kept: bool
    crossed: tuple[str, ...] = ()
    largest_level: float | None = None
    is_proved: bool = False


def limits_of(claimed: ClaimedSet, level: Decimal, rng: np.random.Generator) -> LimitsOfSet:
    """Try to prove that a set stays within the limits, else look for points at which it does not.

    Parameters
    ----------
    claimed : the set, its level rounded down
    level : the exact one
    """
    loop, V = claimed.loop, claimed.V
    if not loop.limits:
        return LimitsOfSet(True)
    # Between samples a trajectory of a sampled loop may leave the set that a proof at the samples keeps it in.
    prover = LimitProver(V) if isinstance(V, Quadratic) and loop.hold is None else None
    if prover is not None and prover.holds(level):
        return LimitsOfSet(True)
    beyond = _points_beyond(claimed, rng)
    largest = 0.0 if prover is None else prover.largest(claimed.level)
    if largest > 0:
        return LimitsOfSet(False, _crossed(loop, beyond), largest, True)
    lowest = float(V.value(beyond).min()) if len(beyond) else None
    return LimitsOfSet(False, _crossed(loop, beyond), lowest)


def _points_beyond(claimed: ClaimedSet, rng: np.random.Generator) -> Array:
    """Points of the set at which a limit is crossed, float64 (m, n)."""
    n = claimed.loop.n
    ball = np.concatenate([sphere(ON_BOUNDARY, n, rng), inside_ball(INSIDE, n, rng)])
    excess = _excess(claimed.loop, claimed.at(ball))
    spread = SPREAD
    for _ in range(ROUNDS):
        furthest = np.argsort(-excess, kind="stable")[:PARENTS]
        parents = ball[furthest][rng.integers(len(furthest), size=OFFSPRING)]
        children = parents + spread / np.sqrt(n) * rng.standard_normal(parents.shape)
        children /= np.maximum(np.linalg.norm(children, axis=1, keepdims=True), 1.0)
        ball = np.concatenate([ball, children])
        excess = np.concatenate([excess, _excess(claimed.loop, claimed.at(children))])
        spread *= CLOSER
    return np.asarray(claimed.at(ball[excess > 0]))


def _excess(loop: Loop, x: Array) -> Array:
    """How far beyond the worst limit the points x lie, in widths of the limit, (m, n) -> (m,); negative within."""
    values = loop.values_of(x)
    worst = np.full(len(x), -np.inf)
    for name, (low, high) in loop.limits.items():
        low_, high_ = float(low), float(high)
        value = np.broadcast_to(values[name], len(x))
        beyond = np.maximum(value - high_, low_ - value) / (high_ - low_)
        worst = np.maximum(worst, np.where(np.isnan(value), np.inf, beyond))
    return worst


def _crossed(loop: Loop, x: Array) -> tuple[str, ...]:
    values = loop.values_of(x)
    return tuple(
        name
        for name, (low, high) in loop.limits.items()
        if not np.all((values[name] >= float(low)) & (values[name] <= float(high)))
    )
