"""A stored start integrated again: agreement, and a stored outcome that is wrong."""

from dataclasses import replace

import numpy as np
import pytest

import gallery
from roa.basin.replay import replay, replay_start
from roa.kernel.integration import Integration
from roa.kernel.outcomes import Outcome
from roa.kernel.target import Target

SETTINGS = Integration("tsitouras5", rtol=1e-6, atol=1e-9, horizon=60.0, longest=200.0, escape=10.0)


@pytest.fixture
def swept(sweep, inside):
    loop = gallery.ball(2).loop
    target = Target("level", np.zeros(2), loop.half_widths, P=np.eye(2), level=0.5)
    return loop, target, sweep(loop, inside(lambda x: (x**2).sum(axis=1) < 1), samples=256)


def test_every_stored_outcome_is_found_again(swept):
    loop, target, samples = swept
    for index in range(0, 256, 13):
        again = replay(samples, index, loop, target, SETTINGS)
        assert again.agrees
        assert again.index == index
        assert again.initial.tolist() == samples.trajectories.initial[index].tolist()
        assert (again.rtol, again.atol) == (pytest.approx(1e-7), pytest.approx(1e-10))


def test_wrong_outcome_is_told(swept):
    loop, target, samples = swept
    samples.trajectories.outcome[40] = 4 - samples.trajectories.outcome[40]  # converged <-> escaped
    again = replay(samples, 40, loop, target, SETTINGS)
    assert not again.agrees
    assert {again.stored, again.decision.outcome} == {Outcome.CONVERGED, Outcome.ESCAPED}


def test_start_that_is_not_of_a_sweep_goes_through_the_lanes_and_again(swept):
    loop, target, samples = swept

    def run(x):
        row = samples.read(0, 1)
        return replace(row, initial=x, outcome=np.array([Outcome.CONVERGED], np.uint8))

    found = replay_start(np.array([0.6, 0.6]), run, loop, target, SETTINGS)
    assert found.agrees
    assert found.index is None
    assert found.initial.tolist() == [0.6, 0.6]
