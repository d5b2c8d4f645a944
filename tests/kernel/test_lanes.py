"""The lanes: every outcome by its rule, closed forms, and a result that hangs on its start alone."""

import math
import os
import re
import subprocess
import sys
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

import gallery
from roa.kernel import generated, methods
from roa.kernel.integration import Integration
from roa.kernel.lane_source import lane_source
from roa.kernel.lanes import compile_lanes
from roa.kernel.outcomes import Outcome, Reason
from roa.kernel.straight_line import right_hand_side
from roa.kernel.target import Target
from roa.loop.read import read

CONFIGS = Path(__file__).parents[2] / "configs"
SETTINGS = Integration("tsitouras5", rtol=1e-6, atol=1e-9, horizon=60.0, longest=960.0, escape=10.0)


def level_target(loop, level, centre=None):
    centre = np.zeros(loop.n) if centre is None else np.asarray(centre, float)
    return Target("level", centre, loop.half_widths, P=np.eye(loop.n), level=level)


def ball_target(loop, dwell=5.0, centre=None, radius=1e-3, elsewhere=()):
    centre = np.zeros(loop.n) if centre is None else np.asarray(centre, float)
    others = np.array(elsewhere, float).reshape(-1, loop.n)
    return Target("ball", centre, loop.half_widths, radius=radius, dwell=dwell, elsewhere=others)


def column(values):
    return np.array(values, float)[:, None]


def one_state(text, **keywords):
    return gallery.configuration("x", [text], [(-2.0, 2.0)], **keywords).loop


def closed_form_time(start, end):
    """Time of x' = -x + x³ from start to end: x²/(1 - x²) = e^(-2t) x0²/(1 - x0²)."""
    return 0.5 * (math.log(start**2 / abs(1 - start**2)) - math.log(end**2 / abs(1 - end**2)))


def test_closed_form_of_the_cubic_loop():
    loop = gallery.cubic().loop
    lanes = compile_lanes(loop, level_target(loop, 0.01**2), replace(SETTINGS, rtol=1e-9, atol=1e-12))
    starts = np.concatenate([np.linspace(-1.9, 1.9, 96), [0.9999, 1.0001]])
    result = lanes.run(column(starts))
    inside = np.abs(starts) < 1
    np.testing.assert_array_equal(result.outcome == Outcome.CONVERGED, inside)
    np.testing.assert_array_equal(result.outcome == Outcome.ESCAPED, ~inside)
    moved = result.steps > 0
    expected = [closed_form_time(a, b) for a, b in zip(starts[moved], result.final[moved, 0], strict=True)]
    np.testing.assert_allclose(result.time[moved], expected, rtol=0, atol=1e-6)
    assert (np.abs(result.final[inside]) <= 0.01).all()
    assert (np.abs(result.final[~inside]) > 20).all()


def test_every_method_follows_the_closed_form_of_the_cubic_loop():
    loop = gallery.cubic().loop
    starts = np.concatenate([np.linspace(-1.9, 1.9, 48), [0.999, 1.001]])
    inside = np.abs(starts) < 1
    calls = {}
    for name in methods.available():
        settings = replace(SETTINGS, method=name, rtol=1e-10, atol=1e-12)
        result = compile_lanes(loop, level_target(loop, 0.01**2), settings).run(column(starts))
        np.testing.assert_array_equal(result.outcome == Outcome.CONVERGED, inside)
        np.testing.assert_array_equal(result.outcome == Outcome.ESCAPED, ~inside)
        moved = result.steps > 0
        expected = [closed_form_time(a, b) for a, b in zip(starts[moved], result.final[moved, 0], strict=True)]
        np.testing.assert_allclose(result.time[moved], expected, rtol=0, atol=2e-7)
        calls[name] = result.steps.sum() * (methods.load(name).stages - 1)
    # At a tight tolerance a high order needs fewer evaluations of f.
    assert calls["dormand_prince8"] < calls["tsitouras5"] < calls["bogacki_shampine3"]


