"""Whether a trajectory that does not settle comes back to where it was, and after how long."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from roa.basin.independent import path
from roa.loop.model import Loop

Array = NDArray[np.float64]

# Points along the trajectory, and how near to its first one it must come back, in half-widths of the domain.
POINTS, NEAR = 3000, 2e-3
# The way is followed for these parts of the time, the shortest first: a quick cycle shows in a short one.
PARTS = (1 / 64, 1 / 8, 1.0)
# Returns that must agree, and how well their times must, relative.
RETURNS, SAME = 3, 2e-3


@dataclass(frozen=True)
class Cycle:
    """A periodic motion.

    Attributes
    ----------
    period : s
    amplitude : float64 (n,), half of what each state goes through, state units
    """

    period: float
    amplitude: Array


def cycle_from(loop: Loop, start: Array, duration: float, escape: float) -> Cycle | None:
    """Follow a start, float64 (n,), for a while; return the cycle that it is on, None where it is on none.

    It comes back if it crosses the plane through its start, square to its way there, again and again in the same
    sense, near the start and after equal times.
    """
    for part in PARTS:
        found = _within(loop, start, part * duration, escape)
        if found is not None:
            return found
    return None


def _within(loop: Loop, start: Array, duration: float, escape: float) -> Cycle | None:
    times, states = path(loop, start, duration, POINTS, escape)
    if len(times) < POINTS:
        return None
    points = states / loop.half_widths
    # The section lies where the second half of the way begins, so that a way towards the cycle is over.
    first = POINTS // 2
    normal = points[first + 1] - points[first]
    height = (points[first:] - points[first]) @ normal
    crossings = np.flatnonzero((height[:-1] < 0) & (height[1:] >= 0))
    part = height[crossings] / (height[crossings] - height[crossings + 1])
    at = points[first + crossings] + part[:, None] * (points[first + crossings + 1] - points[first + crossings])
    near = np.linalg.norm(at - points[first], axis=1) < NEAR
    step = times[1] - times[0]
    returns = np.concatenate([[0.0], (crossings[near] + part[near]) * step])
    periods = np.diff(returns)
    if len(periods) < RETURNS or np.ptp(periods) > SAME * periods.mean() + step:
        return None
    last = states[first : first + int(crossings[near][0]) + 2]
    return Cycle(float(periods.mean()), np.ptp(last, axis=0) / 2)
