"""Every function of the formula language against mpmath at 40 digits: values and both derivatives are enclosed."""

from decimal import Decimal

import mpmath
import numpy as np
import pytest

from roa.kernel.enclosure import enclose
from roa.kernel.tape import Tape
from roa.loop.expression import Binary, Call, Name, Number, Power

mp = mpmath.mp.clone()
mp.dps = 40
X = Name("x")


def call(function):
    return Call(function, (X,))


def power_rules(exponent):
    p = mp.mpf(exponent)
    return (
        lambda x: x**p,
        lambda x: p * x ** (p - 1),
        lambda x: p * (p - 1) * x ** (p - 2) if p != 1 else mp.mpf(0),
    )


# tree, (f, f', f''), interval from which arguments are taken
CASES = {
    "sin": (call("sin"), (mp.sin, mp.cos, lambda x: -mp.sin(x)), (-50, 50)),
    "cos": (call("cos"), (mp.cos, lambda x: -mp.sin(x), lambda x: -mp.cos(x)), (-50, 50)),
    "tan": (call("tan"), (mp.tan, lambda x: mp.sec(x) ** 2, lambda x: 2 * mp.tan(x) * mp.sec(x) ** 2), (-1.57, 1.57)),
    "asin": (call("asin"), (mp.asin, lambda x: (1 - x * x) ** -0.5, lambda x: x * (1 - x * x) ** -1.5), (-1, 1)),
    "acos": (call("acos"), (mp.acos, lambda x: -((1 - x * x) ** -0.5), lambda x: -x * (1 - x * x) ** -1.5), (-1, 1)),
    "atan": (call("atan"), (mp.atan, lambda x: 1 / (1 + x * x), lambda x: -2 * x / (1 + x * x) ** 2), (-30, 30)),
    "sinh": (call("sinh"), (mp.sinh, mp.cosh, mp.sinh), (-20, 20)),
    "cosh": (call("cosh"), (mp.cosh, mp.sinh, mp.cosh), (-20, 20)),
    "tanh": (call("tanh"), (mp.tanh, lambda x: mp.sech(x) ** 2, lambda x: -2 * mp.tanh(x) * mp.sech(x) ** 2), (-9, 9)),
    "exp": (call("exp"), (mp.exp, mp.exp, mp.exp), (-700, 700)),
    "log": (call("log"), (mp.log, lambda x: 1 / x, lambda x: -1 / x**2), (1e-9, 100)),
    "sqrt": (call("sqrt"), (mp.sqrt, lambda x: 1 / (2 * mp.sqrt(x)), lambda x: -1 / (4 * x * mp.sqrt(x))), (1e-9, 100)),
    "abs": (call("abs"), (abs, mp.sign, lambda x: mp.mpf(0)), (-3, 3)),
    "reciprocal": (
        Binary("/", Number(Decimal(1)), X),
        (lambda x: 1 / x, lambda x: -1 / x**2, lambda x: 2 / x**3),
        (0.01, 5),
    ),
    "square": (Binary("*", X, X), (lambda x: x * x, lambda x: 2 * x, lambda x: mp.mpf(2)), (-5, 5)),
    "cube": (Power(X, Decimal(3)), power_rules(3), (-5, 5)),
    "sixteenth": (Power(X, Decimal(16)), power_rules(16), (-5, 5)),
    "minus second": (Power(X, Decimal(-2)), power_rules(-2), (0.01, 5)),
    "minus third": (Power(X, Decimal(-3)), power_rules(-3), (-5, -0.01)),
    "root of the fifth": (Power(X, Decimal("2.5")), power_rules("2.5"), (1e-6, 5)),
    "a tenth": (Power(X, Decimal("0.1")), power_rules("0.1"), (1e-6, 5)),
    "minus a third": (Power(X, Decimal("-0.3333")), power_rules("-0.3333"), (1e-6, 5)),
}
ENDS = np.pi * np.arange(-16, 17) / 2  # the extremes and zeros of sine and cosine, to the nearest float


