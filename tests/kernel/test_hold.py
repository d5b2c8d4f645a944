"""Lanes of sampled loops: closed forms, scipy from sample to sample, and instants that do not drift."""

from dataclasses import replace

import numpy as np
import pytest
from scipy.integrate import solve_ivp

import gallery
from roa.kernel.integration import Integration
from roa.kernel.lanes import compile_lanes
from roa.kernel.outcomes import Outcome
from roa.kernel.target import Target

SETTINGS = Integration("tsitouras5", rtol=1e-9, atol=1e-12, horizon=60.0, longest=4000.0, escape=10.0)
MAKERS = {
    "none": gallery.sampled_saturation,
    "part": gallery.sampled_double_integrator,
    "full": gallery.sampled_pendulum,
}


def ball(loop, radius=1e-3, dwell=54.0):
    return Target("ball", np.zeros(loop.n), loop.half_widths, radius=radius, dwell=dwell)


def stepped(rhs, command, start, period, delay, end):
    """Simulate from instant to instant by scipy; the command of k period acts from k period + delay."""
    x, acting = np.array(start, float), command(np.zeros(len(start)))
    for k in range(int(np.ceil(end / period - 1e-12))):
        newest = command(x)
        for begin, stop, u in (
            (k * period, min(k * period + delay, end), acting),
            (min(k * period + delay, end), min((k + 1) * period, end), newest),
        ):
            if stop > begin:
                x = solve_ivp(rhs, (begin, stop), x, "DOP853", rtol=1e-12, atol=1e-13, args=(u,)).y[:, -1]
        acting = newest
    return x


def test_basin_of_the_sampled_saturation():
    # Its basin is |x| < 1 exactly for every period below ln 2 (computed independently).
    loop = gallery.sampled_saturation(0.69).loop
    starts = np.concatenate([np.linspace(-0.9999, 0.9999, 2001), [1.0001, -1.0001, 1.4]])[:, None]
    result = compile_lanes(loop, ball(loop), replace(SETTINGS, rtol=1e-6)).run(starts)
    assert (result.outcome[:2001] == Outcome.CONVERGED).all()
    assert (result.outcome[2001:] == Outcome.ESCAPED).all()
    # Entry is judged at sampling instants, which are whole numbers of periods to the last bit: they do not drift.
    moved = result.time[:2001][result.time[:2001] > 0]
    np.testing.assert_array_equal(np.round(moved / 0.69) * 0.69, moved)
    assert moved.max() > 400 * 0.69


def test_nothing_converges_beyond_the_limit_of_the_period():
    loop = gallery.sampled_saturation(0.70).loop
    starts = np.linspace(-0.9999, 0.9999, 400)[:, None]
    result = compile_lanes(loop, ball(loop), replace(SETTINGS, rtol=1e-6, longest=400.0)).run(starts)
    assert (result.outcome == Outcome.UNRESOLVED).all()
    # What is left is an orbit of two samples between which the command is saturated; its amplitude at the samples
    # is (E - 1)/(E + 1), E = e^0.7 (computed independently).
    assert np.abs(result.final).max() <= (np.exp(0.7) - 1) / (np.exp(0.7) + 1) + 1e-6


@pytest.mark.parametrize(("make", "delay"), [("part", 0.03), ("full", 0.1)])
def test_state_against_scipy_from_sample_to_sample(make, delay):
    if make == "part":
        rhs, command = lambda _, x, u: [x[1], u], lambda x: np.clip(-x[0] - 1.5 * x[1], -1, 1)
    else:
        rhs = lambda _, x, u: [x[1], 4 * np.sin(x[0]) - 0.3 * x[1] + u]  # noqa: E731
        command = lambda x: np.clip(-10 * x[0] - 4 * x[1], -2.5, 2.5)  # noqa: E731
    loop = MAKERS[make](0.1, delay).loop
    starts = np.random.default_rng(3).uniform(loop.box[:, 0], loop.box[:, 1], (6, 2)) * 0.4
    for end in (1.95, 2.5, 0.02):
        settings = replace(SETTINGS, longest=end, escape=100.0)
        result = compile_lanes(loop, ball(loop, radius=1e-12), settings).run(starts)
        assert (result.outcome == Outcome.UNRESOLVED).all()
        expected = [stepped(rhs, command, start, 0.1, delay, end) for start in starts]
        np.testing.assert_allclose(result.final, expected, atol=1e-8)


def test_result_hangs_on_the_start_alone():
    loop = gallery.sampled_double_integrator(0.1, 0.03).loop
    lanes = compile_lanes(loop, ball(loop, dwell=5.0), replace(SETTINGS, rtol=1e-6))
    starts = np.random.default_rng(9).uniform(loop.box[:, 0], loop.box[:, 1], (400, 2))
    whole = lanes.run(starts)
    order = np.random.default_rng(10).permutation(len(starts))
    shuffled, part = lanes.run(starts[order]), lanes.run(starts[7:40])
    for name in ("outcome", "time", "final", "peak", "steps", "reason"):
        np.testing.assert_array_equal(getattr(shuffled, name), getattr(whole, name)[order])
        np.testing.assert_array_equal(getattr(part, name), getattr(whole, name)[7:40])
    assert (whole.outcome == Outcome.CONVERGED).all()  # x'' = clip(PD) comes back from everywhere, also when sampled


def test_start_that_is_no_number_fails():
    loop = gallery.sampled_double_integrator(0.1, 0.03).loop
    lanes = compile_lanes(loop, ball(loop, dwell=5.0), replace(SETTINGS, rtol=1e-6))
    result = lanes.run(np.array([[np.nan, 0.0], [0.0, np.inf], [0.1, 0.1]]))
    assert list(result.outcome) == [Outcome.FAILED, Outcome.FAILED, Outcome.CONVERGED]
