"""Derivatives on the tape against sympy's, at random points."""

import numpy as np
import pytest
import sympy

from roa.kernel.enclosure import enclose
from roa.kernel.tape import Tape
from roa.kernel.tape_slopes import NotSmoothError, partials
from roa.loop.formula import Vocabulary, parse

SMOOTH = (
    "x**3*y - 2*x*y**2/(3 + x**2)", "sin(x*y) + cos(x - 2*y)", "tan(x/3)*y", "asin(x/3) - acos(x*y/9)",
    "atan(x*y) + atan2(y, 4 + x)", "sinh(x)*cosh(y)", "tanh(x - y)", "exp(x*y) - log(5 + x)", "sqrt(4 + x*y)",
    "(4 + x)**1.5 + (4 + y)**(-0.7)", "x**(-3) + 1/y", "atan2(x, y)", "2.5", "y",
)  # fmt: skip


@pytest.mark.parametrize("text", SMOOTH)
def test_slopes_hold_the_exact_derivatives(text):
    tape = Tape(2)
    row = tape.expression(parse(text, Vocabulary(["x", "y"], {}, {})), {"x": 0, "y": 1})
    program = tape.program(partials(tape, row, [0, 1]))
    x, y = sympy.symbols("x y", real=True)
    names = {"x": x, "y": y, "atan2": sympy.atan2}
    exact = [sympy.diff(sympy.sympify(text, locals=names, rational=True), symbol) for symbol in (x, y)]
    for point in np.random.default_rng(3).uniform(0.2, 1.7, (20, 2)):
        found = enclose(program, point[None], point[None], order=0).value[0]
        at = dict(zip((x, y), map(sympy.Rational, point), strict=True))
        for k in range(2):
            value = sympy.N(exact[k].subs(at), 30)
            assert sympy.Float(found.low[k], 40) <= value <= sympy.Float(found.high[k], 40)
            assert found.high[k] - found.low[k] <= 1e-12 * (1 + abs(value))


@pytest.mark.parametrize("text", ["abs(x)", "min(x, y)", "sign(x - y)", "where(x < y, x, y)", "clip(x, -1, 1)"])
def test_kinks_have_no_slopes(text):
    tape = Tape(2)
    row = tape.expression(parse(text, Vocabulary(["x", "y"], {}, {})), {"x": 0, "y": 1})
    with pytest.raises(NotSmoothError):
        partials(tape, row, [0, 1])


def test_kinks_of_constants_alone_do_not_matter():
    tape = Tape(1)
    row = tape.expression(parse("abs(p)*x", Vocabulary(["x", "p"], {}, {})), {"x": 0, "p": tape.number(-2)})
    slope = enclose(tape.program(partials(tape, row, [0])), np.zeros((1, 1)), np.ones((1, 1)), order=0).value[0]
    assert (slope.low[0], slope.high[0]) == (2.0, 2.0)