def test_end_of_the_horizon_is_met_exactly():
    loop = gallery.cubic().loop
    settings = replace(SETTINGS, rtol=1e-10, atol=1e-13, longest=3.0)
    result = compile_lanes(loop, level_target(loop, 1e-12), settings).run(column([0.9]))
    assert result.outcome[0] == Outcome.UNRESOLVED
    assert result.time[0] == pytest.approx(3.0, abs=1e-11)
    assert result.final[0, 0] == pytest.approx(0.10225855231765307, abs=1e-9)


@pytest.mark.parametrize("n", [2, 4])
def test_outcomes_of_the_unit_ball(n):
    loop = gallery.ball(n).loop
    lanes = compile_lanes(loop, level_target(loop, 0.5), SETTINGS)
    starts = np.random.default_rng(n).uniform(-1.2, 1.2, (5000, n))
    radius = np.linalg.norm(starts, axis=1)
    clear = np.abs(radius - 1) > 1e-5
    result = lanes.run(starts)
    np.testing.assert_array_equal((result.outcome == Outcome.CONVERGED)[clear], (radius < 1)[clear])
    assert ((result.outcome == Outcome.CONVERGED) | (result.outcome == Outcome.ESCAPED)).all()
    at_once = radius**2 <= 0.5
    assert (result.time[at_once] == 0).all()
    assert (result.steps[at_once] == 0).all()


def test_peak_is_the_largest_excursion():
    # x'' = -x with damping: from (1, 0) the speed peaks on the way and the position never exceeds 1.
    loop = gallery.configuration("xv", ["v", "-x - 0.1*v"], [(-2.0, 2.0)] * 2).loop
    result = compile_lanes(loop, level_target(loop, 1e-4), replace(SETTINGS, rtol=1e-9)).run(np.array([[1.0, 0.0]]))
    w = math.sqrt(1 - 0.05**2)
    quarter = math.atan(w / 0.05) / w
    speed = math.exp(-0.05 * quarter) * math.sin(w * quarter) / w
    assert result.peak[0, 0] == 1.0
    assert result.peak[0, 1] == pytest.approx(speed, abs=2e-3)
    assert result.peak[0, 1] <= speed + 1e-9


def test_result_hangs_on_the_start_alone():
    loop = gallery.van_der_pol().loop
    lanes = compile_lanes(loop, level_target(loop, 0.3), SETTINGS)
    starts = np.random.default_rng(9).uniform(loop.box[:, 0], loop.box[:, 1], (3000, 2))
    whole = lanes.run(starts)
    order = np.random.default_rng(10).permutation(len(starts))
    shuffled = lanes.run(starts[order])
    for name in ("outcome", "time", "final", "peak", "steps", "reason"):
        np.testing.assert_array_equal(getattr(shuffled, name), getattr(whole, name)[order])
    for first, count in ((0, 1), (7, 31), (100, 33), (500, 1000)):
        part = lanes.run(starts[first : first + count])
        for name in ("outcome", "time", "final", "peak", "steps", "reason"):
            np.testing.assert_array_equal(getattr(part, name), getattr(whole, name)[first : first + count])
    assert len(lanes.run(np.empty((0, 2)))) == 0


def test_start_that_is_no_number_fails_and_is_never_converged():
    loop = gallery.van_der_pol().loop
    for target in (level_target(loop, 0.3), ball_target(loop)):
        result = compile_lanes(loop, target, SETTINGS).run(
            np.array([[math.nan, 0.1], [0.1, math.nan], [math.inf, 0.0], [0.0, -math.inf], [0.1, 0.1]])
        )
        assert list(result.outcome) == [Outcome.FAILED] * 4 + [Outcome.CONVERGED]
        assert list(result.reason) == [Reason.NOT_FINITE] * 4 + [Reason.NONE]


def test_dynamics_that_cease_to_be_a_number_fail():
    # From 1 the state falls through 0.5, where the root has no real value any more.
    loop = one_state("-1 - 0*sqrt(x - 0.5)")
    result = compile_lanes(loop, level_target(loop, 1e-6), SETTINGS).run(column([1.0, 0.6, 0.4]))
    assert list(result.outcome) == [Outcome.FAILED] * 3
    assert list(result.reason) == [Reason.NOT_FINITE] * 3
    np.testing.assert_allclose(result.time[:2], [0.5, 0.1], atol=1e-6)


