"""Whether V stays within a level all along a straight line, by interval arithmetic."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from roa.bound.lyapunov_function import FormulaV
from roa.kernel.enclosure import enclose
from roa.kernel.tape import Program, Tape

Array = NDArray[np.float64]

# Halvings of the pieces that are not yet decided, and most pieces at once; beyond, nothing is verified.
HALVINGS, MOST_PIECES = 60, 4096
# The first piece is widened by this part of the domain, which covers how far Newton is off the true equilibrium.
ABOUT_EQUILIBRIUM = 1e-9


def segment_inside(V: FormulaV, level: float, x: Array) -> bool:
    """Whether V <= level is verified on the straight line from the equilibrium to x, float64 (n,).

    True shows that x lies in the connected part of {V <= level} that holds the equilibrium. False shows nothing: the
    line may leave a set that is connected some other way.
    """
    program = _program(V)
    low, high = np.zeros(1), np.ones(1)
    for _ in range(HALVINGS):
        value = enclose(program, *_boxes(V, x, low, high), order=0).value.high[:, 0]
        undecided = ~(value <= level)
        if not undecided.any():
            return True
        low, high = low[undecided], high[undecided]
        middle = (low + high) / 2
        low, high = np.concatenate([low, middle]), np.concatenate([middle, high])
        if len(low) > MOST_PIECES:
            break
    return False


def _program(V: FormulaV) -> Program:
    tape = Tape(V.loop.n)
    names = tape.loop(V.loop, range(V.loop.n))
    return tape.program([tape.expression(V.tree, names)])


def _boxes(V: FormulaV, x: Array, low: Array, high: Array) -> tuple[Array, Array]:
    """Boxes about the pieces from part `low` to part `high` of the line, float64 (m,) -> twice (m, n)."""
    ends = [V.centre + part[:, None] * (x - V.centre) for part in (low, high)]
    rounding = 4 * np.finfo(float).eps * (np.abs(V.centre) + np.abs(x))
    margin = np.where(low[:, None] == 0.0, ABOUT_EQUILIBRIUM * V.loop.half_widths, rounding)
    return np.minimum(*ends) - margin, np.maximum(*ends) + margin