def boxes_within(low, high, random):
    """Boxes of all sizes, single points and neighbouring floats among them, also at the ends and at zero."""
    centres = np.concatenate([random.uniform(low, high, 200), [low, high, 0.0], ENDS, low + (high - low) * ENDS**8])
    sizes = 10.0 ** random.uniform(-18, 0.5, len(centres)) * (random.random(len(centres)) > 0.1)
    first = np.clip(centres - sizes, low, high)
    last = np.clip(np.maximum(centres + sizes * random.random(len(centres)), first), low, high)
    tight = np.nextafter(first, np.inf)
    return np.concatenate([first, first]), np.concatenate([last, np.clip(tight, low, high)])


def assert_holds(interval, i, exact, what):
    low, high = interval.low[i], interval.high[i]
    assert not np.isnan(low), what
    assert not np.isnan(high), what
    assert low <= exact <= high, (what, low, exact, high)


@pytest.mark.parametrize("name", CASES)
def test_function_is_enclosed_with_its_derivatives(name):
    tree, exact, (least, most) = CASES[name]
    random = np.random.default_rng(sum(map(ord, name)))
    low, high = boxes_within(least, most, random)
    tape = Tape(1)
    program = tape.program([tape.expression(tree, {"x": 0})])
    result = enclose(program, low[:, None], high[:, None], order=2)
    parts = [result.value[:, 0], result.gradient[:, 0, 0], result.hessian[:, 0, 0, 0]]
    for i in range(len(low)):
        inside = low[i] + (high[i] - low[i]) * random.random()
        for x in {low[i], high[i], min(max(inside, low[i]), high[i])}:
            if name in ("asin", "acos") and abs(x) == 1:
                continue  # no derivative there
            for part, function, what in zip(parts, exact, ("f", "f'", "f''"), strict=True):
                assert_holds(part, i, function(mp.mpf(float(x))), (name, what, x))


@pytest.mark.parametrize("name", CASES)
def test_function_of_one_point_is_sharp(name):
    tree, exact, (least, most) = CASES[name]
    x = np.random.default_rng(3).uniform(least, most, 100)[:, None]
    tape = Tape(1)
    value = enclose(tape.program([tape.expression(tree, {"x": 0})]), x, x, order=0).value[:, 0]
    size = np.array([max(abs(float(exact[0](mp.mpf(float(each))))), 1e-3) for each in x[:, 0]])
    assert np.all(value.high - value.low <= 3e-14 * size + (2e-15 if name in ("sin", "cos") else 0))


def test_large_angles_stay_enclosed():
    x = np.array([1e5, 1e7 + 0.3, 9.9e7, 1.1e8, 1e15, 1e22, 1e300])
    tape = Tape(1)
    program = tape.program([tape.expression(call(f), {"x": 0}) for f in ("sin", "cos")])
    value = enclose(program, -x[:, None], -x[:, None], order=0).value
    big = mpmath.mp.clone()
    big.dps = 400
    for i, each in enumerate(x):
        assert value.low[i, 0] <= -big.sin(big.mpf(float(each))) <= value.high[i, 0]
        assert value.low[i, 1] <= big.cos(big.mpf(float(each))) <= value.high[i, 1]


def test_angle_of_two_arguments_in_every_quadrant():
    random = np.random.default_rng(5)
    centre = random.uniform(-2, 2, (600, 2)) * 10.0 ** random.uniform(-3, 0, (600, 1))
    size = 10.0 ** random.uniform(-16, 0, (600, 2))
    low, high = centre - size, centre + size
    tape = Tape(2)
    program = tape.program([tape.expression(Call("atan2", (Name("y"), Name("x"))), {"y": 0, "x": 1})])
    result = enclose(program, low, high, order=2)
    decided = 0
    for i in range(len(low)):
        y, x = (mp.mpf(float(v)) for v in np.clip(low[i] + (high[i] - low[i]) * random.random(2), low[i], high[i]))
        r = x * x + y * y
        assert_holds(result.value[:, 0], i, mp.atan2(y, x), "value")
        gradient = [x / r, -y / r]
        hessian = [[-2 * x * y / r**2, (y * y - x * x) / r**2], [(y * y - x * x) / r**2, 2 * x * y / r**2]]
        decided += np.isfinite(result.gradient.low[i]).all()
        for j in range(2):
            assert_holds(result.gradient[:, 0, j], i, gradient[j], "gradient")
            for k in range(2):
                assert_holds(result.hessian[:, 0, j, k], i, hessian[j][k], "hessian")
    assert 300 < decided < 600  # both sides of the jump have been tried


