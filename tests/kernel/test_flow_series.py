"""Taylor coefficients on a tape against scipy's integration of the same formulas."""

import numpy as np
import pytest
from scipy.integrate import solve_ivp

import gallery
from roa.kernel.enclosure import enclose
from roa.kernel.flow_series import FlowSeries, NotSmooth
from roa.kernel.tape import Tape

SMOOTH = [
    "sin(x)*v + cos(v)",
    "tan(x/3) - v/(2 + x)",
    "asin(x/3) + acos(v/3)",
    "atan(v) + sinh(x) - cosh(x*v)",
    "tanh(v) + exp(-x)",
    "log(2 + x) + sqrt(3 + v)",
    "(2 + x)**1.5 - (2 + v)**-2",
    "x**5 - 3*x**2*v + x**3 - v**1",
    "-spring*x - v + k*abs(k)",
]


def series_of(loop, held=()):
    tape = Tape(loop.n + len(held))
    given = {name: tape.variable(loop.n + j) for j, name in enumerate(held)}
    return tape, FlowSeries(tape, loop, list(range(loop.n)), given)


@pytest.mark.parametrize("text", SMOOTH)
def test_coefficients_are_those_of_the_solution(text):
    loop = gallery.configuration(
        "xv", ["v", text], [(-1.0, 1.0)] * 2, parameters={"k": -0.5}, signals={"spring": "1 + x**2"}
    ).loop
    tape, series = series_of(loop)
    program = tape.program([row for k in range(13) for row in series.coefficient(k)])
    start = np.array([0.3, -0.2])
    found = enclose(program, start[None], start[None], order=0).value[0]
    assert np.all(found.high - found.low < 1e-9)
    # The function by numpy, integrated by scipy at its tightest tolerance.
    end = solve_ivp(lambda _, x: loop.rhs(x), (0, 0.05), start, "DOP853", rtol=1e-13, atol=1e-15).y[:, -1]
    summed = 0.05 ** np.arange(13) @ found.middle.reshape(13, 2)
    np.testing.assert_allclose(summed, end, rtol=1e-11)
    assert not np.allclose(0.05 ** np.arange(5) @ found.middle.reshape(13, 2)[:5], end, rtol=1e-11, atol=0)


def test_held_signal_is_a_constant_whatever_its_kink():
    loop = gallery.sampled_pendulum(0.1).loop
    tape, series = series_of(loop, ["torque"])
    program = tape.program(series.coefficient(2))
    x = np.array([[0.4, -0.3, 1.7]])
    found = enclose(program, x, x, order=0).value[0]
    speed = 4 * np.sin(0.4) + 0.09 + 1.7
    np.testing.assert_allclose(found.middle, [speed / 2, (4 * np.cos(0.4) * -0.3 - 0.3 * speed) / 2], rtol=1e-14)


def test_kink_in_the_continuous_part_is_named():
    loop = gallery.configuration("x", ["-x*abs(x)"], [(-1.0, 1.0)]).loop
    with pytest.raises(NotSmooth, match="abs stands in the continuous part"):
        series_of(loop)[1].coefficient(1)
