"""The tape and its interpreter: arithmetic, exact decimals, derivatives of whole formulas, kinks and jumps."""

from decimal import Decimal
from fractions import Fraction

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from roa.kernel.enclosure import enclose
from roa.kernel.interval_arrays import IntervalArray
from roa.kernel.tape import Tape, enclose_number
from roa.loop.expression import Binary, Call, Compare, Expression, Name, Negate, Number, Power

X, Y = Name("x"), Name("y")
finite = st.floats(-1e6, 1e6) | st.floats(allow_nan=False, allow_infinity=False)


def number(text):
    return Number(Decimal(text))


def over(tree: Expression, low, high, order=2):
    tape = Tape(2)
    program = tape.program([tape.expression(tree, {"x": 0, "y": 1})])
    result = enclose(program, np.array([low], dtype=float), np.array([high], dtype=float), order)
    return result.value[0, 0], result.gradient[0, 0], result.hessian[0, 0]


@settings(deadline=None)  # the first call may have to compile
@given(st.lists(finite, min_size=4, max_size=4), st.floats(0, 1), st.floats(0, 1), st.sampled_from("+-*/"))
def test_operations_hold_every_exact_result(ends, s, t, op):
    (a, b), (c, d) = sorted(ends[:2]), sorted(ends[2:])
    x, y = (min(max(float(p + (q - p) * r), p), q) if q - p < np.inf else p for p, q, r in ((a, b, s), (c, d, t)))
    value, _, _ = over(Binary(op, X, Y), [a, c], [b, d], 0)
    if op == "/" and c <= 0 <= d:
        assert np.isnan(value.low)
        return
    u, v = Fraction(x), Fraction(y)
    exact = {"+": u + v, "-": u - v, "*": u * v}[op] if op != "/" else u / v
    assert value.low == -np.inf or Fraction(float(value.low)) <= exact
    assert value.high == np.inf or exact <= Fraction(float(value.high))


@given(st.decimals(allow_nan=False, allow_infinity=False, min_value=-(10**9), max_value=10**9))
def test_numbers_are_enclosed_as_closely_as_floats_allow(value):
    low, high = enclose_number(value)
    assert Fraction(low) <= Fraction(value) <= Fraction(high)
    assert high in (low, np.nextafter(low, np.inf))
    assert (low == high) == (Fraction(low) == Fraction(value))


def test_a_tenth_is_not_taken_for_the_float():
    value, _, _ = over(Binary("-", Binary("*", number("0.1"), number("3")), number("0.3")), [0, 0], [0, 0], 0)
    assert value.low < 0 < value.high  # exactly zero is inside; in floats it would be 5.6e-17


def test_zero_stays_exactly_zero():
    """An equilibrium at the origin must stay there, or it could not be told from a point beside it."""
    tree = Binary(
        "+", Call("sin", (X,)), Binary("*", number("0.3"), Binary("-", Call("tanh", (Y,)), Power(X, Decimal(3))))
    )
    value, _, _ = over(tree, [0, 0], [0, 0], 0)
    assert (value.low, value.high) == (0.0, 0.0)


FORMULA = Binary(
    "/",
    Binary("-", Binary("*", Call("sin", (X,)), Power(Y, Decimal(3))), Call("exp", (Binary("*", X, Y),))),
    Binary("+", number("2.5"), Binary("+", Power(X, Decimal(2)), Negate(Call("cos", (Binary("-", X, Y),))))),
)


def test_derivatives_of_a_whole_formula_against_exact_ones():
    import mpmath
    import sympy  # the reference: symbolic derivatives, evaluated at 30 digits

    x, y = sympy.symbols("x y")
    f = (sympy.sin(x) * y**3 - sympy.exp(x * y)) / (sympy.Rational(5, 2) + x**2 - sympy.cos(x - y))
    derivatives = [f, f.diff(x), f.diff(y), f.diff(x, x), f.diff(x, y), f.diff(y, y)]
    exact = sympy.lambdify((x, y), derivatives, "mpmath")
    random = np.random.default_rng(1)
    for _ in range(40):
        centre = random.uniform(-1, 1, 2)
        size = 10.0 ** random.uniform(-9, -0.5)
        value, gradient, hessian = over(FORMULA, centre - size, centre + size)
        low = [value.low, *gradient.low, hessian.low[0, 0], hessian.low[0, 1], hessian.low[1, 1]]
        high = [value.high, *gradient.high, hessian.high[0, 0], hessian.high[1, 0], hessian.high[1, 1]]
        with mpmath.workdps(30):
            point = [mpmath.mpf(float(u)) for u in centre + random.uniform(-1, 1, 2) * size * 0.999]
            for a, b, reference in zip(low, high, exact(*point), strict=True):
                assert a <= reference <= b
        assert np.all(hessian.high - hessian.low < 2000 * size + 1e-12)


def test_lower_orders_agree_with_the_highest():
    low, high = [-0.3, 0.2], [-0.1, 0.5]
    value, gradient, _ = over(FORMULA, low, high, 2)
    first_value, first_gradient, _ = over(FORMULA, low, high, 1)
    assert (value.low, value.high) == (first_value.low, first_value.high)
    assert np.array_equal(gradient.low, first_gradient.low)
    assert over(FORMULA, low, high, 0)[0].low == value.low


CLIP = Call("clip", (X, number(-1), number(1)))
KINKS = {
    # tree, kink, slopes on both sides
    "clip": (CLIP, 1.0, (1, 0)),
    "abs": (Call("abs", (X,)), 0.0, (-1, 1)),
    "min": (Call("min", (X, number(2))), 2.0, (1, 0)),
    "max": (Call("max", (Binary("*", number(3), X), X)), 0.0, (1, 3)),
    "deadzone": (Call("deadzone", (X, number("0.5"))), 0.5, (0, 1)),
}


