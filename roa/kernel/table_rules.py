"""What a look-up table on a tape does to its operand: value, first and second derivative, as intervals.

A table is a block of CONSTANT rows, `COLUMNS` of them a piece: edge, origin, c0, c1, c2, c3, each the enclosure of an
exact fraction; the edges of the first piece and past the last are infinite, or the ends of the table where it is
refused beyond them.

A piece of a table is monotone (straight, or monotone by its construction), so that its values lie between those at
its ends. At a knot of a straight table the slope is Clarke's and the second derivative unbounded, as at every kink. A
PCHIP has a continuous slope there, and a second derivative that jumps between bounds: the hull of both sides serves
Taylor's form of second order, since along any line the slope of the whole formula is Lipschitz, and where the operand
stays on the knot its own slope is zero almost everywhere.
"""

from __future__ import annotations

import math
from typing import Any

from numpy.typing import NDArray

from roa.kernel.intervals import Interval, add, hull, multiply, subtract, undefined
from roa.kernel.machine_code import inner

Constants = NDArray[Any]

COLUMNS = 6
EDGE, ORIGIN, C0, C1, C2, C3 = range(COLUMNS)


@inner
def piecewise(
    a: float, b: float, constants: Constants, first: int, pieces: int, kinked: bool
) -> tuple[float, float, float, float, float, float]:
    """Value, first and second derivative of a table over [a, b]: (v, v', v'') as six floats, NaN where refused.

    Parameters
    ----------
    constants : float64 (rows, 2), enclosures of the tape's constants
    first, pieces : the row of the first edge, and how many pieces there are; one more edge follows
    kinked : whether the slope jumps at the edges
    """
    nan = math.nan
    # The ends themselves belong to a table that is refused beyond them.
    past = first + COLUMNS * pieces
    if undefined(a, b) or a < constants[first, 1] or b > constants[past, 0]:
        return nan, nan, nan, nan, nan, nan
    found = 0
    v, d, e = (nan, nan), (nan, nan), (nan, nan)
    for k in range(pieces):
        row = first + COLUMNS * k
        begin, end = constants[row, 0], constants[row + COLUMNS, 1]
        # A box that ends on an edge has almost all of its points on one side; a point there belongs to both.
        if (a < b and begin < b and a < end) or (a == b and begin <= b and a <= end):
            value, slope, curve = _piece(a, b, constants, row)
            if found == 0:
                v, d, e = value, slope, curve
            else:
                # At a single point both sides have the same value, and one may know it exactly.
                v = (max(v[0], value[0]), min(v[1], value[1])) if a == b else hull(v[0], v[1], *value)
                d, e = hull(d[0], d[1], *slope), hull(e[0], e[1], *curve)
            found += 1
    if kinked and found > 1:
        e = (-math.inf, math.inf)
    return v[0], v[1], d[0], d[1], e[0], e[1]


@inner
def _piece(a: float, b: float, constants: Constants, row: int) -> tuple[Interval, Interval, Interval]:
    """One piece over its part of [a, b]."""
    last = row + COLUMNS
    origin = constants[row + ORIGIN, 0], constants[row + ORIGIN, 1]
    # Where the part begins and ends, less the origin: the edges are known within their enclosures.
    begin = subtract(max(a, constants[row, 0]), max(a, constants[row, 1]), origin[0], origin[1])
    end = subtract(min(b, constants[last, 0]), min(b, constants[last, 1]), origin[0], origin[1])
    value = hull(*_cubic(begin, constants, row), *_cubic(end, constants, row))
    second = multiply(2.0, 2.0, constants[row + C2, 0], constants[row + C2, 1])
    third = multiply(6.0, 6.0, constants[row + C3, 0], constants[row + C3, 1])
    curve = add(*second, *multiply(*third, begin[0], end[1]))
    slope = _slope(begin, constants, row)
    if curve[0] >= 0.0 or curve[1] <= 0.0:
        slope = hull(*slope, *_slope(end, constants, row))
    else:
        way = subtract(begin[0], end[1], *begin)
        slope = add(*slope, *multiply(*curve, *way))
    return value, slope, curve


@inner
def _cubic(u: Interval, constants: Constants, row: int) -> Interval:
    v = constants[row + C3, 0], constants[row + C3, 1]
    for k in (C2, C1, C0):
        v = add(constants[row + k, 0], constants[row + k, 1], *multiply(*v, *u))
    return v


@inner
def _slope(u: Interval, constants: Constants, row: int) -> Interval:
    inner_term = multiply(3.0, 3.0, constants[row + C3, 0], constants[row + C3, 1])
    twice = multiply(2.0, 2.0, constants[row + C2, 0], constants[row + C2, 1])
    v = add(*twice, *multiply(*inner_term, *u))
    return add(constants[row + C1, 0], constants[row + C1, 1], *multiply(*v, *u))
