"""What method = "auto" stands for, and that a stored run keeps it."""

import json
from dataclasses import replace

import numpy as np
import pytest
from scipy.integrate import RK45
from sweep import small

import gallery
from roa import verbs
from roa.kernel import methods
from roa.kernel.integration import Integration
from roa.kernel.lanes import compile_lanes
from roa.kernel.step_count import count_attempts, right_hand_sides
from roa.kernel.target import Target
from roa.loop.equilibrium import find_equilibrium
from roa.sweep import choice as choosing
from roa.sweep.choice import Choice, choose, is_smooth


def lagging(lag, **keywords):
    """The clipped pendulum whose drive lags its command."""
    dynamics = ["rate", "4*sin(angle) - 0.3*rate + torque", f"(clip(-8*angle - 3*rate, -3, 3) - torque)/{lag}"]
    return gallery.configuration(
        ("angle", "rate", "torque"), dynamics, [(-2.0, 2.0), (-4.0, 4.0), (-3.0, 3.0)], **keywords
    )


def chosen(configuration, rtol=1e-6):
    loop = configuration.loop
    equilibrium = find_equilibrium(loop, "here")
    target = Target("ball", equilibrium.x, loop.half_widths, radius=1e-2)
    return choose(loop, equilibrium, target, Integration("tsitouras5", rtol, 1e-9, 60.0, 960.0, 1.1))


@pytest.mark.parametrize(("lag", "method"), [(1e-4, "rodas4"), (1e-2, "tsitouras5")])
def test_a_lag_that_is_short_enough_is_stiff(lag, method):
    # By a prototype of other code, timed: the two methods cost the same at a lag between 1e-3 and 1e-2 s.
    assert chosen(lagging(lag)).method == method


def test_the_higher_order_pays_at_tight_tolerance_of_smooth_loops():
    assert [chosen(gallery.van_der_pol(), rtol).method for rtol in (1e-4, 1e-6, 1e-11)] == [
        "tsitouras5", "tsitouras5", "dormand_prince8",
    ]  # fmt: skip
    kinked = gallery.configuration("xy", ["-y", "x + (min(x, 9)**2 - 1)*y"], [(-3.0, 3.0), (-3.5, 3.5)])
    assert not is_smooth(kinked.loop)
    assert is_smooth(gallery.van_der_pol().loop)
    assert chosen(kinked, 1e-11).method == "tsitouras5"
    limited = gallery.van_der_pol().loop
    limited = replace(gallery.van_der_pol(), loop=replace(limited, limits={"x": limited.domain[0]}))
    assert chosen(limited, 1e-11).method == "tsitouras5"


def test_the_choice_is_a_function_of_the_configuration():
    first, second = chosen(lagging(1e-3)), chosen(lagging(1e-3))
    assert first == second
    assert "tsitouras5" in first.why
    assert "rodas4" in first.why


@pytest.mark.parametrize("method", ["tsitouras5", "dormand_prince8"])
def test_counts_are_those_of_the_lanes(method):
    loop = gallery.van_der_pol().loop
    target = Target("level", np.zeros(2), loop.half_widths, P=np.eye(2), level=0.01)
    integration = Integration(method, 1e-8, 1e-9, 60.0, 960.0, 1.1)
    starts = np.random.default_rng(5).uniform(-0.9, 0.9, (50, 2)) * loop.half_widths
    counted = count_attempts(loop, methods.load(method), starts, target, integration, 10_000, np.full(50, 960.0))
    lanes = compile_lanes(loop, target, integration).run(starts)
    # The lanes count accepted steps, and their step control errs by a few per cent.
    assert (counted.attempts >= lanes.steps - 2).all()
    assert counted.attempts.sum() == pytest.approx(lanes.steps.sum(), rel=0.25)
    np.testing.assert_allclose(counted.time, lanes.time, atol=1.0)


def test_rosenbrock_steps_relax_at_once_and_stop_at_their_instant():
    loop = gallery.configuration("xy", ["-y", "1e6*(x - y)"], [(-1.0, 1.0), (-1.0, 1.0)]).loop
    target = Target("ball", np.zeros(2), loop.half_widths, radius=1e-12)
    integration = Integration("rodas4", 1e-6, 1e-9, 60.0, 960.0, 10.0)
    until = np.array([0.5, 1.0])
    counted = count_attempts(loop, methods.load("rodas4"), np.ones((2, 2)) * 0.5, target, integration, 500, until)
    np.testing.assert_allclose(counted.time, until, rtol=1e-12)
    assert (counted.attempts < 60).all()  # explicit steps are shorter than 3e-6 s: more than 150,000
    capped = count_attempts(loop, methods.load("tsitouras5"), np.ones((2, 2)) * 0.5, target, integration, 500, until)
    assert (capped.attempts == 500).all()
    assert (capped.time < 2e-3).all()


def test_cost_of_an_attempt():
    assert right_hand_sides(methods.load("tsitouras5"), 3) == 6 == RK45.n_stages
    assert right_hand_sides(methods.load("dormand_prince8"), 3) == 12
    assert right_hand_sides(methods.load("rodas4"), 3) == 6 + 2 * 3


def test_the_chosen_method_is_in_the_fingerprint():
    plan = small.make()
    assert plan.integration.method == "tsitouras5" == plan.fingerprint_parts["method"]
    assert plan.choice.why == "as configured"


def test_a_stored_run_keeps_its_method(tmp_path, monkeypatch):
    text = gallery.toml("x", ["-x + x**3"], [(-2.0, 2.0)], sweep="samples = 300")
    file = tmp_path / "cubic.toml"
    file.write_text(text)
    monkeypatch.setattr(choosing, "choose", lambda *_: Choice("bogacki_shampine3", "a test says so"))
    begun = verbs.sweep(file, out=tmp_path / "run")
    assert begun.document["integration"] == {"method": "bogacki_shampine3", "why": "a test says so"}
    monkeypatch.setattr(choosing, "choose", lambda *_: pytest.fail("is asked again"))
    extended = verbs.resume(tmp_path / "run", samples=600)
    assert extended.document["basin"]["samples"] == 600
    assert extended.document["integration"]["method"] == "bogacki_shampine3"
    header = json.loads((tmp_path / "run" / "plan.json").read_text())
    assert header["fingerprint_parts"]["method"] == "bogacki_shampine3"