def test_pole_inside_the_domain_fails():
    # x' = -1/(x - 0.5): falls into the pole from above at t = (x - 0.5)²/2, at unbounded speed.
    loop = one_state("-1/(x - 0.5)")
    result = compile_lanes(loop, level_target(loop, 1e-6), SETTINGS).run(column([1.0, 0.8, 0.5]))
    assert list(result.outcome) == [Outcome.FAILED] * 3
    # About the pole the steps shrink to nothing or dance from side to side; both are named.
    assert set(result.reason[:2]) <= {Reason.STEP_UNDERFLOW, Reason.STEP_CAP}
    assert result.reason[2] == Reason.NOT_FINITE
    np.testing.assert_allclose(result.time[:2], [0.125, 0.045], atol=1e-3)


def test_blow_up_beyond_every_box_escapes():
    # x' = x² reaches infinity at t = 1/x0; the escape box is too far away for any step of the clock.
    loop = one_state("x**2")
    settings = replace(SETTINGS, escape=1e200)
    result = compile_lanes(loop, level_target(loop, 1e-9), settings).run(column([0.5, 1.5]))
    assert list(result.outcome) == [Outcome.ESCAPED] * 2
    assert list(result.reason) == [Reason.BLOW_UP] * 2
    np.testing.assert_allclose(result.time, [2.0, 1 / 1.5], rtol=1e-5)


def test_blow_up_through_the_box_escapes_on_time():
    loop = one_state("x**2")
    result = compile_lanes(loop, level_target(loop, 1e-9), SETTINGS).run(column([0.5]))
    assert result.outcome[0] == Outcome.ESCAPED
    assert result.reason[0] == Reason.NONE
    assert result.time[0] == pytest.approx(2.0 - 1 / result.final[0, 0], abs=1e-5)


def test_stiff_passage_runs_into_the_step_cap():
    loop = gallery.configuration("xy", ["-x", "-1e6*(y - x)"], [(-1.0, 1.0)] * 2).loop
    settings = replace(SETTINGS, step_cap=2000)
    result = compile_lanes(loop, level_target(loop, 1e-8), settings).run(np.array([[0.5, 0.5], [1e-5, 0.0]]))
    assert list(result.outcome) == [Outcome.FAILED, Outcome.CONVERGED]
    assert result.reason[0] == Reason.STEP_CAP
    assert result.steps[0] == 2000


def test_limit_cycle_is_unresolved():
    loop = gallery.configuration("xy", ["y", "-x - (x**2 - 1)*y"], [(-3.0, 3.0)] * 2).loop
    settings = replace(SETTINGS, longest=50.0)
    result = compile_lanes(loop, level_target(loop, 1e-3), settings).run(np.array([[1.0, 0.0]]))
    assert result.outcome[0] == Outcome.UNRESOLVED
    assert result.time[0] == pytest.approx(50.0)


def test_ball_takes_time_state_and_steps_of_the_entry():
    loop = one_state("-x")
    settings = replace(SETTINGS, rtol=1e-9, atol=1e-13)
    result = compile_lanes(loop, ball_target(loop, dwell=5.0), settings).run(column([1.0, -1.9, 0.0, 1e-3]))
    assert (result.outcome == Outcome.CONVERGED).all()
    # The ball has radius 1e-3 half-widths, that is 0.002; the entry lies within one step below it.
    assert (np.abs(result.final[:2, 0]) <= 2e-3).all()
    expected = np.log(np.array([1.0, 1.9]) / np.abs(result.final[:2, 0]))
    np.testing.assert_allclose(result.time[:2], expected, atol=1e-7)
    np.testing.assert_array_equal(result.peak[:2, 0], [1.0, 1.9])
    assert (result.time[2:] == 0).all()
    assert (result.steps[2:] == 0).all()


