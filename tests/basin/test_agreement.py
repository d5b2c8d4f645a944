"""The lanes and the independent integrator, written apart from each other, give the same outcomes."""

import numpy as np
import pytest

import gallery
from roa.basin.independent import decide
from roa.kernel.integration import Integration
from roa.kernel.lanes import compile_lanes
from roa.kernel.outcomes import Outcome
from roa.kernel.target import Target

SETTINGS = Integration("tsitouras5", rtol=1e-6, atol=1e-9, horizon=60.0, longest=240.0, escape=10.0)


@pytest.fixture(scope="module")
def parabola():
    """Target ball, another equilibrium to settle at, and starts from which trajectories escape: all rules at once."""
    loop = gallery.parabola().loop
    target = Target(
        "ball", np.array([1.0, 0.0]), loop.half_widths, radius=1e-3, dwell=5.0, elsewhere=np.array([[-1.0, 0.0]])
    )
    return loop, target, compile_lanes(loop, target, SETTINGS)


def test_same_outcome_at_about_the_same_time(parabola):
    loop, target, lanes = parabola
    starts = np.random.default_rng(77).uniform(loop.box[:, 0], loop.box[:, 1], (40, 2))
    trajectories = lanes.run(starts)
    assert {Outcome.CONVERGED, Outcome.SETTLED_ELSEWHERE} <= set(trajectories.outcome)
    for i, start in enumerate(starts):
        decision = decide(loop, target, SETTINGS, start, 1e-7, 1e-10)
        assert decision.outcome == trajectories.outcome[i]
        # Both tell the entry into the ball at the end of a step, or a part of one.
        assert decision.time == pytest.approx(trajectories.time[i], abs=0.7)
        assert np.all(decision.peak >= trajectories.peak[i] * 0.98)


def test_same_trouble(parabola):
    loop, target, lanes = parabola
    starts = np.array([[np.nan, 0.0], [30.0, 0.0]])
    trajectories = lanes.run(starts)
    for i, start in enumerate(starts):
        decision = decide(loop, target, SETTINGS, start, 1e-7, 1e-10)
        assert decision.outcome == trajectories.outcome[i] != Outcome.CONVERGED
