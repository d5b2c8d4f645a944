"""A quadratic V of a loop with a hold, judged from sample to sample, and the map over one period by floats."""

from __future__ import annotations

from dataclasses import dataclass, field
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from roa.bound.lyapunov_function import Quadratic
from roa.kernel.interval_arrays import IntervalArray
from roa.loop.hold import Hold
from roa.loop.sampled import SampledLinearisation, SampledLoop

Array = NDArray[np.float64]

PER_STEP = 0.1  # of the classical Runge-Kutta method: step times the largest slope of f in x
MOST_STEPS = 200


@dataclass(frozen=True)
class SampledQuadratic(Quadratic):
    """V of the state at a sample; with a delay also of the command that still acts there.

    Attributes
    ----------
    sampled : the linearisation over one period
    joint : with a delay: float64 (n + m, n + m), of (x - x*, u - u*), whose first n rows and columns are P, since at
        a start the command of the equilibrium acts; None without a delay, or where only P was given
    """

    sampled: SampledLinearisation = field(kw_only=True)
    joint: Array | None = field(default=None, kw_only=True)

    @property
    def hold(self) -> Hold:
        """The hold of the loop."""
        assert self.loop.hold is not None
        return self.loop.hold

    @property
    def is_whole(self) -> bool:
        """Whether V weighs all that decides what follows a sample."""
        return self.joint is not None or not self.hold.delay

    @property
    def whole(self) -> Array:
        """P of all that V weighs, (N, N)."""
        return self.P if self.joint is None else self.joint

    @property
    def enclosed_whole(self) -> IntervalArray:
        """The same as a proof may use it."""
        return self.enclosed_P if self.joint is None else IntervalArray.exact(self.joint)

    @cached_property
    def K(self) -> Array:
        """Slopes of the commands in the state at the equilibrium, (m, n)."""
        return self._plant.linearised(self.centre)[2]

    def decrease(self, x: Array) -> Array:
        """Change of V over the first period of starts x, (..., n) -> (...), divided by the period."""
        flat = np.reshape(x, (-1, self.loop.n)) - self.centre
        begin = np.concatenate([flat, np.zeros((len(flat), len(self.whole) - self.loop.n))], axis=1)
        return np.reshape(self.change(begin), np.shape(x)[:-1])

    def change(self, zeta: Array) -> Array:
        """Change of V over one period from states (x - x*, u - u*), (k, N) -> (k,), divided by the period."""
        after = self.after(zeta)
        # By factors: the difference of two values of V would lose what is left of it near the equilibrium.
        return np.asarray(np.einsum("ki,ij,kj->k", after - zeta, self.whole, after + zeta) / self.hold.T)

    def after(self, zeta: Array) -> Array:
        """The state one period later, (k, N) -> (k, N); NaN where the trajectory blows up."""
        n, hold = self.loop.n, self.hold
        x, rest = zeta[:, :n] + self.centre, self._plant.command(self.centre)
        with np.errstate(all="ignore"):
            new = self._plant.command(x)
            if hold.delay:
                old = rest + zeta[:, n:] if self.joint is not None else np.broadcast_to(rest, new.shape)
                x = self._flow(x, old, hold.tau)
            x = self._flow(x, new, hold.T - hold.tau)
        return np.concatenate([x - self.centre, new - rest], axis=1)[:, : zeta.shape[1]]

    @cached_property
    def _plant(self) -> SampledLoop:
        return SampledLoop(self.loop)

    @cached_property
    def _fastest(self) -> float:
        return float(np.linalg.norm(self._plant.linearised(self.centre)[0], 2))

    def _flow(self, x: Array, u: Array, time: float) -> Array:
        """x' = f(x, u) over a time with the commands held, by classical Runge-Kutta steps."""
        steps = int(min(max(1.0, np.ceil(self._fastest * time / PER_STEP)), MOST_STEPS)) if time else 0
        h = time / steps if steps else 0.0
        for _ in range(steps):
            k1 = self._plant.rhs(x, u)
            k2 = self._plant.rhs(x + h / 2 * k1, u)
            k3 = self._plant.rhs(x + h / 2 * k2, u)
            k4 = self._plant.rhs(x + h * k3, u)
            x = x + h / 6 * (k1 + 2 * k2 + 2 * k3 + k4)
        return x