def test_ball_that_is_crossed_does_not_count():
    # A weakly damped spring crosses the ball about its rest many times before it stays.
    loop = gallery.configuration("xv", ["v", "-x - 0.02*v"], [(-1.0, 1.0)] * 2).loop
    result = compile_lanes(loop, ball_target(loop, dwell=200.0, radius=0.1), SETTINGS).run(np.array([[0.5, 0.5]]))
    assert result.outcome[0] == Outcome.CONVERGED
    assert np.hypot(*result.final[0]) <= 0.1
    assert result.time[0] == pytest.approx(math.log(math.hypot(0.5, 0.5) / 0.1) / 0.01, rel=0.05)


def test_ball_without_approach_stays_unresolved():
    # A centre: inside the ball for ever, and never half as far away.
    loop = gallery.configuration("xv", ["v", "-x"], [(-1.0, 1.0)] * 2).loop
    settings = replace(SETTINGS, longest=100.0, rtol=1e-9, atol=1e-12)
    result = compile_lanes(loop, ball_target(loop, dwell=5.0, radius=0.1), settings).run(np.array([[0.05, 0.0]]))
    assert result.outcome[0] == Outcome.UNRESOLVED


def test_rest_at_another_equilibrium():
    configuration = gallery.double_well()
    loop = configuration.loop
    target = ball_target(loop, dwell=40.0, centre=[1.0, 0.0], elsewhere=[[-1.0, 0.0]])
    starts = np.random.default_rng(2).uniform(-2, 2, (2000, 2))
    lanes = compile_lanes(loop, target, SETTINGS)
    right, left = lanes.run(starts), lanes.run(-starts)
    swap = {Outcome.CONVERGED: Outcome.SETTLED_ELSEWHERE, Outcome.SETTLED_ELSEWHERE: Outcome.CONVERGED}
    assert {int(o) for o in right.outcome} == {Outcome.CONVERGED, Outcome.SETTLED_ELSEWHERE}
    # x -> -x swaps the two rests, exactly: no rounding favours one side.
    np.testing.assert_array_equal(left.outcome, [swap[Outcome(o)] for o in right.outcome])
    np.testing.assert_array_equal(left.final, -right.final)
    near_left = np.hypot(right.final[:, 0] + 1, right.final[:, 1]) < 3e-3
    np.testing.assert_array_equal(near_left, right.outcome == Outcome.SETTLED_ELSEWHERE)


def test_level_target_with_other_equilibria():
    loop = gallery.double_well().loop
    target = replace(ball_target(loop, dwell=40.0, centre=[1.0, 0.0], elsewhere=[[-1.0, 0.0]]),
                     kind="level", P=np.eye(2), level=1e-4)  # fmt: skip
    result = compile_lanes(loop, target, SETTINGS).run(np.array([[1.2, 0.0], [-1.2, 0.0], [1.005, 0.0]]))
    assert list(result.outcome) == [Outcome.CONVERGED, Outcome.SETTLED_ELSEWHERE, Outcome.CONVERGED]
    assert result.time[2] == 0.0


def test_another_parameter_uses_the_same_module():
    first = gallery.saturated_integrator(a=0.5, k=2.0).loop
    second = gallery.saturated_integrator(a=0.8, k=2.0).loop
    a, b = (compile_lanes(loop, level_target(loop, 1e-4), SETTINGS) for loop in (first, second))
    assert a._advance is b._advance
    starts = column(np.linspace(-2.99, 2.99, 300))
    np.testing.assert_array_equal(a.run(starts).outcome == Outcome.CONVERGED, np.abs(starts[:, 0]) < 1 / 0.5)
    np.testing.assert_array_equal(b.run(starts).outcome == Outcome.CONVERGED, np.abs(starts[:, 0]) < 1 / 0.8)


