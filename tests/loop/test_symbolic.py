"""Partial derivatives against the complex step and central differences, and slopes at kinks."""

import numpy as np
import pytest

from roa.loop.formula import Vocabulary, parse
from roa.loop.symbolic import Partials

STATES = ("x", "y")
POINTS = np.random.default_rng(20).uniform(0.1, 0.9, (200, 2)) * np.array([1.0, -1.0])


class Formulas:
    """Formulas in x, y and the parameter k = 1.7 with their values and partials."""

    def __init__(self, *texts, signals=None):
        vocabulary = Vocabulary([*STATES, "k", *(signals or {})])
        self.signals = {name: parse(text, vocabulary) for name, text in (signals or {}).items()}
        self.partials = Partials(STATES, ("k",), self.signals, tuple(parse(text, vocabulary) for text in texts))

    def jacobian(self, points):
        values = {"k": np.asarray(1.7), "x": points[..., 0], "y": points[..., 1]}
        return self.partials.jacobian(values, points.shape[:-1])


def slopes_of(text, points=POINTS, **signals):
    return Formulas(text, signals=signals).jacobian(np.asarray(points, dtype=float))[..., 0, :]


def complex_step(function, points):
    """Slopes exact to rounding (Squire and Trapp, SIAM Review 40, 1998, 110-112; from memory)."""
    columns = []
    for i in range(2):
        shifted = points.astype(complex)
        shifted[:, i] += 1e-30j
        columns.append(function(shifted[:, 0], shifted[:, 1]).imag / 1e-30)
    return np.stack(columns, axis=-1)


@pytest.mark.parametrize(
    ("text", "function"),
    [
        ("x*y**2/(1 + x) - 3*x", lambda x, y: x * y**2 / (1 + x) - 3 * x),
        ("k*x**2.5 + (x - y)**-3", lambda x, y: 1.7 * x**2.5 + (x - y) ** -3),
        ("sin(x*y) + cos(x)*tan(y)", lambda x, y: np.sin(x * y) + np.cos(x) * np.tan(y)),
        ("asin(x) + acos(y)*atan(x)", lambda x, y: np.arcsin(x) + np.arccos(y) * np.arctan(x)),
        ("sinh(x) - cosh(x*y)*tanh(y)", lambda x, y: np.sinh(x) - np.cosh(x * y) * np.tanh(y)),
        ("exp(-x*k)*log(x) + sqrt(x - y)", lambda x, y: np.exp(-1.7 * x) * np.log(x) + np.sqrt(x - y)),
        ("sin(sin(sin(sin(x/k)))) - -y", lambda x, y: np.sin(np.sin(np.sin(np.sin(x / 1.7)))) + y),
        ("k", lambda x, y: 1.7 + 0 * x),
    ],
)
def test_smooth_formulas_against_the_complex_step(text, function):
    np.testing.assert_allclose(slopes_of(text), complex_step(function, POINTS), rtol=1e-12, atol=1e-13)


@pytest.mark.parametrize(
    "text",
    [
        "atan2(y, x) + atan2(x, y - 1)",
        "abs(x + 2*y)*x",
        "min(x, -y, x*y + 0.6)",
        "max(x**2, sin(y), 0.3)",
        "clip(k*x + y, 0.2, 0.6)**2",
        "deadzone(x + y, 0.3)*y",
        "where(x < -y, x*y, sin(x))",
        "where(clip(x, 0, 0.5) >= 0.5, x, y)",
        "sign(x + y)*x",
    ],
)
def test_kinked_formulas_against_central_differences(text):
    tree = parse(text, Vocabulary([*STATES, "k"]))
    h = 1e-6

    from roa.loop.evaluate import evaluate

    def f(points):
        return evaluate(tree, {"x": points[:, 0], "y": points[:, 1], "k": np.asarray(1.7)})

    differences = np.stack([(f(POINTS + h * e) - f(POINTS - h * e)) / (2 * h) for e in np.eye(2)], axis=-1)
    error = np.abs(slopes_of(text) - differences).max(axis=-1)
    # A step that straddles a kink or a jump differs; at 200 random points that is at most a rare one.
    assert (error < 1e-7).sum() >= 199


@pytest.mark.parametrize(
    ("text", "slope"),
    [
        ("clip(x, -1, 1)", 1.0),  # the inner side at the edge
        ("deadzone(x, 1)", 0.0),
        ("where(x < 1, 5*x, 7*x)", 7.0),
        ("where(x <= 1, 5*x, 7*x)", 5.0),
        ("min(3*x, 3)", 3.0),
        ("sign(x - 1)", 0.0),
    ],
)
def test_the_slope_at_a_kink_is_that_of_the_side_that_is_taken(text, slope):
    assert slopes_of(text, [1.0, 0.0])[0] == slope


def test_a_branch_that_is_not_taken_spoils_nothing():
    np.testing.assert_array_equal(slopes_of("where(x > 0, 2*x, sqrt(-x))", [0.5, 0.0]), [2.0, 0.0])


def test_a_root_keeps_to_its_own_state():
    slopes = slopes_of("sqrt(x) + y", [0.0, 0.3])
    assert np.isinf(slopes[0])
    assert slopes[1] == 1.0


def test_signals_are_chained_not_multiplied_out():
    # Written out, the last signal would have 2**40 terms.
    signals = {"s0": "x + y"} | {f"s{i}": f"s{i - 1}*s{i - 1}/2" for i in range(1, 41)}
    slopes = slopes_of("s40", [1.0, 1.0], **signals)
    np.testing.assert_allclose(slopes, 2.0**40, rtol=1e-14)  # s_i = 2, and each step doubles the slope


@pytest.mark.parametrize(
    "text", ["((((((x**16)**16)**16)**16)**16)**16)**16", "(2*x)**16 + ((3*x)**16)**16", "x/(y - y)"]
)
def test_towers_and_poles_are_numbers_not_endless_algebra(text):
    slopes_of(text, [0.5, 0.5])


def test_coefficients_beyond_64_bits_stay_floats():
    slopes = slopes_of("100000000000000000000000000000*x*y/3")
    np.testing.assert_allclose(slopes, POINTS[:, ::-1] * 1e29 / 3, rtol=1e-15)


def test_shapes():
    formulas = Formulas("x", "y*k", "x*y")
    assert formulas.jacobian(np.zeros((3, 4, 2))).shape == (3, 4, 3, 2)
    assert formulas.jacobian(np.zeros(2)).shape == (3, 2)
    values = {"k": np.asarray(1.7), "x": np.array([3.0]), "y": np.array([4.0])}
    np.testing.assert_array_equal(formulas.partials.gradient(values, (1,)), [[1.0, 0.0]])
