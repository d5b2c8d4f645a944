"""Enclosures of look-up tables hold the exact curve: fractions of the decimals, worked out one point at a time."""

from decimal import Decimal
from fractions import Fraction

import numpy as np
import pytest

from roa.kernel.enclosure import enclose
from roa.kernel.tape import Tape
from roa.loop.expression import Binary, Lookup, Name, Number
from roa.loop.lookup_table import LookupTable

X, Y = Name("x"), Name("y")


def table(x, y, kind="linear", beyond="linear"):
    return LookupTable("curve", tuple(map(Decimal, x)), tuple(map(Decimal, y)), kind, beyond)


def random_table(rng, kind, beyond="linear"):
    points = 2 + rng.integers(0, 9)
    x = np.unique(rng.integers(-300, 300, points + 2))[: points + 1]
    y = rng.integers(-40, 40, len(x))
    if rng.random() < 0.4:
        y = np.sort(y)
    return table([f"{v}e-2" for v in x], [f"{v}e-1" for v in y], kind, beyond)


def exact(curve, x):
    """Value, slope and second derivative at a fraction, by the right side at a knot."""
    piece = [p for p in curve.pieces if p.edge is None or p.edge <= x][-1]
    u, (c0, c1, c2, c3) = x - piece.origin, piece.coefficients
    return c0 + u * (c1 + u * (c2 + u * c3)), c1 + u * (2 * c2 + 3 * c3 * u), 2 * c2 + 6 * c3 * u


def over(tree, low, high, order=2):
    tape = Tape(2)
    program = tape.program([tape.expression(tree, {"x": 0, "y": 1})])
    result = enclose(program, np.array([low], dtype=float), np.array([high], dtype=float), order)
    return result.value[0, 0], result.gradient[0, 0], result.hessian[0, 0]


def holds(interval, number):
    low, high = float(interval.low), float(interval.high)
    return (low == -np.inf or Fraction(low) <= number) and (high == np.inf or number <= Fraction(high))


@pytest.mark.parametrize("kind", ["linear", "pchip"])
def test_every_point_of_a_box_is_enclosed(kind):
    rng = np.random.default_rng(3)
    for _ in range(150):
        curve = random_table(rng, kind)
        knots = [float(v) for v in curve.x]
        # Ends on knots, beside them and beyond all of them; points as well as boxes.
        ends = rng.choice([*knots, *rng.uniform(-4, 4, 4), np.nextafter(knots[0], 9), np.nextafter(knots[-1], -9)], 2)
        low, high = min(ends), max(ends)
        if rng.random() < 0.3:
            high = min(high, low + 10.0 ** rng.uniform(-15, -1))
        value, gradient, hessian = over(Lookup(curve, X), [low, 0], [high, 0])
        inside = [low, high, *(knot for knot in knots if low < knot < high), *rng.uniform(low, high, 30)]
        for point in inside:
            v, slope, second = exact(curve, Fraction(float(min(max(point, low), high))))
            assert holds(value, v)
            if low < point < high or low == high:
                assert holds(gradient[0], slope)
                assert holds(hessian[0, 0], second)
        assert float(gradient.high[1]) == 0.0


def test_values_are_close_where_the_curve_is_monotone():
    curve = table(["-1", "0", "0.5", "2"], ["-3", "0", "0.1", "4"], "pchip")
    value, _, _ = over(Lookup(curve, X), [-0.7, 0], [1.1, 0])
    assert value.low == pytest.approx(curve.value(-0.7), abs=1e-14)
    assert value.high == pytest.approx(curve.value(1.1), abs=1e-14)


def test_a_kink_has_the_slopes_of_both_sides_and_no_curvature():
    curve = table(["-1", "0", "1"], ["-1", "0", "3"])
    _, gradient, hessian = over(Lookup(curve, X), [-0.1, 0], [0.1, 0])
    assert (gradient.low[0], gradient.high[0]) == (1.0, 3.0)
    assert (hessian.low[0, 0], hessian.high[0, 0]) == (-np.inf, np.inf)
    # A box that ends on the kink has one side of it.
    for low, high, slope in ((-0.1, 0.0, 1.0), (0.0, 0.1, 3.0)):
        _, gradient, hessian = over(Lookup(curve, X), [low, 0], [high, 0])
        assert (gradient.low[0], gradient.high[0]) == (slope, slope)
        assert (hessian.low[0, 0], hessian.high[0, 0]) == (0.0, 0.0)
    # The point itself belongs to both.
    _, gradient, _ = over(Lookup(curve, X), [0.0, 0], [0.0, 0])
    assert (gradient.low[0], gradient.high[0]) == (1.0, 3.0)


