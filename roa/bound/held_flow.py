"""What is certain about a trajectory while the commands are held: where it goes, and how good its polynomial is.

With y = x - x* and v = u - u* from the equilibrium, all bounds are by non-negative matrices:
    |y(t)| <= growth (|y(0)|; |v|),        |x(h) - polynomial of degree K at h| <= remainder (|y(0)|; |v|).
Growth: f(x*, u*) = 0, so |y|' <= C|y| + D|v| with C, D the largest slopes over a box that holds the trajectories, and
|y(t)| is at most the solution of that linear comparison system. Remainder: the coefficient of order K + 1 vanishes at
(x*, u*) too, so at the intermediate time of Lagrange's form it is at most its slopes times (|y|; |v|) there. A bound
by a plain norm would not vanish at the equilibrium, and nothing could be proved next to it.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from decimal import Decimal

import numpy as np
from numpy.typing import NDArray

from roa.kernel.enclosure import enclose
from roa.kernel.flow_series import FlowSeries
from roa.kernel.interval_arrays import IntervalArray
from roa.kernel.tape import Program, Tape, enclose_number
from roa.loop.model import Loop

Array = NDArray[np.float64]

PARTS = (1, 2, 4, 8, 16, 32)  # of a stretch that are enclosed one after the other
WIDENINGS, WIDER = 12, 0.1
TERMS = 30  # of the exponential


@dataclass(frozen=True)
class Held:
    """The plant about its equilibrium, as programs in the variables (x, u).

    Attributes
    ----------
    loop : Loop, with a hold
    x, u : IntervalArray (n,), (m,), hold the equilibrium and its commands
    """

    loop: Loop
    x: IntervalArray
    u: IntervalArray

    @property
    def rest(self) -> IntervalArray:
        """(x*, u*) together."""
        return joined(self.x, self.u)

    def series(self) -> tuple[Tape, FlowSeries]:
        """Tape in (x, u) with the Taylor coefficients of x(t)."""
        assert self.loop.hold is not None
        n, signals = self.loop.n, self.loop.hold.signals
        tape = Tape(n + len(signals))
        held = {name: tape.variable(n + j) for j, name in enumerate(signals)}
        return tape, FlowSeries(tape, self.loop, list(range(n)), held)


@dataclass(frozen=True)
class Stretch:
    """Bounds over one stretch of time with the commands held; see the head of the file.

    Attributes
    ----------
    tube : IntervalArray (n,), holds all trajectories all the time
    growth : float64 (n, n + m), holds for every t of the stretch; its first n columns bound dx(t)/dx(0) as well
    time : float, upper bound of the length, s
    box : IntervalArray (n + m,), tube and commands
    """

    tube: IntervalArray
    growth: Array
    time: float
    box: IntervalArray

    def remainder(self, coefficient: Program, order: int) -> Array:
        """The matrix `remainder` (n, n + m) of the polynomial below the order, from the coefficient of the order."""
        G = enclose(coefficient, self.box.low[None], self.box.high[None], order=1).gradient[0].magnitude
        n = len(self.growth)
        size = G.shape[1]
        there = np.concatenate([self.growth, np.eye(size)[n:]])
        power = 1.0
        for _ in range(order):
            power = float(np.nextafter(power * self.time, np.inf))
        return product(np.nextafter(power * G, np.inf), there)


def product(*factors: Array) -> Array:
    """Product of non-negative matrices, rounded up."""
    result = IntervalArray.exact(factors[0])
    for factor in factors[1:]:
        result = IntervalArray.exact((result @ IntervalArray.exact(factor)).high)
    return result.high


def joined(*parts: IntervalArray) -> IntervalArray:
    """Vectors of intervals one after the other."""
    return IntervalArray(np.concatenate([part.low for part in parts]), np.concatenate([part.high for part in parts]))


def hull(parts: Iterable[IntervalArray]) -> IntervalArray:
    """Smallest box that holds all of the boxes."""
    found = list(parts)
    return IntervalArray(
        np.minimum.reduce([part.low for part in found]), np.maximum.reduce([part.high for part in found])
    )


def follow(held: Held, start: IntervalArray, commands: IntervalArray, time: Decimal) -> Stretch | None:
    """Enclose all trajectories from a box of starts under a box of commands, each held; None where that fails.

    Both boxes are widened to hold the equilibrium and its commands.
    """
    tape, series = held.series()
    f = tape.program(series.coefficient(1))
    start, commands = hull([start, held.x]), hull([commands, held.u])
    length = enclose_number(time)[1]
    tube = _tube(f, start, commands, length)
    if tube is None:
        return None
    box = joined(tube, commands)
    slopes = enclose(f, box.low[None], box.high[None], order=1).gradient[0].magnitude
    if not np.isfinite(slopes).all():
        return None
    square = np.concatenate([slopes, np.zeros((len(commands.low), slopes.shape[1]))])
    E = _exponential(np.nextafter(square * length, np.inf))
    return None if E is None else Stretch(tube, E[: held.loop.n], length, box)


def _tube(f: Program, start: IntervalArray, commands: IntervalArray, time: float) -> IntervalArray | None:
    for parts in PARTS:
        step = float(np.nextafter(time / parts, np.inf))
        box, passed = start, [start]
        for _ in range(parts):
            found = _picard(f, box, commands, step)
            if found is None:
                break
            passed.append(found[0])
            box = found[1]
        else:
            return hull(passed)
    return None


def _picard(
    f: Program, start: IntervalArray, commands: IntervalArray, step: float
) -> tuple[IntervalArray, IntervalArray] | None:
    """A box that holds x(t) for t in [0, step], and one for x(step).

    If start + [0, step] f(B) lies inside B, then every solution from start stays in it that long (Picard-Lindelöf).
    """
    while_held = IntervalArray(np.zeros(len(start.low)), np.full(len(start.low), step))

    def slopes(box: IntervalArray) -> IntervalArray:
        both = joined(box, commands)
        return enclose(f, both.low[None], both.high[None], order=0).value[0]

    box = start
    for _ in range(WIDENINGS):
        image = start + while_held * slopes(box)
        if not (np.isfinite(image.low).all() and np.isfinite(image.high).all()):
            return None
        if image.inside(box):
            return image, start + step * slopes(image)
        both = hull([image, start])
        wider = WIDER * (both.high - both.low) + 1e-300
        box = IntervalArray(both.low - wider, both.high + wider)
    return None


def _exponential(M: Array) -> Array | None:
    """Upper bound of e^M for a non-negative matrix: its series, and a geometric bound of what is left out."""
    norm = float(np.nextafter(M.sum(axis=1).max() * (1 + 1e-14), np.inf))
    if not norm < TERMS / 2:
        return None
    result = term = np.eye(len(M))
    size = 1.0
    for k in range(1, TERMS + 1):
        term = np.nextafter(product(term, M) / k, np.inf)
        result = np.nextafter(result + term, np.inf)
        size = float(np.nextafter(np.nextafter(size * norm, np.inf) / k, np.inf))
    # The next terms are at most size norm/(TERMS + 1), and each at most half of the one before.
    return np.asarray(np.nextafter(result + 2 * size, np.inf))
