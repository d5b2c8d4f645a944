"""How many steps a method takes: the step control of the lanes in numpy, for a few starts; nothing is compiled.

It counts attempts, accepted or rejected, and says nothing of outcomes. The attempted step is the one of the tableau,
and step sizes follow the rules of `lanes.py.jinja`; kinds of ends that a count does without (dwell, other
equilibria, limits) are left out.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import partial

import numpy as np
from numpy.typing import NDArray

from roa.kernel.integration import Integration
from roa.kernel.tableau import Method, RosenbrockTableau
from roa.kernel.target import Target
from roa.loop.model import Loop

Array = NDArray[np.float64]

# Right-hand sides that the exact Jacobian and its elimination count for, a state: in lanes of the clipped pendulum with
# a lagging drive (three states) an attempt of rodas4 took 1.55 times that of tsitouras5 (six right-hand sides), which
# is 6 + 1.1 n; of more states the elimination takes more, so that two a state errs against the implicit method.
JACOBIAN_PER_STATE = 2


@dataclass(frozen=True)
class Counted:
    """Attempts of every start, and how far they led.

    Attributes
    ----------
    attempts : int64 (m,), accepted and rejected steps
    time : float64 (m,), s
    """

    attempts: NDArray[np.int64]
    time: Array


def right_hand_sides(tableau: Method, n: int) -> int:
    """Right-hand sides that one attempt counts for; with the Jacobian those that stand for it as well."""
    return tableau.stages - 1 + (JACOBIAN_PER_STATE * n if isinstance(tableau, RosenbrockTableau) else 0)


def count_attempts(
    loop: Loop, tableau: Method, starts: Array, target: Target, integration: Integration, most: int, until: Array
) -> Counted:
    """Integrate starts to the target set, to a face of the escape box, or to an instant of their own.

    Parameters
    ----------
    starts : float64 (m, n), state units
    most : attempts a start, after which it is left where it is
    until : float64 (m,), s
    """
    attempts, time = np.zeros(len(starts), np.int64), np.zeros(len(starts))
    with np.errstate(all="ignore"):
        x, f = starts.copy(), loop.rhs(starts)
        h = _first_steps(x, f, integration)
        going = np.flatnonzero(np.isfinite(f).all(axis=1) & ~_ended(loop, target, integration, x) & (until > 0.0))
        for _ in range(most):
            if not len(going):
                break
            step = np.minimum(h[going], until[going] - time[going])
            y, slopes, squared = _attempt(loop, tableau, x[going], f[going], step, integration)
            attempts[going] += 1
            accepted = squared <= 1.0
            moved = going[accepted]
            x[moved], f[moved] = y[accepted], slopes[accepted]
            time[moved] += step[accepted]
            factor = np.clip(0.8 * np.maximum(squared, 1e-14) ** (-0.5 / tableau.error_order), 0.2, 5.0)
            h[going] = step * np.where(np.isnan(factor), 0.2, factor)
            over = _ended(loop, target, integration, x[going]) | (time[going] >= until[going] * (1 - 1e-12))
            over |= h[going] < 2.3e-16 * time[going] + 1e-18 * integration.longest
            going = going[~over]
    return Counted(attempts, time)


def _first_steps(x: Array, f: Array, integration: Integration) -> Array:
    weight = integration.atol + integration.rtol * np.abs(x)
    size, speed = ((x / weight) ** 2).sum(axis=1), ((f / weight) ** 2).sum(axis=1)
    usual = (size > 1e-10) & (speed > 1e-10)
    h = np.where(usual, 0.05 * np.sqrt(size / speed), 1e-6 * integration.longest)
    return np.clip(h, 1e-16 * integration.longest, integration.longest)


def _ended(loop: Loop, target: Target, integration: Integration, x: Array) -> NDArray[np.bool_]:
    outside = (np.abs(x - loop.centre) > loop.half_widths * integration.escape).any(axis=1)
    deviation = x - target.centre
    if target.P is not None:
        return np.asarray(outside | (np.einsum("mi,ij,mj->m", deviation, target.P, deviation) <= target.level))
    return np.asarray(outside | (np.linalg.norm(deviation / target.half_widths, axis=1) <= target.radius))


def _attempt(
    loop: Loop, tableau: Method, x: Array, f: Array, h: Array, integration: Integration
) -> tuple[Array, Array, Array]:
    """One step of every start: new states, slopes there, and the square of the error in units of the tolerance."""
    step = partial(_rosenbrock, tableau) if isinstance(tableau, RosenbrockTableau) else partial(_explicit, tableau)
    y, slopes, errors = step(loop, x, f, h[:, None])
    weight = integration.atol + integration.rtol * np.maximum(np.abs(x), np.abs(y))
    squares = [((error / weight) ** 2).mean(axis=1) for error in errors]
    if len(squares) == 1:
        return y, slopes, squares[0]
    both = squares[0] + 0.01 * squares[1]
    return y, slopes, np.where(squares[0] > 0.0, squares[0] ** 2 / both, squares[0])


def _explicit(tableau: Method, loop: Loop, x: Array, f: Array, h: Array) -> tuple[Array, Array, list[Array]]:
    assert not isinstance(tableau, RosenbrockTableau)
    k, y = [f], x
    for row in tableau.a[1:]:
        y = x + h * _combined(row, k)
        k.append(loop.rhs(y))
    return y, k[-1], [h * _combined(row, k) for row in tableau.e]


def _rosenbrock(tableau: Method, loop: Loop, x: Array, f: Array, h: Array) -> tuple[Array, Array, list[Array]]:
    assert isinstance(tableau, RosenbrockTableau)
    g = h * tableau.gamma
    try:
        inverse = np.linalg.inv(np.eye(loop.n) - g[:, :, None] * loop.jacobian(x))
    except np.linalg.LinAlgError:  # some matrix is singular: all steps are tried again, shorter
        return x, f, [np.full_like(x, np.nan)]
    u: list[Array] = []
    for a, c in zip(tableau.a, tableau.c, strict=True):
        slopes = loop.rhs(x + _combined(a, u)) if u else f
        right = g * slopes + (tableau.gamma * _combined(c, u) if u else 0.0)
        u.append(np.einsum("mij,mj->mi", inverse, right))
    y = x + _combined(tableau.m, u)
    return y, loop.rhs(y), [_combined(tableau.e, u)]


def _combined(weights: tuple[float, ...], rows: list[Array]) -> Array:
    return np.asarray(sum(weight * row for weight, row in zip(weights, rows, strict=False) if weight != 0.0))
