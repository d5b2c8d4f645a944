"""Functions of our own against mpmath, at random and at the worst arguments, and at the ends of the floats."""

import math
from importlib import import_module

import mpmath
import numpy as np
import pytest
from numba import njit

from roa.kernel import vector_math

UNITS = dict.fromkeys(vector_math.FILES, 2.0) | {"vtan": 4.0, "vatan2": 4.0, "vpower": 4.0}
ONE_ARGUMENT = sorted(set(vector_math.FILES) - {"vatan2", "vpower"})
SPECIAL = np.array(
    [0.0, -0.0, 5e-324, -5e-324, 1e-310, -1e-310, 2.2250738585072014e-308, 1e-300, -1e-300, 1e-9, -1e-9, 0.5, -0.5,
     1.0, -1.0, np.nextafter(1.0, 2.0), np.nextafter(-1.0, -2.0), 2.0, -2.0, 1e5, -1e5, 1e300, -1e300,
     1.7976931348623157e308, -1.7976931348623157e308, math.inf, -math.inf, math.nan]
)  # fmt: skip


def over_arrays(name):
    function = getattr(import_module(f"roa.kernel.vector_math.{vector_math.FILES[name]}"), name)
    if name in ONE_ARGUMENT:

        @njit
        def apply(x, out):
            for i in range(x.size):
                out[i] = function(x[i])
    else:

        @njit
        def apply(x, y, out):
            for i in range(x.size):
                out[i] = function(x[i], y[i])

    def call(*x):
        out = np.empty_like(x[0])
        apply(*x, out)
        return out

    return call


def worst_error(values, truths):
    """Largest error in units in the last place of the truth; steps of 2^-1074 below the normal numbers."""
    worst = 0.0
    for value, truth in zip(values, truths, strict=True):
        if truth == 0:
            assert value == 0.0
            continue
        unit = mpmath.mpf(float(np.spacing(abs(float(truth)))))
        worst = max(worst, float(abs(mpmath.mpf(float(value)) - truth) / unit))
    return worst


def either_sign(rng, x):
    return x * rng.choice([-1.0, 1.0], x.size)


def over_decades(rng, low, high, count):
    return 10.0 ** rng.uniform(low, high, count)


def arguments(name):
    """Random arguments, and those where a reduction, a polynomial or the floats end."""
    rng = np.random.default_rng(811)
    some = 600
    near_zero = either_sign(rng, over_decades(rng, -20, 0, some))
    if name in ("vsin", "vcos", "vtan"):
        # Next to multiples of π/2 the reduction cancels, and half-way between them the polynomials end.
        halves = rng.integers(-63_000, 63_000, some) * (math.pi / 2)
        quarters = (rng.integers(-200, 200, some) + 0.5) * (math.pi / 2) + rng.uniform(-0.01, 0.01, some)
        return [
            rng.uniform(-4, 4, some), rng.uniform(-1e5, 1e5, some), halves, np.nextafter(halves, 1e9), quarters,
            near_zero, [math.pi / 4, 1e-8, 1e5, -1e5],
        ]  # fmt: skip
    if name in ("vasin", "vacos"):
        ends = either_sign(rng, 1 - over_decades(rng, -16, -0.3, some))
        return [rng.uniform(-1, 1, some), near_zero, ends, either_sign(rng, rng.uniform(0.49, 0.52, some))]
    if name == "vatan":
        turns = either_sign(rng, np.concatenate([rng.uniform(0.49, 0.56, some), rng.uniform(1.8, 2.1, some)]))
        return [near_zero, turns, 1 / near_zero, 1 + near_zero, rng.uniform(-3, 3, some)]
    if name == "vlog":
        jumps = np.ldexp(math.sqrt(0.5) * (1 + rng.uniform(-1e-15, 1e-15, some)), rng.integers(-1020, 1020, some))
        subnormal = rng.integers(1, 2**50, some) * 5e-324
        one = 1 + either_sign(rng, over_decades(rng, -16, -0.4, some))
        return [over_decades(rng, -307, 308, some), rng.uniform(0.5, 2, some), one, jumps, subnormal]
    if name == "vexp":
        steps = (np.arange(-1074, 1024) + 0.5) * math.log(2)
        tiny = rng.uniform(-745.1, -708, some)
        return [rng.uniform(-708, 709.7, some), near_zero, steps, tiny, [709.78, 709.782712893384, -745.13]]
    joints = either_sign(rng, np.concatenate([rng.uniform(0.98, 1.02, some), rng.uniform(0.53, 0.6, some)]))
    ends = [either_sign(rng, rng.uniform(700, 710.4, some))] if name != "vtanh" else []
    return [rng.uniform(-3, 3, some), rng.uniform(-25, 25, some), near_zero, joints, *ends]


