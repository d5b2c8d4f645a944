"""Look-up tables in the lanes: against scipy's interpolants, packed, and a named failure where a table ends."""

import re

import numpy as np
import pytest
from scipy.integrate import solve_ivp
from scipy.interpolate import PchipInterpolator

import gallery
from roa.basin.independent import decide
from roa.kernel import generated, methods
from roa.kernel.integration import Integration
from roa.kernel.lane_source import lane_source
from roa.kernel.lanes import compile_lanes
from roa.kernel.outcomes import Outcome, Reason
from roa.kernel.target import Target
from roa.loop.read import read_text

SETTINGS = Integration("tsitouras5", rtol=1e-8, atol=1e-11, horizon=20.0, longest=3.0, escape=10.0)
DRAG = ([-4.0, -1.0, -0.5, 0.0, 0.25, 0.7, 1.5, 4.0], [-6.0, -1.0, -0.2, 0.0, 0.1, 0.5, 1.0, 9.0])
SPRING = ([-1.0, 0.0, 0.8], [-2.0, 0.0, 1.0])


def loop(beyond):
    text = gallery.toml("xv", ["v", "-lookup(spring, x) - lookup(drag, v)"], [(-1.0, 1.0)] * 2)
    drag = f'[tables.drag]\nx = {DRAG[0]}\ny = {DRAG[1]}\nkind = "pchip"\n'
    return read_text(f'{text}{drag}[tables.spring]\nx = {SPRING[0]}\ny = {SPRING[1]}\nbeyond = "{beyond}"\n', "a").loop


def target(loop):
    return Target("level", np.zeros(2), loop.half_widths, P=np.eye(2), level=1e-6)


def spring(x):
    ends = np.array([(x + 1.0) * 2.0 - 2.0, 1.0 + (x - 0.8) * 1.25])
    return ends[0] if x < -1.0 else ends[1] if x > 0.8 else np.interp(x, *SPRING)


def test_trajectories_are_those_of_scipy():
    drag = PchipInterpolator(*DRAG)
    lanes = compile_lanes(loop("linear"), target(loop("linear")), SETTINGS)
    result = lanes.run(np.random.default_rng(4).uniform(-1.4, 1.4, (12, 2)))
    assert (result.outcome == Outcome.UNRESOLVED).all()
    for start, final in zip(result.initial, result.final, strict=True):
        path = solve_ivp(
            lambda _, x: [x[1], -spring(x[0]) - drag(x[1])], (0, 3.0), start, "DOP853", rtol=1e-10, atol=1e-13,
            max_step=0.02,
        )  # fmt: skip
        np.testing.assert_allclose(final, path.y[:, -1], atol=1e-6)


def test_where_a_table_ends_the_failure_has_its_name():
    refused = loop("refuse")
    lanes = compile_lanes(refused, target(refused), SETTINGS)
    starts = np.array([[0.1, 0.1], [0.9, 0.0], [0.7, 2.0], [-0.9, -2.0], [0.8, -0.1], [-1.0, 0.1]])
    result = lanes.run(starts)
    left = np.array([False, True, True, True, False, False])
    np.testing.assert_array_equal(result.outcome == Outcome.FAILED, left)
    np.testing.assert_array_equal(result.reason == Reason.OUTSIDE_TABLE, left)
    assert result.time[1] == 0.0
    np.testing.assert_allclose(np.abs(result.final[[2, 3], 0]), [0.8, 1.0], atol=1e-6)
    for start, outcome, reason, time in zip(starts, result.outcome, result.reason, result.time, strict=True):
        again = decide(refused, target(refused), SETTINGS, start, 1e-9, 1e-12)
        assert (again.outcome, again.reason) == (outcome, reason)
        assert again.time == pytest.approx(time, abs=1e-3)


def test_tables_leave_the_loop_packed(tmp_path, monkeypatch):
    monkeypatch.setenv("ROA_CACHE_DIR", str(tmp_path))
    plain = gallery.configuration("xv", ["v", "-x - v"], [(-1.0, 1.0)] * 2).loop
    counts = []
    for each in (plain, loop("refuse")):
        text = lane_source(each, methods.load("tsitouras5"), target(each)).text
        function = generated.load(text + "# read by a test of tables\n").advance
        assembly = function.inspect_asm(function.signatures[0])
        if "ymm" not in assembly and "zmm" not in assembly:
            pytest.skip("this processor has no vectors of four floats or more")
        counts.append(len(re.findall(r"\b(?:vmulpd|vaddpd|vsubpd|vfn?m(?:add|sub)\d+pd)\b", assembly)))
    # In each of six evaluations a distance, a cubic and a line beside what the plain loop has.
    assert counts[1] - counts[0] > 6 * 6
