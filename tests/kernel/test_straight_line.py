"""Generated code against the numpy evaluation of the same trees, function by function."""

import math

import numpy as np
import pytest

from gallery import configuration
from roa.kernel.straight_line import right_hand_side
from roa.loop.evaluate import evaluate

FORMULAS = [
    "a*x + y/b - 3.5*(x - y)/(a*b)",
    "x**2*y - x**3 + y**7 - x**16/1e6",
    "(x**2 + 1)**-2 + (x**2 + 1)**0.5 + (x**2 + 1)**-1.5 + (x**2 + 1)**1.3",
    "sin(x) + cos(a*y) - tan(x/10)",
    "asin(x/9) + acos(y/9) + atan(x) + atan2(y, x)",
    "sinh(x/3) - cosh(y/3) + tanh(x) + exp(y/4) + log(x**2 + a) + sqrt(y**2 + b)",
    "abs(x) - sign(y) + min(x, y, a) - max(x, -y)",
    "clip(x, -1, b) + deadzone(y, 0.5) + clip(y, a, -a)",
    "where(x < y, x, 2*y) + where(x >= a, 1, -1)",
    "s1*s2 - s2**2",
]


def generated(text):
    loop = configuration(
        "xy",
        [text, "-y"],
        [(-3.0, 3.0), (-3.0, 3.0)],
        parameters={"a": 1.7, "b": 0.6},
        signals={"s1": "a*x - y", "s2": "s1*s1 + b"},
    ).loop
    code, derivatives = right_hand_side(loop)
    values = loop.values_of(loop.centre)
    # The forms of the scalar library stand in: vector_math has tests of its own.
    names = {"math": math, "vpower": math.pow}
    names |= {name: getattr(math, name[1:]) for name in code.functions - {"vpower"}}
    body = "\n    ".join(code.lines) or "pass"
    constants = {f"c{i}": float(evaluate(tree, values)) for i, tree in enumerate(code.constants)}
    names.update(constants)
    exec(f"def f(x0, x1):\n    {body}\n    return {derivatives[0]}", names)
    return loop, names["f"], code


@pytest.mark.parametrize("text", FORMULAS)
def test_same_value_as_the_tree(text):
    loop, f, _ = generated(text)
    points = np.random.default_rng(5).uniform(-3, 3, (200, 2))
    expected = loop.rhs(points)[:, 0]
    got = [f(*point) for point in points]
    np.testing.assert_allclose(got, expected, rtol=3e-14, atol=1e-14)


@pytest.mark.parametrize("text", ["min(x, y)", "max(x, y)", "min(y, x)", "clip(x + y, -1, 1)", "deadzone(x + y, 0.1)",
                                  "clip(0.1, x, y)", "clip(y, x, 5)", "clip(x, -5, y)", "deadzone(x, y)",
                                  "sign(x + y)", "abs(x + y)"])  # fmt: skip
def test_nan_is_handed_on(text):
    _, f, _ = generated(text)
    assert math.isnan(f(math.nan, 1.0))
    assert math.isnan(f(1.0, math.nan))


def test_parameters_and_numbers_become_constants():
    _, _, code = generated("a*b*x/(a + b) + sin(a)*y")
    assert len(code.constants) == 3  # a*b, 1/(a + b), sin(a)
    assert not any("c3" in line for line in code.lines)


def test_equal_subtrees_are_written_once():
    _, _, code = generated("sin(x + y)**2 + sin(x + y)*y")
    assert sum("vsin" in line for line in code.lines) == 1
