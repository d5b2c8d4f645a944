"""Claimed balls: the squared distance from the equilibrium as a V, and the sets that hold such a ball."""

from __future__ import annotations

from decimal import Decimal
from fractions import Fraction

import numpy as np

from roa.bound.definite import largest_eigenvalue
from roa.bound.lyapunov_function import LyapunovFunction, Quadratic
from roa.kernel.interval_arrays import IntervalArray
from roa.kernel.tape import enclose_number


def ball_function(V: LyapunovFunction, scale: tuple[Decimal, ...] | None) -> Quadratic:
    """Return the sum of (distance/scale)² over the states, about the same equilibrium as V."""
    n = V.loop.n
    lengths = [Fraction(1)] * n if scale is None else [Fraction(entry) for entry in scale]
    exact = tuple(tuple(1 / lengths[i] ** 2 if i == j else Fraction(0) for j in range(n)) for i in range(n))
    return Quadratic(V.loop, V.centre, np.array([[float(entry) for entry in row] for row in exact]), exact)


def holds_ellipsoid(outer: Quadratic, outer_level: float, inner: Quadratic, inner_level: Decimal) -> bool:
    """Whether {inner <= inner_level}, whose P is diagonal, is proved to lie in {outer <= outer_level}.

    With B = inner_level times the inverse of the inner P, the points of the inner set are B^(1/2) u, |u| <= 1, where
    the outer form is u'B^(1/2) P B^(1/2) u: its largest eigenvalue must not exceed the level. Both sets are about the
    same true equilibrium.
    """
    assert inner.exact is not None
    squares = [Fraction(inner_level) / row[i] for i, row in enumerate(inner.exact)]
    ends = np.array([enclose_number(square) for square in squares])
    axes = IntervalArray(np.nextafter(np.sqrt(ends[:, 0]), 0.0), np.nextafter(np.sqrt(ends[:, 1]), np.inf))
    form = (outer.enclosed_P * axes[None, :]) * axes[:, None]
    return largest_eigenvalue(form)[1] <= outer_level
