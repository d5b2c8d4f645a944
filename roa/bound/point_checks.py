"""What can be verified about single points and matrices: the facts on which a claim is refuted."""

from __future__ import annotations

from decimal import Decimal
from fractions import Fraction
from typing import Any

import numpy as np
from numpy.typing import NDArray

from roa.bound.definite import definiteness
from roa.bound.equilibrium_enclosure import enclose_equilibrium
from roa.bound.lyapunov_function import LyapunovFunction, Quadratic
from roa.bound.sampled_function import SampledQuadratic
from roa.bound.sampled_proof import SampledProver
from roa.kernel.enclosure import enclose
from roa.kernel.interval_arrays import IntervalArray
from roa.kernel.tape import Tape

Array = NDArray[np.float64]


def member(V: LyapunovFunction, level: Decimal | Fraction | float, x: Array) -> bool:
    """Whether V(x) <= level holds for certain at the float point x (n,), in exact numbers.

    Of a V given as a formula this says nothing about the connected part in which x lies.
    """
    value, _ = _value_and_decrease(V, x)
    return bool(value.high <= IntervalArray.numbers([level]).low[0])


def decrease_witness(V: LyapunovFunction, x: Array) -> bool:
    """Whether V̇ > 0 holds for certain at the float point x (n,): V is no Lyapunov function there.

    With a hold: whether V is greater one period after a start there.
    """
    if V.loop.hold is not None:
        return isinstance(V, SampledQuadratic) and SampledProver(V).increases_at(x)
    _, decrease = _value_and_decrease(V, x)
    return bool(decrease.low > 0)


def positive_definite(P: Any) -> str:
    """Say whether a symmetric matrix is positive definite: "proved", "refuted" or "undecided".

    Parameters
    ----------
    P : n rows of n floats or exact numbers, or an IntervalArray (n, n)
    """
    if not isinstance(P, IntervalArray):
        n = len(P)
        P = IntervalArray.numbers(entry for row in P for entry in row).reshape(n, n)
    return definiteness(P)


def _value_and_decrease(V: LyapunovFunction, x: Array) -> tuple[IntervalArray, IntervalArray]:
    """Enclose V and V̇ at the point x; NaN, which satisfies nothing, where the equilibrium cannot be enclosed."""
    loop = V.loop
    tape = Tape(loop.n)
    names = tape.loop(loop, range(loop.n))
    if isinstance(V, Quadratic):
        root = enclose_equilibrium(loop, V.centre)
        if root is None:
            undefined = IntervalArray.exact(np.nan)
            return undefined, undefined
        row = _quadratic(tape, V, root.x)
    else:
        row = tape.expression(V.tree, names)
    program = tape.program([row, *(tape.expression(tree, names) for tree in loop.dynamics)])
    point = np.asarray(x, dtype=np.float64)[None]
    at = enclose(program, point, point, order=1)
    return at.value[0, 0], (at.gradient[:, 0] @ at.value[0, 1:, None])[0, 0]


def _quadratic(tape: Tape, V: Quadratic, centre: IntervalArray) -> int:
    """Row of (x - centre)'P(x - centre), with the states as the tape's variables."""
    P, n = V.enclosed_P, V.loop.n
    y = [tape.subtract(i, tape.interval(centre.low[i], centre.high[i])) for i in range(n)]
    rows = [
        tape.weighted([tape.interval(low, high) for low, high in zip(P.low[i], P.high[i], strict=True)], y)
        for i in range(n)
    ]
    return tape.weighted(y, rows)
