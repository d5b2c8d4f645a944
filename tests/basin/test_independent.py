"""The independent integrator: the outcomes of the sweep's rules, closed forms, and trouble as a value."""

import math

import numpy as np
import pytest

import gallery
from roa.basin.independent import decide, path
from roa.kernel.integration import Integration
from roa.kernel.outcomes import Outcome, Reason
from roa.kernel.target import Target

SETTINGS = Integration("tsitouras5", rtol=1e-6, atol=1e-9, horizon=60.0, longest=60.0, escape=10.0)


def level_target(loop, level):
    return Target("level", np.zeros(loop.n), loop.half_widths, P=np.eye(loop.n), level=level)


def ball_target(loop, dwell=5.0, centre=None, elsewhere=()):
    centre = np.zeros(loop.n) if centre is None else np.asarray(centre, float)
    others = np.array(elsewhere, float).reshape(-1, loop.n)
    return Target("ball", centre, loop.half_widths, radius=1e-2, dwell=dwell, elsewhere=others)


def end(loop, target, *start, settings=SETTINGS):
    return decide(loop, target, settings, np.array(start, float), 1e-9, 1e-12)


def one_state(text, **keywords):
    return gallery.configuration("x", [text], [(-2.0, 2.0)], **keywords).loop


def test_converges_at_the_time_of_the_closed_form():
    # x' = -x + x³: x²/(1 - x²) = e^(-2t) x0²/(1 - x0²); 0.9999 down to 0.01 takes 8.863642 (computed independently).
    loop = gallery.cubic().loop
    decision = end(loop, level_target(loop, 1e-4), 0.9999)
    assert decision.outcome is Outcome.CONVERGED
    assert decision.reason is Reason.NONE
    # Between two looks the entry may have happened earlier; the looks lie a quarter of a step apart.
    assert 8.863642 <= decision.time <= 9.2
    assert abs(decision.final[0]) <= 0.01
    assert decision.peak[0] == pytest.approx(0.9999)


def test_escapes_at_the_time_of_the_closed_form():
    # To the face X of the escape box: ½ ln(x0²(X² - 1)/(X²(x0² - 1))) (computed independently).
    loop = gallery.cubic().loop
    decision = end(loop, level_target(loop, 1e-4), 1.0001)
    face = 0.5 * math.log(1.0001**2 * 399 / (400 * (1.0001**2 - 1)))
    assert decision.outcome is Outcome.ESCAPED
    assert face <= decision.time <= 4.258671591
    assert abs(decision.final[0]) > 20


@pytest.mark.parametrize("size", [0.999, 1.001])
def test_both_sides_of_the_unit_ball(size):
    loop = gallery.ball(3).loop
    start = size * np.array([2.0, -1.0, 2.0]) / 3
    decision = end(loop, level_target(loop, 0.25), *start)
    assert decision.outcome is (Outcome.CONVERGED if size < 1 else Outcome.ESCAPED)


def test_start_in_the_target_or_out_of_the_box_is_decided_at_once():
    loop = gallery.cubic().loop
    assert end(loop, level_target(loop, 0.25), 0.4).steps == 0
    outside = end(loop, level_target(loop, 0.25), 30.0)
    assert (outside.outcome, outside.time, outside.steps) == (Outcome.ESCAPED, 0.0, 0)


def test_ball_tells_entry_and_not_the_end_of_the_dwell():
    loop = one_state("-x")
    decision = end(loop, ball_target(loop, dwell=3.0), 1.0)
    assert decision.outcome is Outcome.CONVERGED
    assert math.log(50) <= decision.time < math.log(50) + 1  # the ball has radius 0.02
    assert 0.005 < decision.final[0] <= 0.02


def test_ball_that_is_crossed_is_not_convergence():
    # An undamped oscillation through the ball about its own centre of rest never stays.
    loop = gallery.configuration("xv", ["v", "-x"], [(-2.0, 2.0)] * 2).loop
    decision = end(loop, ball_target(loop), 1.0, 0.0, settings=SETTINGS)
    assert decision.outcome is Outcome.UNRESOLVED
    assert decision.time == SETTINGS.longest


