"""Levels within limits: closed forms for linear values, and limits that a formula keeps by itself."""

from decimal import Decimal

import numpy as np
import pytest

import gallery
from roa.bound.bounds import derive_bounds
from roa.bound.limited_level import LimitProver
from roa.bound.target_set import target_set
from roa.loop.equilibrium import find_equilibrium

SIGNALS = {"low": "-0.1", "sum": "x + 2*v", "push": "clip(sum, low, cut)", "bent": "sum + x**2", "least": "min(v, 0.2)"}


def derived(limits, **keywords):
    given = gallery.spring(signals=SIGNALS, parameters={"cut": 0.1}, limits=limits, **keywords)
    equilibrium = find_equilibrium(given.loop, "test")
    bounds = derive_bounds(given, equilibrium)
    return given, equilibrium, bounds


def largest(limits):
    bounds = derived(limits)[2]
    best = bounds.largest_proved
    return best.V.P, best.level, LimitProver(best.V).largest(best.level)


@pytest.mark.parametrize(
    ("name", "ends", "weights"),
    [("x", (-0.2, 0.3), [1, 0]), ("sum", (-0.5, 0.4), [1, 2]), ("v", (-0.3, 0.1), [0, 1])],
)
def test_linear_value_has_a_closed_form(name, ends, weights):
    P, _, level = largest({name: ends})
    c = np.array(weights, float)
    # max c'x on x'Px <= level is sqrt(level c'P^-1 c).
    expected = min(map(abs, ends)) ** 2 / (c @ np.linalg.solve(P, c))
    assert expected * (1 - 1e-4) < level <= expected


def test_the_most_narrow_limit_decides():
    P, whole, level = largest({"x": (-0.2, 0.3), "v": (-0.01, 0.1)})
    assert level == pytest.approx(1e-4 / np.linalg.inv(P)[1, 1], rel=1e-4)
    assert level < whole


@pytest.mark.parametrize("limits", [{"push": (-0.1, 0.1)}, {"push": (-0.1, 5.0)}, {"least": (-99.0, 0.2)}])
def test_limit_that_the_formula_keeps_lowers_nothing(limits):
    _, whole, level = largest(limits)
    assert level == whole


def test_limit_narrower_than_the_clip_lowers_the_level():
    P, _, level = largest({"push": (-0.0999, 0.1)})
    c = np.array([1.0, 2.0])
    assert level == pytest.approx(0.0999**2 / (c @ np.linalg.solve(P, c)), rel=1e-4)


def test_set_of_a_bent_value_stays_within():
    P, _, level = largest({"bent": (-0.5, 0.4)})
    angles = np.linspace(0, 2 * np.pi, 100_000)
    edge = np.sqrt(level) * np.linalg.solve(np.linalg.cholesky(P).T, np.stack([np.cos(angles), np.sin(angles)])).T
    bent = edge[:, 0] + 2 * edge[:, 1] + edge[:, 0] ** 2
    assert bent.max() < 0.4
    assert bent.min() > -0.5
    assert max(bent.max() / 0.4, bent.min() / -0.5) > 0.999


def test_target_lies_within_the_limits_and_says_so():
    given, equilibrium, bounds = derived({"x": (-0.2, 0.3)})
    target = target_set(given, equilibrium, bounds, np.empty((0, 2)))
    assert target.kind == "level"
    assert np.sqrt(target.level * np.linalg.inv(target.P)[0, 0]) <= 0.2
    assert "within the limits" in target.words


def test_ball_where_no_level_is_proved_to_stay_within():
    # The root is not defined on one side of the equilibrium however small the level is.
    given = gallery.spring(signals={"root": "sqrt(1e-30 + x)"}, limits={"root": (-1.0, 1.0)})
    equilibrium = find_equilibrium(given.loop, "test")
    target = target_set(given, equilibrium, derive_bounds(given, equilibrium), np.empty((0, 2)))
    assert target.kind == "ball"
    assert "no level is proved to lie within the limits" in target.words


def test_level_is_judged_exactly():
    V = derived({"x": (-0.2, 0.3)})[2].largest_proved.V
    reach = Decimal(0.04 / float(np.linalg.inv(V.P)[0, 0]))
    assert LimitProver(V).holds(reach * Decimal("0.999"))
    assert not LimitProver(V).holds(reach * Decimal("1.001"))


def test_bounds_say_that_they_look_at_no_limit():
    # x' = -x + x³: |x| < 1 converges, while x = 0.9 begins beyond the limit.
    configuration = gallery.configuration(
        "x", ["-x + x**3"], [(-2.0, 2.0)], limits={"x": (-0.6, 0.6)}, bound='Q = "identity"'
    )
    bounds = derive_bounds(configuration, find_equilibrium(configuration.loop, "test"))
    assert bounds.largest_proved.level > 0.4
    assert "may cross a limit" in bounds.note
