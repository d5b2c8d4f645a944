"""Compute the polynomials of roa/kernel/vector_math/: interpolation at Chebyshev nodes in 60 digits.

    python scripts/fit_vector_math.py

prints the coefficients from the highest power down, rounded to doubles, and the largest error in units of
2^-53 of the function that each polynomial serves. Interpolation at these nodes is within a small factor of
the best polynomial of its degree; one degree more would be cheaper than a better fit.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import mpmath

mpmath.mp.dps = 60
Function = Callable[[Any], Any]


def fit(function: Function, low: Any, high: Any, degree: int) -> list[float]:
    """Return the coefficients, highest power first, of the polynomial through degree + 1 Chebyshev nodes."""
    count = degree + 1
    nodes = [(low + high) / 2 + (high - low) / 2 * mpmath.cos(mpmath.pi * (k + 0.5) / count) for k in range(count)]
    powers = mpmath.matrix([[x ** (degree - j) for j in range(count)] for x in nodes])
    return [float(c) for c in mpmath.lu_solve(powers, mpmath.matrix([function(x) for x in nodes]))]


def series(coefficient: Function) -> Function:
    """Return the sum over j of coefficient(j) z^j, for |z| up to 0.6 or coefficients that fall fast."""
    return lambda z: mpmath.fsum(coefficient(j) * z**j for j in range(200))


def asin_coefficient(j: int) -> Any:
    """The coefficient of x^(2j + 3) in asin x."""
    k = j + 1
    return mpmath.binomial(2 * k, k) / (mpmath.mpf(4) ** k * (2 * k + 1))


def tanh_rest(z: Any) -> Any:
    """(tanh x / x - 1) / x² with z = x²."""
    x = mpmath.sqrt(z)
    return (mpmath.tanh(x) / x - 1) / z


HALF_LOG_TWO = mpmath.log(2) / 2 * mpmath.mpf("1.0001")
"""Half the width of the reduced argument of exp, with room for the rounding of the multiple."""
SMALL = (mpmath.sqrt(2) - 1) / (mpmath.sqrt(2) + 1)
"""The largest (m - 1)/(m + 1) of log, m in [√½, √2]."""

POLYNOMIALS: dict[str, tuple[Function, Any, Any, int, int]] = {
    # name: function, low, high, degree, power of the variable that multiplies it relative to the whole
    "exp": (series(lambda j: 1 / mpmath.factorial(j + 2)), -HALF_LOG_TWO, HALF_LOG_TWO, 9, 2),
    "sinh": (series(lambda j: 1 / mpmath.factorial(2 * j + 3)), mpmath.mpf(0), mpmath.mpf(1), 7, 1),
    "tanh": (tanh_rest, mpmath.mpf(0), mpmath.mpf("0.55") ** 2, 10, 1),
    "log": (series(lambda j: mpmath.mpf(2) / (2 * j + 3)), mpmath.mpf(0), SMALL**2, 6, 1),
    "power": (series(lambda j: mpmath.mpf(1) / (2 * j + 5)), mpmath.mpf(0), SMALL**2, 7, 2),
    "atan": (series(lambda j: mpmath.mpf(-1) ** (j + 1) / (2 * j + 3)), mpmath.mpf(0), mpmath.mpf("0.25"), 12, 1),
    "asin": (series(asin_coefficient), mpmath.mpf(0), mpmath.mpf("0.25"), 12, 1),
}


def main() -> None:
    """Print every polynomial and its error."""
    for name, (function, low, high, degree, power) in POLYNOMIALS.items():
        coefficients = fit(function, low, high, degree)
        points = [low + (high - low) * (k + mpmath.mpf("0.37")) / 300 for k in range(300)]
        error = max(abs((mpmath.polyval(coefficients, x) - function(x)) * x**power) for x in points)
        print(f"{name}: error {float(error * 2**53):.2g}")
        for coefficient in coefficients:
            print(f"    {coefficient!r}")


if __name__ == "__main__":
    main()
