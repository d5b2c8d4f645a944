"""Levels of V whose set stays within the limits on states and signals, by interval branch and bound.

A limit that the formula itself keeps, such as torque = [-60, 60] on clip(demand, -60, 60), is seen in its exact
decimal numbers: an enclosure of the clipped value reaches up to the limit, and never proves to lie below it. What is
left to prove there is that the value is a number at all, which it is where an end far beyond the limit is not reached.
"""

from __future__ import annotations

from collections.abc import Iterable, Iterator
from decimal import Decimal

from roa.bound.level_proof import Level, LevelProver, Side
from roa.bound.lyapunov_function import Quadratic
from roa.kernel.branch_and_bound import Answer
from roa.loop.expression import Call, Expression, Name, Negate, Number
from roa.loop.model import Loop

BOXES = 4000  # for one end of one limit at one level
HALVINGS = 24  # of the half-extent of the set


class LimitProver:
    """Proofs that {V <= level} stays within the limits of its loop.

    Parameters
    ----------
    V : Quadratic
    """

    def __init__(self, V: Quadratic) -> None:
        self._prover = LevelProver(V)
        self._sides = list(_sides(V.loop))

    def holds(self, level: Level) -> bool:
        """Whether it is proved that every limited value is within its limits all over {V <= level}."""
        proofs = (self._prover.keeps(side, level, BOXES) for side in self._sides)
        return all(answer is Answer.PROVED for answer in proofs)

    def largest(self, level: float) -> float:
        """The largest level up to `level` that is proved to hold, to some millionths; 0.0 where there is none."""
        if self.holds(level):
            return level
        low, high = 0.0, 1.0
        for _ in range(HALVINGS):
            middle = (low + high) / 2
            low, high = (middle, high) if self.holds(level * middle**2) else (low, middle)
        return level * low**2


def _sides(loop: Loop) -> Iterator[Side]:
    """The ends of the limits; far beyond where the formula keeps the value by itself, wherever it is a number."""
    for name, (low, high) in loop.limits.items():
        lowest, highest = _kept_by_formula(Name(name), loop)
        kept = highest is not None and highest <= high
        yield Side(name, high + _far(high) if kept else high, 1)
        kept = lowest is not None and lowest >= low
        yield Side(name, low - _far(low) if kept else low, -1)


def _far(end: Decimal) -> Decimal:
    return max(abs(end), Decimal(1))


def _kept_by_formula(tree: Expression, loop: Loop) -> tuple[Decimal | None, Decimal | None]:
    """The ends, exact, between which the outermost clip, min or max of a formula keeps its value; None for none."""
    match tree:
        case Name(name) if name in loop.signals:
            return _kept_by_formula(loop.signals[name], loop)
        case Call("clip", (_, low, high)):
            lowest, highest = _constant(low, loop), _constant(high, loop)
            if lowest is None or highest is None:
                return None, highest  # min(max(x, low), high) is below `low` where `high` is
            return min(lowest, highest), highest
        case Call("min", (first, second)):
            return None, min(_constants((first, second), loop), default=None)
        case Call("max", (first, second)):
            return max(_constants((first, second), loop), default=None), None
    return None, None


def _constants(trees: Iterable[Expression], loop: Loop) -> list[Decimal]:
    return [value for tree in trees if (value := _constant(tree, loop)) is not None]


def _constant(tree: Expression, loop: Loop) -> Decimal | None:
    """The exact value of a number or a parameter, or None."""
    match tree:
        case Number(value):
            return value
        case Name(name) if name in loop.parameters and name not in loop.disturbances:
            return loop.parameters[name].value
        case Name(name) if name in loop.signals:
            return _constant(loop.signals[name], loop)
        case Negate(operand):
            return next((-value for value in _constants((operand,), loop)), None)
    return None
