"""Limits in the lanes and in the independent integrator, against the closed form of a damped spring."""

import math

import numpy as np
import pytest

import gallery
from roa.basin.independent import decide
from roa.kernel.integration import Integration
from roa.kernel.lanes import compile_lanes
from roa.kernel.outcomes import Outcome
from roa.kernel.target import Target

SETTINGS = Integration("tsitouras5", rtol=1e-6, atol=1e-9, horizon=60.0, longest=240.0, escape=10.0)
# x'' = -x - 0.4 x'; `push` is cut off where its limit lies, `spoilt` has no value for negative x.
LIMITS = {"x": (-1.0, 0.8), "push": (-0.5, 0.5)}
SIGNALS = {"push": "clip(x + v, -0.5, 0.5)", "spoilt": "sqrt(x + 0.25)"}
DECAY, TURN = 0.2, math.sqrt(0.96)


def loop_with(limits):
    return gallery.spring(signals=SIGNALS, limits=limits).loop


def target_of(loop, level=0.01):
    return Target("level", np.zeros(2), loop.half_widths, P=np.eye(2), level=level)


def extremes(start):
    """Smallest and largest x of the closed form x = e^(-DECAY t)(x0 cos + b sin), t >= 0: at t = 0 or x' = 0."""
    x0, v0 = start
    b = (v0 + DECAY * x0) / TURN
    first = math.atan2(TURN * b - DECAY * x0, TURN * x0 + DECAY * b) % math.pi / TURN
    times = (0.0, first, first + math.pi / TURN)
    turns = [math.exp(-DECAY * t) * (x0 * math.cos(TURN * t) + b * math.sin(TURN * t)) for t in times]
    return min(turns), max(turns)


@pytest.fixture(scope="module")
def swept():
    loop = loop_with(LIMITS)
    starts = np.random.default_rng(4).uniform(loop.box[:, 0], loop.box[:, 1], (4000, 2))
    return loop, starts, compile_lanes(loop, target_of(loop), SETTINGS).run(starts)


def test_over_limit_is_what_the_closed_form_says(swept):
    _, starts, result = swept
    ends = np.array([extremes(start) for start in starts])
    over = (ends[:, 0] < -1) | (ends[:, 1] > 0.8)
    clear = (np.abs(ends[:, 0] + 1) > 1e-4) & (np.abs(ends[:, 1] - 0.8) > 1e-4)
    np.testing.assert_array_equal(result.outcome[clear] == Outcome.CONVERGED_OVER_LIMIT, over[clear])
    assert set(result.outcome) == {Outcome.CONVERGED, Outcome.CONVERGED_OVER_LIMIT}
    assert clear.sum() > 3900


def test_peak_is_true_between_steps_where_there_are_limits(swept):
    _, starts, result = swept
    exact = np.array([max(map(abs, extremes(start))) for start in starts])
    # The target lies within |x| <= 0.1, so that a start outside it has its largest excursion before the entry.
    outside = (starts**2).sum(axis=1) > 0.1
    np.testing.assert_allclose(result.peak[outside, 0], exact[outside], rtol=0, atol=1e-4)


def test_independent_integrator_sees_the_same_crossings(swept):
    loop, starts, result = swept
    for i in range(40):
        low, high = extremes(starts[i])
        if min(abs(low + 1), abs(high - 0.8)) > 1e-2:
            decision = decide(loop, target_of(loop), SETTINGS, starts[i], 1e-7, 1e-10)
            assert decision.outcome == result.outcome[i]


def test_limit_is_a_value_that_may_be_reached_and_not_exceeded():
    loop = loop_with(LIMITS)
    lanes = compile_lanes(loop, target_of(loop), SETTINGS)
    starts = np.array([[0.8, 0.0], [np.nextafter(0.8, 1), 0.0], [-1.0, 0.0], [0.05, 0.0], [0.0, 0.9]])
    expected = [Outcome.CONVERGED, Outcome.CONVERGED_OVER_LIMIT] + 3 * [Outcome.CONVERGED]
    assert list(lanes.run(starts).outcome) == expected
    assert [decide(loop, target_of(loop), SETTINGS, start, 1e-7, 1e-10).outcome for start in starts] == expected


def test_signal_that_is_no_number_is_not_within_its_limits():
    loop = loop_with({"spoilt": (0.0, 9.0)})
    lanes = compile_lanes(loop, target_of(loop), SETTINGS)
    # From 1 the spring swings to about -0.53, from 0.3 to about -0.16: the root ends at -0.25.
    starts = np.array([[1.0, 0.0], [0.3, 0.0], [-0.3, 0.0]])
    assert list(lanes.run(starts).outcome) == [
        Outcome.CONVERGED_OVER_LIMIT, Outcome.CONVERGED, Outcome.CONVERGED_OVER_LIMIT,
    ]  # fmt: skip


def test_start_in_the_target_but_over_a_limit_is_over_the_limit():
    # Sweeps lower the target until it lies within the limits; the kernel does not rely on it.
    loop = loop_with({"x": (-0.05, 0.05)})
    lanes = compile_lanes(loop, target_of(loop, level=1.0), SETTINGS)
    assert list(lanes.run(np.array([[0.06, 0.0], [0.04, 0.0]])).outcome) == [
        Outcome.CONVERGED_OVER_LIMIT, Outcome.CONVERGED,
    ]  # fmt: skip


def test_ball_counts_what_is_crossed_before_it_is_left_no_more():
    loop = loop_with(LIMITS)
    ball = Target("ball", np.zeros(2), loop.half_widths, radius=1e-2, dwell=20.0)
    starts = np.array([[0.79, 0.0], [0.0, 1.2]])
    result = compile_lanes(loop, ball, SETTINGS).run(starts)
    assert list(result.outcome) == [Outcome.CONVERGED, Outcome.CONVERGED_OVER_LIMIT]
    assert (np.linalg.norm(result.final / loop.half_widths, axis=1) <= 1e-2).all()