@pytest.mark.parametrize(
    ("tree", "low", "high"),
    [
        (call("log"), -1.0, 1.0),
        (call("log"), 0.0, 1.0),
        (call("sqrt"), -1e-9, 1.0),
        (call("asin"), 0.9, 1.0000001),
        (call("acos"), -1.1, 0.0),
        (call("tan"), 1.5, 1.6),
        (call("tan"), -1e9, -1e9),
        (Binary("/", Number(Decimal(1)), X), -1.0, 1.0),
        (Binary("/", Number(Decimal(1)), X), 0.0, 1.0),
        (Power(X, Decimal(-2)), -1.0, 1.0),
        (Power(X, Decimal("0.5")), -1.0, 1.0),
        (Power(X, Decimal("-0.5")), 0.0, 1.0),
    ],
)
def test_undefined_somewhere_is_undefined_and_nothing_hides_it(tree, low, high):
    """A clip, an arc tangent or a choice would make a bounded interval of it, from which something follows."""
    one = Number(Decimal(1))
    hidden = [
        tree,
        Call("clip", (tree, Number(Decimal(-1)), one)),
        Call("atan", (tree,)),
        Call("tanh", (tree,)),
        Call("sign", (tree,)),
        Call("min", (tree, one)),
        Call("max", (one, tree)),
        Call("atan2", (tree, one)),
        Call("abs", (tree,)),
        Binary("*", tree, Number(Decimal(0))),
        Binary("-", tree, tree),
        Power(tree, Decimal(2)),
    ]
    tape = Tape(1)
    program = tape.program([tape.expression(each, {"x": 0}) for each in hidden])
    result = enclose(program, np.array([[low]]), np.array([[high]]), order=2)
    for part in (result.value, result.gradient, result.hessian):
        assert np.isnan(part.low).all()
        assert np.isnan(part.high).all()
        assert not np.any(part.high < 0)
        assert not np.any(part.low > 0)


def test_infinite_and_not_a_number_boxes_prove_nothing():
    functions = ("sin", "cos", "tan", "atan", "sinh", "cosh", "tanh", "exp", "abs", "sign", "log", "sqrt", "asin")
    tape = Tape(1)
    program = tape.program([tape.expression(call(f), {"x": 0}) for f in functions])
    result = enclose(program, np.array([[np.nan], [-np.inf]]), np.array([[np.nan], [np.inf]]), order=2)
    assert np.isnan(result.value.low[0]).all()
    assert np.isnan(result.gradient.high[0]).all()
    bounded = {"sin": (-1, 1), "cos": (-1, 1), "atan": (-1.5707963, 1.5707963), "tanh": (-1, 1), "sign": (-1, 1)}
    for j, name in enumerate(functions):
        low, high = result.value.low[1, j], result.value.high[1, j]
        if name in bounded:
            assert low <= bounded[name][0]
            assert high >= bounded[name][1]
        else:
            assert np.isnan(high) or high == np.inf


@pytest.mark.long
def test_a_million_enclosures_at_random_and_adversarial_boxes():
    """Values, slopes and curvatures of every function, at the ends of the boxes and inside them."""
    checks = 0
    for name, (tree, exact, (first, last)) in CASES.items():
        program = Tape(1)
        program = program.program([program.expression(tree, {"x": 0})])
        for seed in range(32):
            random = np.random.default_rng([seed, len(name)])
            low, high = boxes_within(first, last, random)
            point = np.clip(low + (high - low) * random.choice([0.0, 1.0, 0.5, random.random()], len(low)), low, high)
            found = enclose(program, low[:, None], high[:, None], order=2)
            parts = found.value[:, 0], found.gradient[:, 0, 0], found.hessian[:, 0, 0, 0]
            for i in np.flatnonzero(~np.isnan(parts[0].low)):
                x = mp.mpf(float(point[i]))
                for interval, function in zip(parts, exact, strict=True):
                    try:
                        value = function(x)
                    except ZeroDivisionError:  # the function or its slope has no value at this end
                        continue
                    if name == "abs" and x == 0:
                        continue
                    checks += 1
                    assert_holds(interval, i, value, (name, float(low[i]), float(high[i]), float(x)))
    assert checks >= 1_000_000
