"""-V̇ as weighted squares: the printed form against V̇ evaluated from the formulas by numpy at random points."""

import numpy as np
import pytest

import gallery
from roa.bound.lyapunov_function import FormulaV
from roa.loop.evaluate import evaluate
from roa.loop.read import read_text
from roa.loop.weighted_squares import decrease_as_squares

CASES = {
    "pendulum": (["a", "w"], ["w", "-sin(a) - 0.3*w"], "0.5*w**2 + 1 - cos(a)", 1),
    "friction by angle": (["a", "w"], ["w", "-sin(a) - (1 + 0.5*cos(a))*w"], "0.5*w**2 + 1 - cos(a)", 1),
    "signs of an angle": (["a", "w"], ["w", "sin(-a) - w"], "0.5*w**2 + 1 - cos(-a)", 1),
    "two speeds": (["x", "v", "u"], ["v + u", "-x - 2*v + u", "-x + v - 3*u"], "x**2 + v**2 + u**2", 2),
    "half an angle": (["a", "w"], ["w", "-2*sin(a)*cos(a) - w"], "0.5*w**2 + sin(a)**2", 1),
    "a root": (["a", "w"], ["sqrt(1 - a**2)*w", "-a - w"], "0.5*w**2 + 1 - sqrt(1 - a**2)", 1),
}


@pytest.mark.parametrize("case", CASES)
def test_equals_the_decrease(case):
    states, dynamics, V, count = CASES[case]
    configuration = gallery.configuration(states, dynamics, [(-1.0, 1.0)] * len(states), bound=f'V = "{V}"')
    loop, tree = configuration.loop, configuration.bound.V
    terms = decrease_as_squares(loop, tree)
    assert len(terms) == count
    x = np.random.default_rng(1).uniform(-0.9, 0.9, (1000, loop.n))
    values = loop.values_of(x)
    total = sum(evaluate(term.weight, values) * evaluate(term.root, values) ** 2 for term in terms)
    decrease = FormulaV(loop, np.zeros(loop.n), tree, V).decrease(x)
    np.testing.assert_allclose(-total, decrease, rtol=1e-9, atol=1e-12)
    assert all(np.all(evaluate(term.weight, values) > 0) for term in terms)


@pytest.mark.parametrize(("dynamics", "V"), [
    (["w", "-sin(a)"], "0.5*w**2 + 1 - cos(a)"),  # V̇ = 0
    (["w", "-sin(a) - w**3"], "w**2 + 1 - cos(a)"),  # V̇ has both signs
    (["w", "-a - w*abs(w)"], "abs(a)"),  # V has a kink
    (["w", "-a - w + 0*sign(w)"], "a**2 + w**2"),  # a jump
])  # fmt: skip
def test_no_form(dynamics, V):
    configuration = gallery.configuration(["a", "w"], dynamics, [(-1.0, 1.0)] * 2, bound=f'V = "{V}"')
    assert decrease_as_squares(configuration.loop, configuration.bound.V) is None


def test_what_grows_too_large_is_given_up():
    long = "(x + v + x**3 + v**3 + sin(x) + cos(v) + exp(x))**12"
    configuration = gallery.configuration("xv", ["v", f"-x - {long}*v"], [(-1.0, 1.0)] * 2, bound='V = "x**2 + v**2"')
    assert decrease_as_squares(configuration.loop, configuration.bound.V) is None


def test_a_look_up_table_is_no_obstacle_to_other_formulas():
    table = "[tables.drag]\nx = [-1, 0, 1]\ny = [2.0, 1.0, 2.0]\n"
    text = gallery.toml(["a", "w"], ["w", "-a - c*w"], [(-1.0, 1.0)] * 2, signals={"c": "lookup(drag, a)"},
                        bound='V = "a**2 + w**2"')  # fmt: skip
    configuration = read_text(text + table, "table.toml")
    assert decrease_as_squares(configuration.loop, configuration.bound.V) is None