def test_ball_that_does_not_attract_is_not_convergence():
    # A slow circle inside the ball: it never halves its distance.
    loop = gallery.configuration("xv", ["v", "-x"], [(-2.0, 2.0)] * 2).loop
    assert end(loop, ball_target(loop), 0.001, 0.0).outcome is Outcome.UNRESOLVED


def test_settles_elsewhere():
    loop = gallery.parabola().loop
    target = ball_target(loop, centre=[1.0, 0.0], elsewhere=[[-1.0, 0.0]])
    assert end(loop, target, -0.5, 0.5).outcome is Outcome.SETTLED_ELSEWHERE
    assert end(loop, target, 0.5, 0.5).outcome is Outcome.CONVERGED


def test_limit_cycle_is_unresolved():
    # Van der Pol forwards in time: a stable limit cycle about an unstable point.
    loop = gallery.configuration("xy", ["y", "-x - (x**2 - 1)*y"], [(-3.0, 3.0)] * 2).loop
    assert end(loop, level_target(loop, 1e-4), 0.5, 0.5).outcome is Outcome.UNRESOLVED


@pytest.mark.parametrize(
    ("text", "start", "outcome", "reason"),
    [
        ("1/(1 - x)", 0.5, Outcome.FAILED, Reason.STEP_UNDERFLOW),  # runs into a pole inside the domain
        ("-1 - sqrt(x + 0.5)", -0.1, Outcome.FAILED, Reason.NOT_FINITE),  # below -0.5 there is no number
        ("log(x)", -1.0, Outcome.FAILED, Reason.NOT_FINITE),  # none at the start
        ("exp(x**2)", 1.0, Outcome.ESCAPED, Reason.BLOW_UP),  # faster than any step, outside the domain
    ],
)
def test_numerical_trouble_is_an_outcome(text, start, outcome, reason):
    loop = one_state(text, equilibrium={"x": 0.3})
    decision = end(loop, level_target(loop, 1e-6), start)
    assert decision.outcome is outcome
    assert decision.reason is reason
    assert np.isfinite(decision.time)


def test_step_cap_is_named():
    loop = gallery.configuration("xv", ["v", "-10000*x"], [(-2.0, 2.0), (-200.0, 200.0)]).loop
    settings = Integration("tsitouras5", 1e-6, 1e-9, horizon=60.0, longest=960.0, escape=10.0, step_cap=300)
    decision = end(loop, level_target(loop, 1e-6), 1.0, 0.0, settings=settings)
    assert (decision.outcome, decision.reason, decision.steps) == (Outcome.FAILED, Reason.STEP_CAP, 300)


def test_stiff_loop_is_integrated_by_radau():
    # An actuator with a lag of 1e-5 s: DOP853 would need some millions of steps.
    loop = gallery.configuration("xu", ["u", "(-x - u)/1e-5"], [(-2.0, 2.0)] * 2).loop
    decision = end(loop, level_target(loop, 1e-4), 1.0, 1.0)
    assert (decision.outcome, decision.method) == (Outcome.CONVERGED, "Radau")
    assert decision.steps < 1000
    assert decision.time == pytest.approx(0.5 * math.log(2e4), rel=0.1)  # x = -u = e^-t, |(x, u)| = 0.01


def test_path_follows_the_closed_form():
    loop = gallery.cubic().loop
    times, states = path(loop, np.array([0.9]), 3.0, 61)
    ratio = np.exp(-2 * times) * 0.81 / 0.19
    assert len(times) == 61
    assert times[-1] == 3.0
    np.testing.assert_allclose(states[:, 0], np.sqrt(ratio / (1 + ratio)), rtol=1e-6)


def test_path_ends_where_the_picture_does():
    loop = gallery.cubic().loop
    times, states = path(loop, np.array([2.0]), 3.0, 50)
    assert times[-1] < 0.14384103622589  # blow-up of the closed form (computed independently)
    assert np.isfinite(states).all()
    assert 20 <= states[-1, 0] < 1e6


def test_path_without_a_single_step_is_the_start():
    loop = one_state("log(x) + 0.5", equilibrium={"x": 0.5})
    times, states = path(loop, np.array([-1.0]), 3.0, 50)
    assert times.tolist() == [0.0]
    assert states.tolist() == [[-1.0]]
