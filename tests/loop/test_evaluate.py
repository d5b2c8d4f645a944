"""Values of formulas against numpy written out by hand, and silence at poles."""

import numpy as np
import pytest

from roa.loop.evaluate import evaluate
from roa.loop.formula import Vocabulary, parse

X = np.linspace(-2.0, 2.0, 41)
Y = np.linspace(0.5, -1.5, 41)


def value(text):
    return evaluate(parse(text, Vocabulary(("x", "y"))), {"x": X, "y": Y})


@pytest.mark.parametrize(
    ("text", "expected"),
    [
        ("x + 2*y - x/4", X + 2 * Y - X / 4),
        ("-x**3", -(X * X * X)),
        ("(x**2 + 1)**-0.5", 1 / np.sqrt(X * X + 1)),
        ("sin(x) + cos(y)*tan(x/3)", np.sin(X) + np.cos(Y) * np.tan(X / 3)),
        ("asin(x/2) - acos(x/2)", np.arcsin(X / 2) - np.arccos(X / 2)),
        ("atan(x) + atan2(y, x)", np.arctan(X) + np.arctan2(Y, X)),
        ("sinh(x)*cosh(y) - tanh(x)", np.sinh(X) * np.cosh(Y) - np.tanh(X)),
        ("exp(x)*log(x + 3) + sqrt(x + 2)", np.exp(X) * np.log(X + 3) + np.sqrt(X + 2)),
        ("abs(x) + sign(y)", np.abs(X) + np.sign(Y)),
        ("min(x, y, 0.25)", np.minimum(np.minimum(X, Y), 0.25)),
        ("max(x, y)", np.where(X > Y, X, Y)),
        ("clip(x, -1, 0.5)", np.clip(X, -1, 0.5)),
        ("deadzone(x, 0.7)", np.where(X > 0.7, X - 0.7, np.where(X < -0.7, X + 0.7, 0))),
        ("where(x < y, x, 3)", np.where(X < Y, X, 3)),
        ("where(x >= y, x, 3)", np.where(X >= Y, X, 3)),
        ("2", 2.0),
    ],
)
def test_against_numpy(text, expected):
    np.testing.assert_allclose(value(text), expected, rtol=1e-15, atol=1e-15)


def test_clip_with_crossed_limits_is_min_of_max():
    assert (value("clip(x, 1, -1)") == -1).all()


def test_sign_of_zero_is_zero():
    assert value("sign(x - x)").max() == 0


def test_poles_and_roots_of_negatives_pass_through_in_silence():
    assert np.isinf(value("1/(x - x)")).all()
    assert np.isnan(value("sqrt(-1 - x**2) + log(-1 - x**2)")).all()
    assert np.isinf(value("exp(1000 + x)")).all()
    assert np.isnan(value("clip(sqrt(-1 - x**2), 0, 1)")).all()
    assert np.isnan(value("max(0, (x - x)/(x - x))")).all()