@pytest.mark.parametrize("name", ONE_ARGUMENT)
def test_within_units_in_the_last_place(name):
    x = np.concatenate(arguments(name))
    exact = getattr(mpmath, name[1:])
    with mpmath.workprec(160):
        truths = [exact(mpmath.mpf(float(argument))) for argument in x]
        assert worst_error(over_arrays(name)(x), truths) <= UNITS[name]


def test_atan2_within_units_in_the_last_place():
    rng = np.random.default_rng(812)
    y = np.concatenate([rng.normal(size=800), either_sign(rng, over_decades(rng, -300, 300, 800)), np.ones(800)])
    x = np.concatenate([rng.normal(size=800), either_sign(rng, over_decades(rng, -300, 300, 800))])
    x = np.concatenate([x, either_sign(rng, rng.uniform(0.45, 2.2, 800))])
    with mpmath.workprec(160):
        truths = [mpmath.atan2(mpmath.mpf(float(a)), mpmath.mpf(float(b))) for a, b in zip(y, x, strict=True)]
        assert worst_error(over_arrays("vatan2")(y, x), truths) <= UNITS["vatan2"]


def test_power_within_units_in_the_last_place():
    rng = np.random.default_rng(813)
    near_one = 1 + either_sign(rng, over_decades(rng, -12, -0.5, 800))
    base = np.concatenate([over_decades(rng, -3, 3, 800), near_one, over_decades(rng, -300, 300, 800)])
    base = np.concatenate([base, rng.uniform(0.4, 2.5, 800), rng.integers(1, 2**50, 100) * 5e-324])
    # Exponents that take the result to both ends of the floats, where an error of the logarithm counts most.
    exponent = rng.uniform(-740, 709, base.size) / np.log(base)
    exponent[:800] = rng.uniform(-20, 20, 800)
    with mpmath.workprec(160):
        pairs = zip(base, exponent, strict=True)
        truths = [mpmath.power(mpmath.mpf(float(a)), mpmath.mpf(float(b))) for a, b in pairs]
        assert worst_error(over_arrays("vpower")(base, exponent), truths) <= UNITS["vpower"]


def assert_same(values, expected):
    """Equal to two units, and in the kind of number and the sign of zeros."""
    np.testing.assert_allclose(values, expected, rtol=5e-16, atol=0)
    known = ~np.isnan(expected)
    np.testing.assert_array_equal(np.signbit(values[known]), np.signbit(expected[known]))


@pytest.mark.parametrize("name", ONE_ARGUMENT)
def test_ends_of_the_floats(name):
    x = SPECIAL if vector_math.FILES[name] != "circular" else SPECIAL[~(np.abs(SPECIAL) > 1e6)]
    numpy_name = {"asin": "arcsin", "acos": "arccos", "atan": "arctan"}.get(name[1:], name[1:])
    with np.errstate(all="ignore"):
        assert_same(over_arrays(name)(x), getattr(np, numpy_name)(x))


def test_atan2_on_all_sides():
    y, x = (grid.ravel() for grid in np.meshgrid(SPECIAL, SPECIAL))
    assert_same(over_arrays("vatan2")(y, x), np.arctan2(y, x))


@pytest.mark.parametrize("exponent", [1.3, -1.3, 0.1, -1e-300, 1e200, -710.7])
def test_power_at_the_ends_of_the_floats(exponent):
    base = SPECIAL[SPECIAL >= 0]  # -0.0 too
    with np.errstate(all="ignore"):
        expected = np.power(np.abs(base), exponent)
    assert_same(over_arrays("vpower")(base, np.full_like(base, exponent)), expected)
    none = np.array([-5e-324, -1.0, -math.inf, math.nan])
    assert np.isnan(over_arrays("vpower")(none, np.full_like(none, exponent))).all()


@pytest.mark.parametrize("name", ["vsin", "vcos", "vtan"])
def test_no_number_where_the_reduction_ends(name):
    assert np.isnan(over_arrays(name)(np.array([math.inf, -math.inf, 1.1e6, -1e300]))).all()


def test_source_holds_what_is_used_and_no_more():
    text = vector_math.source({"vtanh"})
    assert "def vtanh(" in text
    assert text.index("def scaled_exp(") < text.index("def vtanh(")
    assert "def vlog(" not in text
    assert "roa.kernel" not in text
    assert "packed = njit(" in vector_math.source(())


@pytest.mark.parametrize("name", vector_math.FILES)
def test_source_of_each_function_stands_alone(name):
    space = {}
    exec(vector_math.source({name}), space)
    arguments = (0.3,) if name in ONE_ARGUMENT else (0.3, 1.7)
    stands = {"vatan2": math.atan2, "vpower": math.pow}.get(name) or getattr(math, name[1:])
    assert space[name](*arguments) == pytest.approx(stands(*arguments), rel=1e-15)
