"""The loop as a digital controller closes it: from one sample to the next, and its linearisation over a period.

Between samples x' = f(x, u) with the held signals u constant; u = w(x) is computed from the sample. With A, B the
slopes of f and K that of w at the equilibrium, one period T with the delay τ is the linear map

    x+ = Φ(T - τ) (Φ(τ) x + Γ(τ) u-) + Γ(T - τ) K x,    u = K x,    Φ(t) = e^{At}, Γ(t) = ∫ e^{As} ds B over [0, t],

on the state alone where τ = 0, and on the state with the command that still acts, (x, u-), where τ > 0. Both
matrices come from one exponential of the augmented matrix [[A, B], [0, 0]].
Source: K. J. Åström, B. Wittenmark, Computer-Controlled Systems, chapter 3 (from memory).
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np
from numpy.typing import NDArray

from roa.loop.evaluate import evaluate
from roa.loop.expression import Name
from roa.loop.hold import Hold
from roa.loop.model import Loop
from roa.loop.symbolic import Partials

Array = NDArray[np.float64]

CIRCLE = 1e-12  # relative to the norm of the map: a spectral radius as near to one as this is one
PERIODS, PER_OCTAVE = 160, 8  # shorter periods that are tried for a stable loop: 20 octaves
HALVINGS = 50


@dataclass(frozen=True)
class SampledLoop:
    """A loop with a hold, evaluated by numpy.

    Attributes
    ----------
    loop : Loop, with a hold
    """

    loop: Loop

    @property
    def hold(self) -> Hold:
        """The hold of the loop."""
        assert self.loop.hold is not None
        return self.loop.hold

    def command(self, x: Array) -> Array:
        """The commands computed from samples x, float64 (..., n) -> (..., m)."""
        values = self.loop.values_of(x)
        return np.stack([np.broadcast_to(values[name], x.shape[:-1]) for name in self.hold.signals], axis=-1)

    def rhs(self, x: Array, u: Array) -> Array:
        """f at the points x, float64 (..., n), with the held signals at u, float64 (..., m)."""
        values = self._values(x, u)
        return np.stack([np.broadcast_to(evaluate(tree, values), x.shape[:-1]) for tree in self.loop.dynamics], axis=-1)

    def jacobian(self, x: Array, u: Array) -> Array:
        """Slopes of f in (x, u) at one point, float64 (n,), (m,) -> (n, n + m)."""
        return self._dynamics.jacobian(self._values(x, u), ())

    def linearised(self, x: Array) -> tuple[Array, Array, Array]:
        """A (n, n), B (n, m) and K (m, n) at the equilibrium x, float64 (n,)."""
        slopes = self.jacobian(x, self.command(x))
        K = self._commands.jacobian(self.loop.values_of(x), ())
        return slopes[:, : self.loop.n], slopes[:, self.loop.n :], K

    def _values(self, x: Array, u: Array) -> dict[str, Array]:
        loop = self.loop
        values: dict[str, Array] = {name: np.asarray(float(p.value)) for name, p in loop.parameters.items()}
        values.update({name: x[..., i] for i, name in enumerate(loop.states)})
        values.update({name: u[..., j] for j, name in enumerate(self.hold.signals)})
        for name, tree in loop.signals.items():
            if name not in self.hold.signals:
                values[name] = evaluate(tree, values)
        return values

    @cached_property
    def _dynamics(self) -> Partials:
        loop, held = self.loop, self.hold.signals
        continuous = {name: tree for name, tree in loop.signals.items() if name not in held}
        return Partials((*loop.states, *held), tuple(loop.parameters), continuous, loop.dynamics)

    @cached_property
    def _commands(self) -> Partials:
        loop = self.loop
        trees = tuple(Name(name) for name in self.hold.signals)
        return Partials(loop.states, tuple(loop.parameters), loop.signals, trees)


@dataclass(frozen=True)
class SampledLinearisation:
    """The linearisation over one sampled period.

    Attributes
    ----------
    period : T, s
    map : float64 (n, n) without a delay, else (n + m, n + m): of the state and the command that still acts
    multipliers : complex128, eigenvalues of the map, by falling size
    spectral_radius : the largest size; inf where the map overflows
    stability : "stable", "marginal" (a multiplier on the unit circle, none outside) or "unstable"
    stable_below : s; where the loop is unstable and shorter periods help, the period below which it is stable
    """

    period: float
    map: Array
    multipliers: NDArray[np.complex128]
    spectral_radius: float
    stability: str
    stable_below: float | None = None

    @property
    def document(self) -> dict[str, Any]:
        """As plain values."""
        return {
            "period": self.period,
            "spectral_radius": self.spectral_radius,
            "multipliers": [[value.real, value.imag] for value in self.multipliers.tolist()],
            "strength": "estimated",
        }

    @property
    def slowest_time_constant(self) -> float:
        """s; no less than a period, since nothing is seen between two samples; inf unless stable."""
        if self.stability != "stable":
            return float("inf")
        if self.spectral_radius == 0:
            return self.period
        return max(self.period, -self.period / float(np.log(self.spectral_radius)))


def linearise(loop: Loop, x: Array) -> SampledLinearisation:
    """Linearise a loop with a hold over one period at its equilibrium x, float64 (n,)."""
    sampled = SampledLoop(loop)
    A, B, K = sampled.linearised(x)
    # The half-widths make norms free of units; multipliers do not change under the similarity.
    D = loop.half_widths
    scaled = A * D / D[:, None], B / D[:, None], K * D
    T, share = sampled.hold.T, sampled.hold.tau / sampled.hold.T
    radius, stability = _judge(*scaled, T, share)
    M = one_period(A, B, K, T, share * T)
    return SampledLinearisation(
        period=T,
        map=M,
        multipliers=_multipliers(one_period(*scaled, T, share * T)),
        spectral_radius=radius,
        stability=stability,
        stable_below=_stable_below(*scaled, T, share) if stability == "unstable" else None,
    )


def one_period(A: Array, B: Array, K: Array, T: float, tau: float) -> Array:
    """The map over one period T with the delay tau, s; see the head of the file."""
    m = B.shape[1]
    first, second = _exponential(A, B, tau), _exponential(A, B, T - tau)
    phi, gamma = second
    with np.errstate(all="ignore"):
        moved = phi @ first[0] + gamma @ K
        return moved if tau == 0 else np.block([[moved, phi @ first[1]], [K, np.zeros((m, m))]])


def _exponential(A: Array, B: Array, t: float) -> tuple[Array, Array]:
    from scipy.linalg import expm  # 0.1 s, and needed only where there is a hold

    n, m = B.shape
    augmented = np.zeros((n + m, n + m))
    augmented[:n, :n], augmented[:n, n:] = A * t, B * t
    with np.errstate(all="ignore"):
        E = expm(augmented)
    return E[:n, :n], E[:n, n:]


def _multipliers(M: Array) -> NDArray[np.complex128]:
    if not np.isfinite(M).all():
        return np.full(len(M), np.inf, dtype=np.complex128)
    values = np.linalg.eigvals(M).astype(np.complex128)
    return values[np.lexsort((-values.imag, -np.abs(values)))]


def _judge(A: Array, B: Array, K: Array, T: float, share: float) -> tuple[float, str]:
    """Spectral radius over one period, and what it means."""
    M = one_period(A, B, K, T, share * T)
    radius = float(np.abs(_multipliers(M)).max())
    circle = CIRCLE * max(1.0, float(np.linalg.norm(M, 2))) if np.isfinite(M).all() else 0.0
    return radius, "unstable" if radius > 1 + circle else "stable" if radius < 1 - circle else "marginal"


def _stable_below(A: Array, B: Array, K: Array, T: float, share: float) -> float | None:
    """The period under T, s, below which the loop is stable; the delay stays the same share of the period."""

    def is_stable(period: float) -> bool:
        return _judge(A, B, K, period, share)[1] == "stable"

    periods = T * 2.0 ** (-np.arange(1, PERIODS + 1) / PER_OCTAVE)
    low = next((float(period) for period in periods if is_stable(period)), None)
    if low is None:
        return None
    high = low * 2.0 ** (1 / PER_OCTAVE)
    for _ in range(HALVINGS):
        middle = (low + high) / 2
        low, high = (middle, high) if is_stable(middle) else (low, middle)
    return low
