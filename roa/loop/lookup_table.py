"""Look-up tables: a curve through measured points, used in formulas as lookup(table, x).

The curve is a row of pieces, each a polynomial in the distance from its origin. Their coefficients are fractions
of the decimals of the file, exactly, so that a proof can enclose the curve itself; the floats are made from them.
"""

from __future__ import annotations

from dataclasses import dataclass
from decimal import Decimal
from fractions import Fraction
from functools import cached_property
from itertools import pairwise
from typing import Any

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]

KINDS = ("linear", "pchip")
BEYOND = ("linear", "refuse")


@dataclass(frozen=True)
class Piece:
    """Part of a curve, from its edge up to the edge of the next piece.

    Attributes
    ----------
    edge : where the piece begins, None for the first, which has no beginning
    origin : the x from which u = x - origin is counted
    coefficients : c0, c1, c2, c3 of c0 + c1 u + c2 u^2 + c3 u^3
    """

    edge: Fraction | None
    origin: Fraction
    coefficients: tuple[Fraction, Fraction, Fraction, Fraction]


@dataclass(frozen=True)
class LookupTable:
    """Measured points and how they are joined.

    Attributes
    ----------
    name : str
    x : two or more decimals, rising
    y : as many decimals
    kind : "linear", or "pchip" (monotone cubic)
    beyond : beyond the ends "linear", along the slope at the end, or "refuse"
    """

    name: str
    x: tuple[Decimal, ...]
    y: tuple[Decimal, ...]
    kind: str = "linear"
    beyond: str = "linear"

    def __hash__(self) -> int:
        # Trees with a table in them are looked up often, and a table may be long.
        return hash((self.name, len(self.x)))

    @property
    def refuses(self) -> bool:
        """Whether the curve ends with its points."""
        return self.beyond == "refuse"

    @cached_property
    def pieces(self) -> tuple[Piece, ...]:
        """The curve from left to right; the first and the last go on for ever, refused or not.

        The continuation of a straight end piece is no piece of its own, so that nothing looks like a kink there.
        """
        x, y = [Fraction(value) for value in self.x], [Fraction(value) for value in self.y]
        secants = [(y[i + 1] - y[i]) / (x[i + 1] - x[i]) for i in range(len(x) - 1)]
        slopes = _slopes(x, secants) if self.kind == "pchip" else None
        inner = [Piece(x[i], x[i], _coefficients(x, y, secants, slopes, i)) for i in range(len(secants))]
        if slopes is None or self.refuses:
            return (Piece(None, x[0], inner[0].coefficients), *inner[1:])
        zero = Fraction(0)
        first = Piece(None, x[0], (y[0], slopes[0], zero, zero))
        return (first, *inner, Piece(x[-1], x[-1], (y[-1], slopes[-1], zero, zero)))

    @cached_property
    def edges(self) -> Array:
        """Edges between the pieces as floats, one less than there are pieces, rising."""
        return np.array([float(piece.edge) for piece in self.pieces if piece.edge is not None])

    @cached_property
    def numbers(self) -> Array:
        """Origin and coefficients of every piece as floats, float64 (pieces, 5)."""
        return np.array([[float(number) for number in (piece.origin, *piece.coefficients)] for piece in self.pieces])

    def value(self, x: Any) -> Any:
        """The curve at the points x, float64 (...); NaN where it is refused."""
        u, (c0, c1, c2, c3) = self._local(x)
        return np.where(self.leaves(x), np.nan, c0 + u * (c1 + u * (c2 + u * c3)))

    def slope(self, x: Any) -> Any:
        """The slope of the curve at the points x, float64 (...); at a kink that of its right side."""
        u, (_, c1, c2, c3) = self._local(x)
        return np.where(self.leaves(x), np.nan, c1 + u * (2.0 * c2 + u * (3.0 * c3)))

    def leaves(self, x: Any) -> Any:
        """Whether the curve is refused at the points x, bool (...)."""
        return self.refuses & ((x < float(self.x[0])) | (x > float(self.x[-1])))

    def _local(self, x: Any) -> tuple[Any, Any]:
        numbers = self.numbers[np.searchsorted(self.edges, x, side="right")]
        return x - numbers[..., 0], np.moveaxis(numbers[..., 1:], -1, 0)


def _slopes(x: list[Fraction], secants: list[Fraction]) -> list[Fraction]:
    """Slopes at the points that keep the curve monotone wherever the points are.

    Source: F. N. Fritsch, J. Butland, A method for constructing local monotone piecewise cubic interpolants, SIAM J.
    Sci. Stat. Comput. 5 (1984) 300-304; ends by the three-point formula of C. Moler, Numerical Computing with
    MATLAB, 2004, 3.6, cut so that they stay monotone (both from memory). scipy's PchipInterpolator has the same.
    """
    if len(secants) == 1:
        return [secants[0], secants[0]]
    steps = [after - before for before, after in pairwise(x)]
    slopes = [_end_slope(steps[0], steps[1], secants[0], secants[1])]
    for i in range(1, len(secants)):
        before, after = secants[i - 1], secants[i]
        if before * after <= 0:
            slopes.append(Fraction(0))
            continue
        one, other = 2 * steps[i] + steps[i - 1], steps[i] + 2 * steps[i - 1]
        slopes.append((one + other) / (one / before + other / after))
    return [*slopes, _end_slope(steps[-1], steps[-2], secants[-1], secants[-2])]


def _end_slope(step: Fraction, next_step: Fraction, secant: Fraction, next_secant: Fraction) -> Fraction:
    slope = ((2 * step + next_step) * secant - step * next_secant) / (step + next_step)
    if slope * secant <= 0:
        return Fraction(0)
    return 3 * secant if secant * next_secant < 0 and abs(slope) > abs(3 * secant) else slope


def _coefficients(
    x: list[Fraction], y: list[Fraction], secants: list[Fraction], slopes: list[Fraction] | None, i: int
) -> tuple[Fraction, Fraction, Fraction, Fraction]:
    """Return the cubic between the points i and i + 1 with the given slopes there, or the straight line."""
    if slopes is None:
        return y[i], secants[i], Fraction(0), Fraction(0)
    step, secant, left, right = x[i + 1] - x[i], secants[i], slopes[i], slopes[i + 1]
    return y[i], left, (3 * secant - 2 * left - right) / step, (left + right - 2 * secant) / step**2
