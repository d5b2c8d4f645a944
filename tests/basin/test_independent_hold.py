"""The independent integrator of sampled loops: closed form, and agreement with the lanes."""

import math

import numpy as np
import pytest

import gallery
from roa.basin.controller import Controller
from roa.basin.independent import decide, path
from roa.kernel.integration import Integration
from roa.kernel.lanes import compile_lanes
from roa.kernel.outcomes import Outcome
from roa.kernel.target import Target

SETTINGS = Integration("tsitouras5", rtol=1e-7, atol=1e-10, horizon=60.0, longest=60.0, escape=10.0)


def test_scalar_loop_at_its_samples():
    # x+ = E x - (E - 1) sat(3 x), E = e^T (computed independently); the path is looked at between the samples too.
    loop = gallery.sampled_saturation(0.3).loop
    times, states = path(loop, np.array([0.8]), 1.5, 6)
    x, expected = 0.8, []
    for _ in range(6):
        expected.append(x)
        x = math.exp(0.3) * x - (math.exp(0.3) - 1) * min(max(3 * x, -1), 1)
    np.testing.assert_allclose(times, 0.3 * np.arange(6), atol=1e-12)
    np.testing.assert_allclose(states[:, 0], expected, atol=1e-7)


@pytest.mark.parametrize(("delay", "acting"), [(0.0, [-0.5, -0.7]), (0.1, [0.0, -0.5]), (0.04, [0.0, -0.5])])
def test_command_waits_for_its_delay(delay, acting):
    loop = gallery.sampled_saturation(0.1, delay).loop
    controller = Controller(loop, np.zeros(1), np.array([0.5 / 3]))
    assert controller.flow.u[0] == pytest.approx(acting[0])
    assert controller.next_instant == pytest.approx(delay or 0.1)
    while controller.next_instant < 0.1 - 1e-12:
        assert not controller.meet(controller.next_instant, np.array([9.0]))
        assert controller.flow.u[0] == pytest.approx(-0.5)
    assert controller.meet(controller.next_instant, np.array([0.7 / 3]))
    assert controller.flow.u[0] == pytest.approx(acting[1])


@pytest.mark.parametrize(
    ("make", "delay"), [(gallery.sampled_double_integrator, 0.03), (gallery.sampled_pendulum, 0.1)]
)
def test_same_ends_as_the_lanes(make, delay):
    loop = make(0.1, delay).loop
    target = Target("ball", np.zeros(2), loop.half_widths, radius=1e-3, dwell=4.0)
    starts = np.random.default_rng(5).uniform(loop.box[:, 0], loop.box[:, 1], (6, 2))
    trajectories = compile_lanes(loop, target, SETTINGS).run(starts)
    for i, start in enumerate(starts):
        decision = decide(loop, target, SETTINGS, start, 1e-8, 1e-11)
        assert decision.outcome == trajectories.outcome[i]
        if decision.outcome is Outcome.CONVERGED:
            assert decision.time == pytest.approx(trajectories.time[i], abs=1e-12)
            np.testing.assert_allclose(decision.final, trajectories.final[i], atol=1e-6)
