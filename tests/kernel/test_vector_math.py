"""sin, cos and tan of our own against mpmath, at random and at the worst arguments."""

import math

import mpmath
import numpy as np
import pytest
from numba import njit

from roa.kernel import vector_math

CASES = {
    "sin": (vector_math.vsin, mpmath.sin, 2.0),
    "cos": (vector_math.vcos, mpmath.cos, 2.5),
    "tan": (vector_math.vtan, mpmath.tan, 4.0),
}


def over_array(function):
    @njit
    def apply(x, out):
        for i in range(x.size):
            out[i] = function(x[i])

    def call(x):
        out = np.empty_like(x)
        apply(x, out)
        return out

    return call


def arguments():
    rng = np.random.default_rng(811)
    # Next to multiples of π/2 the reduction cancels: that is where a careless one loses its digits.
    multiples = rng.integers(-63_000, 63_000, 1500) * (math.pi / 2)
    return np.concatenate(
        [
            rng.uniform(-4, 4, 1500),
            rng.uniform(-1e5, 1e5, 1500),
            multiples,
            np.nextafter(multiples, 1e9),
            [0.0, -0.0, 1e-300, 5e-324, 1e-8, math.pi / 4, -math.pi / 4, 1e5, -1e5],
        ]
    )


@pytest.mark.parametrize("name", CASES)
def test_within_units_in_the_last_place(name):
    ours, exact, limit = CASES[name]
    x = arguments()
    worst = 0.0
    with mpmath.workprec(220):
        for argument, value in zip(x, over_array(ours)(x), strict=True):
            truth = exact(mpmath.mpf(float(argument)))
            if truth == 0:
                assert value == 0.0
                continue
            error = abs(mpmath.mpf(float(value)) - truth) / mpmath.mpf(float(np.spacing(abs(float(truth)))))
            worst = max(worst, float(error))
    assert worst <= limit


@pytest.mark.parametrize("name", CASES)
def test_no_number_where_there_is_none(name):
    values = over_array(CASES[name][0])(np.array([math.nan, math.inf, -math.inf, 1.1e6, -1e300]))
    assert np.isnan(values).all()