def test_the_second_derivative_of_a_pchip_is_bounded_across_a_knot():
    curve = table(["-1", "0", "1"], ["-1", "0", "3"], "pchip")
    _, gradient, hessian = over(Lookup(curve, X), [-0.1, 0], [0.1, 0])
    assert gradient.high[0] - gradient.low[0] < 1.0
    assert np.isfinite([hessian.low[0, 0], hessian.high[0, 0]]).all()
    sides = [exact(curve, Fraction(s, 10**9))[2] for s in (-1, 1)]
    assert hessian.low[0, 0] <= min(sides) < max(sides) <= hessian.high[0, 0]


@pytest.mark.parametrize("kind", ["linear", "pchip"])
def test_a_table_refused_beyond_its_ends_is_undefined_there_and_nowhere_else(kind):
    curve = table(["-1", "0", "2.5"], ["-1", "0", "3"], kind, "refuse")
    for low, high in ((-1.0, 2.5), (-1.0, -1.0), (2.5, 2.5), (0.5, 0.6)):
        assert np.isfinite(over(Lookup(curve, X), [low, 0], [high, 0])[0].low)
    for low, high in ((np.nextafter(-1, -2), 0.0), (0.0, np.nextafter(2.5, 3)), (3.0, 4.0)):
        value, gradient, _ = over(Lookup(curve, X), [low, 0], [high, 0])
        assert np.isnan([value.low, value.high, gradient.low[0]]).all()
    inexact = table(["0", "0.1"], ["0", "1"], kind, "refuse")
    assert np.isnan(over(Lookup(inexact, X), [0.0, 0], [0.1, 0])[0].high)  # the float 0.1 lies beyond the decimal
    assert over(Lookup(inexact, X), [0.0, 0], [np.nextafter(0.1, 0), 0])[0].high == pytest.approx(1.0)


def test_decimals_are_not_taken_for_floats():
    # At x = 0.2 + 0.1 y with y = 1 the straight curve through (0.1, 0.1) and (0.7, 0.7) is 0.3 exactly.
    curve = table(["0.1", "0.7"], ["0.1", "0.7"])
    argument = Binary("+", Number(Decimal("0.2")), Binary("*", Number(Decimal("0.1")), Y))
    tree = Binary("-", Lookup(curve, argument), Number(Decimal("0.3")))
    value, _, _ = over(tree, [0, 1], [0, 1])
    assert value.low < 0 < value.high


def test_zero_at_a_knot_stays_exactly_zero():
    for kind in ("linear", "pchip"):
        curve = table(["-0.3", "0", "0.7"], ["-0.1", "0", "0.3"], kind)
        value, _, _ = over(Lookup(curve, X), [0, 0], [0, 0])
        assert (value.low, value.high) == (0.0, 0.0)


def test_chain_rule_of_second_order():
    # d²/dxdy of f(x y) is f' + x y f''; against exact fractions.
    curve = table(["-1", "0", "0.5", "2"], ["-3", "0", "0.1", "4"], "pchip")
    rng = np.random.default_rng(5)
    for _ in range(40):
        x, y = (Fraction(float(v)) for v in rng.uniform(0.1, 1.3, 2))
        size = 10.0 ** rng.uniform(-9, -1)
        point = np.array([float(x), float(y)])
        _, gradient, hessian = over(Lookup(curve, Binary("*", X, Y)), point - size, point + size)
        _, slope, second = exact(curve, x * y)
        assert holds(gradient[0], y * slope)
        assert holds(hessian[0, 1], slope + x * y * second)
        assert holds(hessian[1, 1], x * x * second)


def test_a_long_table_is_one_operation():
    x = [f"{i}e-2" for i in range(-500, 500)]
    curve = table(x, [f"{i}e-3" for i in range(1000)])
    tape = Tape(1)
    row = tape.expression(Lookup(curve, X), {"x": 0})
    assert tape.expression(Lookup(curve, X), {"x": 0}) == row
    result = enclose(tape.program([row]), np.array([[0.0]]), np.array([[0.105]]), 1)
    assert result.value.low[0, 0] == pytest.approx(0.5)
    assert result.value.high[0, 0] == pytest.approx(0.5105)