PROBE = """
import sys, gallery, numpy as np
from roa.kernel import generated, methods
from roa.kernel.integration import Integration
from roa.kernel.lane_source import lane_source
from roa.kernel.lanes import compile_lanes
from roa.kernel.target import Target
loop = gallery.configuration("x", [sys.argv[1]], [(-2.0, 2.0)]).loop
target = Target("level", np.zeros(1), loop.half_widths, P=np.eye(1), level=1e-4)
lanes = compile_lanes(loop, target, Integration("tsitouras5", 1e-6, 1e-9, 60.0, 960.0, 10.0))
print(sum(lanes._advance.stats.cache_hits.values()), lanes.run(np.array([[0.9]])).time[0])
"""


def probe(text, folder):
    environment = os.environ | {"ROA_CACHE_DIR": str(folder), "PYTHONPATH": os.pathsep.join(sys.path)}
    done = subprocess.run(
        [sys.executable, "-c", PROBE, text], env=environment, capture_output=True, text=True, check=True
    )
    hits, time = done.stdout.split()
    return int(hits), float(time)


def test_second_process_compiles_nothing_and_another_loop_gets_its_own(tmp_path):
    first = probe("-x + x**3", tmp_path)
    again = probe("-x + x**3", tmp_path)
    other = probe("-x - x**3", tmp_path)
    assert (first[0], again[0], other[0]) == (0, 1, 0)
    assert first[1] == again[1] != other[1]


def test_folder_that_cannot_be_written_costs_time_only(tmp_path):
    blocked = tmp_path / "file"
    blocked.write_text("in the way", encoding="utf-8")
    assert probe("-x + x**3", blocked)[0] == 0


EVERY_FUNCTION = [
    "v + 0.1*asin(x/9) - 0.1*acos(v/9) + atan(x) + 0.1*atan2(v, x + 3) + tan(x/9)*cos(v)",
    "-x + sinh(x/3) - cosh(v/3) + tanh(x) + exp(v/4) + log(x**2 + 1) + sqrt(v**2 + 1) + 0.1*(x**2 + 1)**1.3",
    "-w + sin(x) - abs(v) + sign(w) + min(x, v, w) - max(x, w) + clip(v, -1, 1) + deadzone(w, 1) + where(x < v, x, v)",
]
PACKED = {
    "every function": lambda: gallery.configuration("xvw", EVERY_FUNCTION, [(-2.0, 2.0)] * 3).loop,
    "van_der_pol": lambda: read(CONFIGS / "van_der_pol.toml").loop,
    "mast": lambda: read(CONFIGS / "mast.toml").loop,
    "cart": lambda: read(CONFIGS / "cart.toml").loop,
    "tracker": lambda: read(CONFIGS / "tracker.toml").loop,
    "mast_digital": lambda: read(CONFIGS / "mast_digital.toml").loop,
}

# The runtime, the interpreter, memory, and the function itself; whatever else is called is a function of a lane.
OUTSIDE_THE_LANES = re.compile(r"NRT_|numba_|_?Py|_ZN|mem(?:set|cpy|move)$")


@pytest.mark.parametrize("name", PACKED)
def test_compiled_loop_is_packed_and_calls_no_scalar_library(name, tmp_path, monkeypatch):
    loop = PACKED[name]()
    # Machine code that comes from the cache cannot be read: a text and a folder of the test's own.
    monkeypatch.setenv("ROA_CACHE_DIR", str(tmp_path))
    text = lane_source(loop, methods.load("auto"), level_target(loop, 0.1)).text
    function = generated.load(text + f"# read by a test, {name}\n").advance
    assembly = function.inspect_asm(function.signatures[0])
    if "ymm" not in assembly and "zmm" not in assembly:
        pytest.skip("this processor has no vectors of four floats or more")
    called = set(re.findall(r"(?:callq?\s+\*?|movabsq?\s+\$)([A-Za-z_][A-Za-z_0-9]*)", assembly))
    assert [name for name in called if not OUTSIDE_THE_LANES.match(name)] == []
    packed = re.findall(r"\b(?:vmulpd|vaddpd|vsubpd|vfn?m(?:add|sub)\d+pd)\b", assembly)
    # Every line of f is there in every one of the six stages that are computed.
    assert len(packed) > 6 * len(right_hand_side(loop)[0].lines)
