"""The lowest start that does not do what it should: by rays from the equilibrium, then ever closer about the best.

Each direction is tried once at the lowest height known so far; only where the start fails there is the edge on that
ray looked for by halving. After a part of the budget the directions are no longer drawn all over the sphere but about
the best one, with a step that shrinks whenever it brings nothing. So nearly every trajectory says something about the
lowest height, and none is spent on finding edges that lie higher.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from roa.basin.claimed_set import sphere
from roa.basin.independent import Decision, decide
from roa.bound.lyapunov_function import LyapunovFunction, Quadratic
from roa.kernel.integration import Integration
from roa.kernel.target import Target
from roa.kernel.trajectories import Trajectories
from roa.loop.model import Loop

Array = NDArray[np.float64]
Flags = NDArray[np.bool_]
Run = Callable[[Array], Trajectories]
Fails = Callable[[Trajectories], Flags]

# Part of the budget for directions all over the sphere, and directions of one throw there and about the best.
ALL_OVER, THROW, THROW_ABOUT = 0.35, 16, 8
# Going down a ray on which a start failed: the first step, relative, how the next ones grow, and halvings after them;
# more for the first ray, and for the best one at the end.
FIRST_DESCENT, DESCENT, HALVINGS, FIRST_HALVINGS, LAST_HALVINGS = 1e-4, 6.0, 3, 14, 24
# The step about the best direction: at first, and how it changes with a gain and without one.
STEP, GROW, SHRINK, SMALLEST_STEP = 0.4, 1.3, 0.8, 1e-8
# How far below the best a direction is tried, relative: what is lower by less is no gain.
GAIN = 1e-9
# Where the independent integration does not confirm the lowest start: so much higher at first, then twice as much.
HIGHER, TIMES_HIGHER = 1e-6, 14
# The independent integration is by so much tighter.
TIGHTER, SMALLEST_RTOL, SMALLEST_ATOL = 1e3, 1e-12, 1e-14


@dataclass(frozen=True)
class Lowest:
    """The lowest failing start, confirmed by the independent integrator.

    Attributes
    ----------
    start : float64 (n,), state units
    height : its V, or its distance
    decision : what the independent integration found
    trajectories : how many were run to find it
    """

    start: Array
    height: float
    decision: Decision
    trajectories: int


class Height:
    """A height above the equilibrium that grows along every ray, and where a ray reaches it."""

    def __init__(self, loop: Loop, centre: Array, V: LyapunovFunction | None = None) -> None:
        self.loop, self.centre = loop, centre
        self._V = V
        if V is None:  # distance in half-widths of the domain, squared
            self._frame = np.diag(loop.half_widths)
        elif isinstance(V, Quadratic):
            self._frame = np.linalg.inv(np.linalg.cholesky(V.P).T)
        else:
            self._frame = np.diag(loop.half_widths)

    @property
    def is_form(self) -> bool:
        """Whether the height is the square of the distance in the frame."""
        return self._V is None or isinstance(self._V, Quadratic)

    def rays(self, directions: Array) -> Array:
        """Rays, float64 (m, n), state units, of unit directions."""
        return np.asarray(directions @ self._frame.T)

    def of(self, starts: Array) -> Array:
        """Height of starts, float64 (m, n) -> (m,)."""
        if self._V is not None:
            return self._V.value(starts)
        return np.asarray(np.sum(((starts - self.centre) / self.loop.half_widths) ** 2, axis=1))

    def to_face(self, directions: Array) -> Array:
        """Part of each ray at which it leaves the domain, float64 (m,)."""
        low, high = self.loop.box.T - self.centre
        rays = self.rays(directions)
        with np.errstate(divide="ignore", invalid="ignore"):
            parts = np.where(rays > 0, high / rays, np.where(rays < 0, low / rays, np.inf))
        return np.asarray(parts.min(axis=1))

    def reach(self, directions: Array, height: float) -> Array:
        """Part of each ray at which it reaches a height, or the face where that comes first, float64 (m,)."""
        face = self.to_face(directions)
        if self.is_form:
            return np.minimum(np.sqrt(height), face)
        low, high = np.zeros(len(face)), face.copy()
        for _ in range(50):
            middle = (low + high) / 2
            under = self.of(self.at(directions, middle)) <= height
            low, high = np.where(under, middle, low), np.where(under, high, middle)
        return low

    def at(self, directions: Array, parts: Array) -> Array:
        """Starts on rays, float64 (m, n)."""
        return np.asarray(np.clip(self.centre + parts[:, None] * self.rays(directions), *self.loop.box.T))


class _Search:
    """The state of one search."""

    def __init__(self, height: Height, run: Run, fails: Fails, budget: int, rng: np.random.Generator) -> None:
        self.height, self.run, self.fails, self.budget, self.rng = height, run, fails, budget, rng
        self.used = 0
        self.best = np.inf
        self.direction: Array | None = None
        self.part = 0.0

    def failing(self, directions: Array, parts: Array) -> Flags:
        self.used += len(directions)
        return self.fails(self.run(self.height.at(directions, parts)))

    def throw(self, directions: Array) -> bool:
        """Try directions at the lowest height known, and go down on those that fail; return whether any is lower."""
        directions = directions[: self.budget - self.used]
        if not len(directions):
            return False
        high = self.height.to_face(directions)
        if self.direction is not None:
            high = np.minimum(self.height.reach(directions, self.best * (1 - GAIN)), high)
        failed = self.failing(directions, high)
        before = self.best
        for direction in directions[failed]:
            self._descend(direction[None])
        return self.best < before

    def _descend(self, direction: Array) -> None:
        """Go down on a ray: by a small step first, then ever longer ones, then by halving."""
        top = float(self.height.to_face(direction)[0])
        known = self.direction is not None
        high = min(float(self.height.reach(direction, self.best * (1 - GAIN))[0]), top) if known else top
        if self.used >= self.budget or not (known is False or self.failing(direction, np.array([high]))[0]):
            return
        step, low = (FIRST_DESCENT if known else 0.5), 0.0
        while self.used < self.budget:
            lower = high * (1 - step)
            if not self.failing(direction, np.array([lower]))[0]:
                low = lower
                break
            high, step = lower, min(DESCENT * step, 0.5)
        for _ in range(HALVINGS if known else FIRST_HALVINGS):
            if self.used >= self.budget:
                break
            middle = (low + high) / 2
            fails = self.failing(direction, np.array([middle]))[0]
            low, high = (low, middle) if fails else (middle, high)
        end = np.array([high])
        self._keep(direction, end, self.height.of(self.height.at(direction, end)))

    def polish(self) -> None:
        """Halve the best ray to the end."""
        if self.direction is None:
            return
        direction, low, high = self.direction[None], 0.99 * self.part, self.part
        while self.used < self.budget and high - low > 1e-12 * high:
            middle = (low + high) / 2
            fails = self.failing(direction, np.array([middle]))[0]
            low, high = (low, middle) if fails else (middle, high)
        end = np.array([high])
        self._keep(direction, end, self.height.of(self.height.at(direction, end)))

    def _keep(self, directions: Array, parts: Array, found: Array) -> None:
        i = int(np.argmin(found))
        if found[i] < self.best:
            self.best, self.direction, self.part = float(found[i]), directions[i], float(parts[i])


def lowest(
    height: Height, run: Run, fails: Fails, budget: int, rng: np.random.Generator
) -> tuple[Array, float, int] | None:
    """Return the lowest start that fails, float64 (n,), its height and the trajectories run; None where none fails."""
    n = height.loop.n
    search = _Search(height, run, fails, budget, rng)
    while search.used < ALL_OVER * budget:
        search.throw(sphere(THROW, n, rng))
    step, gains = STEP, np.zeros(n)
    while search.direction is not None and search.used < budget - LAST_HALVINGS and step > SMALLEST_STEP and n > 1:
        before = search.direction
        # Half of the throw goes further along the way that brought gains before.
        about = step * sphere(THROW_ABOUT, n, rng)
        about[::2] += rng.random((len(about[::2]), 1)) * gains
        tried = before + about
        gained = search.throw(tried / np.linalg.norm(tried, axis=1, keepdims=True))
        gains = 0.5 * gains + (search.direction - before if gained else 0.0)
        step = min(step * (GROW if gained else SHRINK), STEP)
    search.polish()
    if search.direction is None:
        return None
    start = height.at(search.direction[None], np.array([search.part]))[0]
    return start, search.best, search.used


def confirmed(
    height: Height,
    found: tuple[Array, float, int],
    target: Target,
    integration: Integration,
    fails: Callable[[Decision], bool],
) -> Lowest | None:
    """Return the start, or one little higher on its ray, that fails by the independent integrator too."""
    start, _, used = found
    offset = start - height.centre
    tolerances = max(integration.rtol / TIGHTER, SMALLEST_RTOL), max(integration.atol / TIGHTER, SMALLEST_ATOL)
    for k in range(TIMES_HIGHER):
        higher = height.centre + offset * (1 + (HIGHER * 2**k if k else 0.0))
        if (higher < height.loop.box[:, 0]).any() or (higher > height.loop.box[:, 1]).any():
            return None
        decision = decide(height.loop, target, integration, higher, *tolerances)
        if fails(decision):
            return Lowest(higher, float(height.of(higher[None])[0]), decision, used)
    return None