@pytest.mark.parametrize("name", KINKS)
def test_kinks_have_clarke_slopes_and_no_curvature(name):
    tree, kink, (left, right) = KINKS[name]
    _, gradient, hessian = over(tree, [kink - 0.1, 0], [kink + 0.1, 0])
    assert gradient.low[0] <= min(left, right)
    assert gradient.high[0] >= max(left, right)
    assert gradient.high[0] - gradient.low[0] < abs(right - left) + 1e-12
    assert hessian.low[0, 0] == -np.inf
    assert hessian.high[0, 0] == np.inf
    for side, slope in ((-0.2, left), (0.2, right)):
        _, gradient, hessian = over(tree, [kink + side - 0.05, 0], [kink + side + 0.05, 0])
        assert gradient.low[0] == pytest.approx(slope)
        assert gradient.high[0] == pytest.approx(slope)
        assert hessian.magnitude[0, 0] < 1e-290


def test_clip_with_crossed_limits_is_min_of_max():
    value, _, _ = over(Call("clip", (X, number(1), number(-1))), [-5, 0], [5, 0])
    assert (value.low, value.high) == (-1, -1)


@pytest.mark.parametrize(("op", "at_zero"), [("<", 7), ("<=", 3), (">", 7), (">=", 3)])
def test_choice_is_decided_where_it_can_be(op, at_zero):
    tree = Call("where", (Compare(op, X, number(0)), number(3), number(7)))
    below, above = (3, 7) if op in ("<", "<=") else (7, 3)
    for low, high, expected in ((-2, -1, below), (1, 2, above), (0, 0, at_zero)):
        value, gradient, _ = over(tree, [low, 0], [high, 0])
        assert (value.low, value.high) == (expected, expected)
        assert gradient.magnitude[0] == 0
    value, gradient, hessian = over(tree, [-1, 0], [1, 0])
    assert (value.low, value.high) == (3, 7)
    assert gradient.high[0] == np.inf
    assert hessian.low[0, 0] == -np.inf


def test_choice_forgets_the_side_that_is_not_taken():
    tree = Call("where", (Compare(">", X, number(0)), Call("sqrt", (X,)), Y))
    assert over(tree, [-2, 4], [-1, 5])[0].high == 5
    assert np.isnan(over(tree, [-1, 4], [1, 5])[0].high)


def test_sign_jumps():
    assert over(Call("sign", (X,)), [1, 0], [2, 0])[1].magnitude[0] == 0
    value, gradient, _ = over(Call("sign", (X,)), [0, 0], [2, 0])
    assert (value.low, value.high) == (0, 1)
    assert gradient.high[0] == np.inf


def test_no_derivative_with_respect_to_what_is_not_there():
    _, gradient, hessian = over(Call("sign", (X,)), [-1, 0], [1, 0])
    assert gradient.magnitude[1] == 0
    assert hessian.magnitude[1, 1] == 0


def test_boxes_do_not_see_each_other():
    low = np.array([[-1.0, 0.0], [0.2, 0.1], [-1.0, 0.0]])
    tape = Tape(2)
    trees = [FORMULA, Call("log", (X,)), CLIP]
    program = tape.program([tape.expression(tree, {"x": 0, "y": 1}) for tree in trees])
    together = enclose(program, low, low + 0.5, order=2)
    for i in range(len(low)):
        alone = enclose(program, low[i : i + 1], low[i : i + 1] + 0.5, order=2)
        np.testing.assert_array_equal(together.hessian.low[i], alone.hessian.low[0])
        np.testing.assert_array_equal(together.gradient.high[i], alone.gradient.high[0])


def test_matrix_product_holds_the_exact_one():
    random = np.random.default_rng(4)
    for _ in range(50):
        a, b = random.normal(size=(2, 4, 4)) * 10.0 ** random.uniform(-8, 8, (2, 4, 4))
        wide = np.abs(random.normal(size=(4, 4))) * (random.random((4, 4)) > 0.5)
        product = IntervalArray(a - wide, a + wide) @ b
        inside = a + wide * random.uniform(-1, 1, (4, 4))
        inside = np.clip(inside, a - wide, a + wide)
        for i in range(4):
            for j in range(4):
                exact = sum(Fraction(float(inside[i, k])) * Fraction(float(b[k, j])) for k in range(4))
                assert Fraction(float(product.low[i, j])) <= exact <= Fraction(float(product.high[i, j]))


def test_undefined_entries_pass_through_a_matrix_product():
    product = IntervalArray(np.array([[np.nan, 1.0]]), np.array([[np.nan, 1.0]])) @ np.array([[0.0], [1.0]])
    assert np.isnan(product.high[0, 0])
    unbounded = IntervalArray(np.array([[-np.inf, 1.0]]), np.array([[np.inf, 1.0]])) @ np.array([[1.0], [1.0]])
    assert not unbounded.high[0, 0] < np.inf


def test_constants_with_equal_enclosures_stay_apart():
    # a b for two numbers in [-1, 1] can be -1; taken for one number, the product would be a square.
    tape = Tape(1)
    a, b = tape.interval(-1.0, 1.0), tape.interval(-1.0, 1.0)
    program = tape.program([tape.multiply(a, b)])
    found = enclose(program, np.zeros((1, 1)), np.zeros((1, 1)), order=0)
    assert found.value.low[0, 0] <= -1.0
    assert tape.number(Decimal("0.1")) == tape.number(Decimal("0.10"))
