"""The set of a claim, {V <= level} about the equilibrium, as something to draw starts from.

Points of the set are addressed by points b of the unit ball: |b| = 1 is its boundary, 0 the equilibrium, and every
radius of the ball a straight line in the set. What is reached in this way is connected to the equilibrium, so a
counterexample among these points needs no further argument.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from math import sqrt

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import solve_triangular

from roa.basin.segment import segment_inside
from roa.bound.lyapunov_function import LyapunovFunction, Quadratic
from roa.bound.point_checks import member
from roa.bound.volume import fits_domain
from roa.loop.model import Loop

Array = NDArray[np.float64]

# Starts on the boundary are drawn in by this part, so that membership can be verified in spite of rounding.
JUST_INSIDE = 1 - 1e-10
# Where V is a formula: points tried along a ray for the first one above the level, and halvings after it.
MARCH, HALVINGS = 64, 34
# Rays from which the largest level inside the domain is read, where V is a formula.
RAYS = 4096
# Uniform draws by rejection: size of one throw, and throws without enough members before it is given up.
THROW, THROWS = 65536, 64
# Margin of the box about the set, as a part of its width on each side.
MARGIN = 0.1


@dataclass(frozen=True)
class ClaimedSet:
    """The part of {V <= level} that straight lines from the equilibrium reach, and uniform draws from the whole.

    Attributes
    ----------
    V : LyapunovFunction, positive definite
    level : float, > 0
    """

    V: LyapunovFunction
    level: float

    @property
    def loop(self) -> Loop:
        """The loop whose states the set is in."""
        return self.V.loop

    @property
    def equilibrium(self) -> Array:
        """Centre of the set, float64 (n,), state units."""
        return self.V.centre

    def at(self, ball: Array) -> Array:
        """Starts for points of the unit ball, float64 (m, n) -> (m, n)."""
        if isinstance(self.V, Quadratic):
            return self.equilibrium + sqrt(self.level) * JUST_INSIDE * self._unwhiten(ball)
        return self.equilibrium + self._reach(ball)[:, None] * self._direction(ball) * _norm(ball)[:, None]

    @property
    def is_inside(self) -> bool:
        """Whether the set stays inside the domain; where V is a formula, along some thousand rays."""
        if isinstance(self.V, Quadratic):
            return fits_domain(self.V, self.level)
        return self.level < self.largest_level_inside

    @cached_property
    def largest_level_inside(self) -> float:
        """The largest level whose set stays inside the domain; where V is a formula, along some thousand rays."""
        room = self.loop.box - self.equilibrium[:, None]
        if isinstance(self.V, Quadratic):
            # The ellipsoid reaches sqrt(level * (P^-1)_ii) along state i.
            reach = np.diag(np.linalg.inv(self.V.P))
            return float(np.min(np.abs(room).min(axis=1) ** 2 / reach))
        rays = sphere(RAYS, self.loop.n, np.random.default_rng(0)) * self.loop.half_widths
        return float(np.min(np.max(self._along(rays, _to_face(rays, self.loop, self.equilibrium)), axis=1)))

    def draw(self, count: int, rng: np.random.Generator) -> Array | None:
        """Uniform, independent starts in the part of {V <= level} inside the domain, float64 (count, n).

        Where V is a formula they may lie in more than the connected part; `are_joined` tells.
        None where the set is too small a part of the box about it to be drawn from.
        """
        if isinstance(self.V, Quadratic):
            return self.at(inside_ball(count, self.loop.n, rng))
        low, high = self._box_about(rng)
        members = np.empty((0, self.loop.n))
        for _ in range(THROWS):
            x = rng.uniform(low, high, (THROW, self.loop.n))
            members = np.concatenate([members, x[self.V.value(x) <= self.level]])
            if len(members) >= count:
                return members[:count]
        return None

    def are_joined(self, x: Array) -> bool:
        """Whether straight lines inside the set join all of the points x, float64 (m, n), to the equilibrium.

        Uniform draws stand for the connected part only if they do: a part apart from it would dilute them.
        """
        if isinstance(self.V, Quadratic):
            return True
        return bool(np.all(self._along(x - self.equilibrium, np.ones(len(x))) <= self.level))

    def contains(self, x: Array) -> bool:
        """Whether x, float64 (n,), is verified to lie in the set and to be connected to the equilibrium."""
        if isinstance(self.V, Quadratic):
            return member(self.V, self.level, x)
        return segment_inside(self.V, self.level, x)

    def _unwhiten(self, ball: Array) -> Array:
        assert isinstance(self.V, Quadratic)
        factor = np.linalg.cholesky(self.V.P)
        return np.asarray(solve_triangular(factor.T, ball.T, lower=False).T)

    def _direction(self, ball: Array) -> Array:
        return ball / np.maximum(_norm(ball), 1e-300)[:, None] * self.loop.half_widths

    def _along(self, rays: Array, ends: Array) -> Array:
        """V along rays up to the parts `ends`, float64 (m, n), (m,) -> (m, MARCH)."""
        parts = np.linspace(0, 1, MARCH + 1)[1:]
        return np.stack([self.V.value(self.equilibrium + (part * ends)[:, None] * rays) for part in parts], axis=1)

    def _reach(self, ball: Array) -> Array:
        """How far along the rays of the ball's points V stays within the level, float64 (m,)."""
        rays = self._direction(ball)
        ends = _to_face(rays, self.loop, self.equilibrium)
        above = ~(self._along(rays, ends) <= self.level)
        first = np.where(above.any(axis=1), above.argmax(axis=1), MARCH)
        low, high = first / MARCH * ends, np.minimum(first + 1, MARCH) / MARCH * ends
        for _ in range(HALVINGS):
            middle = (low + high) / 2
            inside = self.V.value(self.equilibrium + middle[:, None] * rays) <= self.level
            low, high = np.where(inside, middle, low), np.where(inside, high, middle)
        return low * JUST_INSIDE

    def _box_about(self, rng: np.random.Generator) -> tuple[Array, Array]:
        """A box inside the domain that holds the connected part of the set, found from its rays.

        It grows until its margin is free of members: a connected set that left the box would have to cross that.
        """
        rays = self.at(sphere(RAYS, self.loop.n, rng))
        low, high = rays.min(axis=0), rays.max(axis=0)
        for _ in range(THROWS):
            margin = MARGIN * (high - low)
            box = np.maximum(low - margin, self.loop.box[:, 0]), np.minimum(high + margin, self.loop.box[:, 1])
            x = rng.uniform(*box, (THROW, self.loop.n))
            members = x[self.V.value(x) <= self.level]
            if not np.any((members < low - margin / 2) | (members > high + margin / 2)):
                return box
            low, high = np.minimum(low, members.min(axis=0)), np.maximum(high, members.max(axis=0))
        return self.loop.box[:, 0], self.loop.box[:, 1]


def sphere(count: int, n: int, rng: np.random.Generator) -> Array:
    """Uniform directions, float64 (count, n), each of length 1."""
    normal = rng.standard_normal((count, n))
    return normal / _norm(normal)[:, None]


def inside_ball(count: int, n: int, rng: np.random.Generator) -> Array:
    """Uniform points of the unit ball, float64 (count, n)."""
    return sphere(count, n, rng) * rng.random((count, 1)) ** (1 / n)


def _norm(x: Array) -> Array:
    return np.asarray(np.linalg.norm(x, axis=1))


def _to_face(rays: Array, loop: Loop, equilibrium: Array) -> Array:
    """Part of each ray, float64 (m, n), at which it leaves the domain, float64 (m,)."""
    low, high = loop.box.T - equilibrium
    with np.errstate(divide="ignore", invalid="ignore"):
        parts = np.where(rays > 0, high / rays, np.where(rays < 0, low / rays, np.inf))
    return np.asarray(parts.min(axis=1))
