"""Claims about the unit ball with a limit on one state: crossing it settles nothing, keeping it is part of a proof."""

import numpy as np
import pytest

import gallery
from roa.basin.claim import Result, judge
from roa.basin.size import measure
from roa.bound.bounds import derive_bounds
from roa.kernel.integration import Integration
from roa.kernel.outcomes import Outcome
from roa.kernel.target import Target
from roa.kernel.trajectories import Trajectories
from roa.loop.equilibrium import find_equilibrium

SETTINGS = Integration("tsitouras5", rtol=1e-6, atol=1e-9, horizon=60.0, longest=200.0, escape=10.0)


def judged(level, limits, signals=None, over=lambda x: np.zeros(len(x), bool)):
    given = gallery.ball(2, bound=f"P = [[1, 0], [0, 1]]\nlevel = {level!r}", limits=limits, signals=signals)
    equilibrium = find_equilibrium(given.loop, "gallery.toml")
    target = Target("level", np.zeros(2), given.loop.half_widths, P=np.eye(2), level=0.01)

    def run(x):
        outcome = np.where((x**2).sum(axis=1) < 1, Outcome.CONVERGED, Outcome.ESCAPED)
        outcome[over(x)] = Outcome.CONVERGED_OVER_LIMIT
        m = len(x)
        return Trajectories(
            x, outcome.astype(np.uint8), np.ones(m), x, np.abs(x), np.ones(m, np.int32), np.zeros(m, np.uint8)
        )

    return judge(given, derive_bounds(given, equilibrium), target, SETTINGS, run, 1)


def test_set_within_the_limit_is_proved():
    assert judged(0.2499, {"x0": (-0.5, 0.6)}).result is Result.PROVED


def test_set_across_the_limit_is_not_settled_with_the_level_that_stays_inside():
    claim = judged(0.3, {"x0": (-0.5, 0.6)})
    assert claim.result is Result.NOT_SETTLED
    assert claim.largest_level_inside == pytest.approx(0.25, rel=1e-5)  # where the circle touches x0 = -0.5
    assert claim.largest_level_inside <= 0.25
    assert "crosses the limit on x0; the largest level of this V that is proved to stay within" in claim.reason


def test_narrow_crossing_is_found():
    claim = judged(0.25001, {"x1": (-0.5, 0.6)})
    assert claim.result is Result.NOT_SETTLED
    assert "crosses the limit on x1" in claim.reason


def test_start_over_the_limit_counts_against_and_refutes_nothing():
    # A signal that leaps where no proof can follow: whether the set stays within cannot be decided by boxes.
    signals = {"leap": "where(x0*x0 - 2*x0*x1 + x1*x1 < -1e-300, 9, 0)"}
    every = judged(0.3, {"leap": (-1.0, 1.0)}, signals)
    assert every.result is Result.SUPPORTED
    assert "that the set stays within the limits is not proved" in every.reason
    some = judged(0.3, {"leap": (-1.0, 1.0)}, signals, over=lambda x: x[:, 0] > 0.5)
    assert some.result is Result.NOT_SETTLED
    assert "converged_over_limit" in some.reason


def test_set_outside_domain_and_limit_tells_the_smaller_level():
    claim = judged(1.6, {"x0": (-0.5, 0.6)})
    assert claim.result is Result.NOT_SETTLED
    assert claim.largest_level_inside == pytest.approx(0.25, rel=1e-5)


def test_safe_share_counts_starts_that_keep_the_limits(sweep):
    loop = gallery.ball(2, limits={"x0": (-0.5, 0.5)}).loop

    def rule(x):
        inside = (x**2).sum(axis=1) < 1
        return np.select([~inside, np.abs(x[:, 0]) > 0.5], [Outcome.ESCAPED, Outcome.CONVERGED_OVER_LIMIT], 1)

    basin = measure(sweep(loop, rule), loop, 0.99)
    exact = np.sqrt(3) / 2 + np.pi / 3  # area of the unit disc with |x0| < 1/2
    assert basin.fraction * 2.4**2 == pytest.approx(np.pi, rel=5e-3)
    assert basin.safe.fraction * 2.4**2 == pytest.approx(exact, rel=5e-3)
    low, high = (end * 2.4**2 for end in (basin.safe.interval(2, 0.99).low, basin.safe.interval(2, 0.99).high))
    assert low < exact < high
    assert measure(sweep(gallery.ball(2).loop, rule), gallery.ball(2).loop, 0.99).safe is None
