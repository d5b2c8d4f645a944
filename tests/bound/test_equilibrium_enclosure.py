"""The box that holds the equilibrium, against roots that are known in closed form."""

from fractions import Fraction

import mpmath
import numpy as np
import pytest

from gallery import configuration, parabola, van_der_pol
from roa.bound.equilibrium_enclosure import enclose_equilibrium
from roa.loop.equilibrium import find_equilibrium


def enclosed(loop):
    return enclose_equilibrium(loop, find_equilibrium(loop, "test").x)


def test_a_root_that_is_a_float_is_found_exactly():
    for loop, x in ((van_der_pol().loop, [0, 0]), (parabola().loop, [1, 0])):
        root = enclosed(loop)
        np.testing.assert_array_equal(root.x.low, x)
        np.testing.assert_array_equal(root.x.high, x)


def test_a_root_that_is_no_float_is_between_neighbours():
    loop = configuration(["x"], ["2 - x**2"], [(0.0, 3.0)], equilibrium={"x": 1.0}).loop
    root = enclosed(loop)
    assert Fraction(float(root.x.low[0])) ** 2 < 2 < Fraction(float(root.x.high[0])) ** 2
    assert root.x.high[0] - root.x.low[0] < 1e-14
    slope = -2 * mpmath.sqrt(2)
    assert root.A.low[0, 0] <= slope <= root.A.high[0, 0]


def test_decimals_are_not_rounded():
    """With x' = 0.1 - x the equilibrium is a tenth, not the float nearest to it."""
    root = enclosed(configuration(["x"], ["0.1 - x"], [(-1.0, 1.0)]).loop)
    assert Fraction(float(root.x.low[0])) < Fraction(1, 10) < Fraction(float(root.x.high[0]))


def test_a_guess_that_is_slightly_off_still_leads_to_the_root():
    loop = configuration(["x", "y"], ["y - x", "1 - x - y**3"], [(-2.0, 2.0)] * 2).loop
    x = find_equilibrium(loop, "test").x
    root = enclose_equilibrium(loop, x + np.array([1e-7, -1e-7]))
    sharp = enclosed(loop)
    assert np.all(root.x.low <= sharp.x.high)
    assert np.all(root.x.high >= sharp.x.low)
    assert np.max(root.x.high - root.x.low) < 1e-12
    assert sharp.distance(x) < 1e-14
    assert root.distance(x + 1) == pytest.approx(np.sqrt(2))


@pytest.mark.parametrize("dynamics", ["-x**3", "x**2", "-sign(x)", "sqrt(x)"])
def test_failure_is_a_value(dynamics):
    loop = configuration(["x"], [dynamics], [(-1.0, 1.0)]).loop
    assert enclose_equilibrium(loop, np.zeros(1)) is None


def test_no_root_is_invented():
    loop = configuration(["x"], ["x**2 + 1e-9"], [(-1.0, 1.0)]).loop
    assert enclose_equilibrium(loop, np.array([1e-3])) is None
