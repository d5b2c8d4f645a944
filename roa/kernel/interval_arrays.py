"""Arrays of intervals for the few steps around the compiled enclosures, by numpy with outward rounding."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from decimal import Decimal
from fractions import Fraction
from typing import Any

import numpy as np
from numpy.typing import NDArray

from roa.kernel.tape import enclose_number

Array = NDArray[np.float64]

UNIT_ROUNDOFF = 2.0**-53
UNDERFLOW = 1e-300


def _down(r: Array) -> Array:
    return np.nextafter(r, -np.inf)


def _up(r: Array) -> Array:
    return np.nextafter(r, np.inf)


@dataclass(frozen=True)
class IntervalArray:
    """Intervals [low, high], elementwise; NaN ends mean undefined, infinite ends unbounded.

    Attributes
    ----------
    low, high : float64 of equal shape
    """

    low: Array
    high: Array

    __array_ufunc__ = None  # lets `float_array * intervals` reach the methods here

    @classmethod
    def exact(cls, values: Any) -> IntervalArray:
        """Floats that are meant exactly as they are."""
        array = np.asarray(values, dtype=np.float64)
        return cls(array, array)

    @classmethod
    def numbers(cls, values: Iterable[Decimal | Fraction | float]) -> IntervalArray:
        """Smallest enclosures of exact numbers, shape (k,)."""
        pairs = np.array([enclose_number(value) for value in values]).reshape(-1, 2)
        return cls(pairs[:, 0], pairs[:, 1])

    @property
    def shape(self) -> tuple[int, ...]:
        """Shape of the array."""
        return self.low.shape

    @property
    def middle(self) -> Array:
        """Float midpoints; NaN where an end is infinite."""
        with np.errstate(invalid="ignore", over="ignore"):
            return self.low + (self.high - self.low) / 2

    @property
    def magnitude(self) -> Array:
        """Largest absolute value in each interval; NaN where undefined."""
        return np.maximum(np.abs(self.low), np.abs(self.high))

    @property
    def T(self) -> IntervalArray:
        """Transpose of each matrix of a stack."""
        return IntervalArray(np.swapaxes(self.low, -1, -2), np.swapaxes(self.high, -1, -2))

    def reshape(self, *shape: int) -> IntervalArray:
        """Return the same intervals in another shape."""
        return IntervalArray(self.low.reshape(shape), self.high.reshape(shape))

    def __getitem__(self, index: Any) -> IntervalArray:
        return IntervalArray(self.low[index], self.high[index])

    def __neg__(self) -> IntervalArray:
        return IntervalArray(-self.high, -self.low)

    def __add__(self, other: IntervalArray | Array | float) -> IntervalArray:
        other = _intervals(other)
        return IntervalArray(_down(self.low + other.low), _up(self.high + other.high))

    __radd__ = __add__

    def __sub__(self, other: IntervalArray | Array | float) -> IntervalArray:
        return self + (-_intervals(other))

    def __rsub__(self, other: Array | float) -> IntervalArray:
        return _intervals(other) - self

    def __mul__(self, other: IntervalArray | Array | float) -> IntervalArray:
        other = _intervals(other)
        pairs = [(self.low, other.low), (self.low, other.high), (self.high, other.low), (self.high, other.high)]
        with np.errstate(invalid="ignore", over="ignore"):
            products = [np.where((a == 0) | (b == 0), 0.0 * (_nan(a) + _nan(b)), a * b) for a, b in pairs]
        low, high = np.minimum.reduce(products), np.maximum.reduce(products)
        return IntervalArray(_down(low), _up(high))

    __rmul__ = __mul__

    def __matmul__(self, other: IntervalArray | Array) -> IntervalArray:
        """Matrix product by midpoints and radii (Rump 1999), with the a-priori bound of its rounding errors.

        Sound for any order of summation and with fused operations, so a tuned library may do the work.
        """
        return _product(self, _intervals(other))

    def __rmatmul__(self, other: Array) -> IntervalArray:
        return _product(_intervals(other), self)

    def squared(self) -> IntervalArray:
        """Squares: both factors are the same number, so that none is negative."""
        low, high = np.abs(self.low), np.abs(self.high)
        nearest = np.where((self.low <= 0) & (self.high >= 0), 0.0, np.minimum(low, high))
        return IntervalArray(np.maximum(_down(nearest * nearest), 0.0), _up(np.maximum(low, high) ** 2))

    def inside(self, other: IntervalArray) -> bool:
        """Say whether every interval lies in the interior of the other's."""
        return bool(np.all((other.low < self.low) & (self.high < other.high)))

    def intersect(self, other: IntervalArray) -> IntervalArray:
        """Common part of two enclosures of the same numbers; where one is NaN, the other alone."""
        return IntervalArray(np.fmax(self.low, other.low), np.fmin(self.high, other.high))


def _intervals(value: IntervalArray | Array | float) -> IntervalArray:
    return value if isinstance(value, IntervalArray) else IntervalArray.exact(value)


def _nan(a: Array) -> Array:
    """Zero, or NaN where a is NaN: zero times an infinite end is zero, zero times undefined is undefined."""
    return np.where(np.isnan(a), np.nan, 0.0)


def _product(a: IntervalArray, b: IntervalArray) -> IntervalArray:
    with np.errstate(invalid="ignore", over="ignore"):
        a_middle, b_middle = a.middle, b.middle
        a_radius = _up(np.maximum(_up(a.high - a_middle), _up(a_middle - a.low)))
        b_radius = _up(np.maximum(_up(b.high - b_middle), _up(b_middle - b.low)))
        middle = a_middle @ b_middle
        terms = a.shape[-1] + 4
        sizes = np.abs(a_middle) @ np.abs(b_middle)
        spread = np.abs(a_middle) @ b_radius + a_radius @ (np.abs(b_middle) + b_radius)
        # The sums of non-negative terms err by less than terms * 2^-53 of themselves; doubled for what is left out.
        radius = (spread + 2 * terms * UNIT_ROUNDOFF * (sizes + spread)) * (1 + 4 * terms * UNIT_ROUNDOFF)
        radius = radius + terms * UNDERFLOW
        return IntervalArray(_down(middle - radius), _up(middle + radius))
