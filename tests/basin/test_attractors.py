"""Attractors, cycles and the audit, on loops whose ends are known (computed independently, in a line each)."""

from dataclasses import replace
from types import SimpleNamespace

import numpy as np
import pytest
from basin.conftest import SamplesInMemory, trajectories_of

import gallery
from roa.basin.attractors import attractors
from roa.basin.audit import audit
from roa.basin.near_edge import distance_to_the_edge
from roa.basin.recurrence import cycle_from
from roa.kernel.integration import Integration
from roa.kernel.outcomes import Outcome
from roa.kernel.target import Target
from roa.loop.equilibrium import find_equilibrium

INTEGRATION = Integration("tsitouras5", 1e-6, 1e-9, 40.0, 40.0, 10.0)


def two_rings():
    """r' = -r (1 - r²)(1 - r²/4) with unit speed of rotation: rest at 0, an unstable ring at 1, a cycle at 2."""
    pull = "(1 - (x**2 + y**2))*(1 - (x**2 + y**2)/4)"
    return gallery.configuration("xy", [f"-x*{pull} - y", f"-y*{pull} + x"], [(-2.5, 2.5)] * 2)


class TestCycles:
    def test_period_and_amplitude(self):
        found = cycle_from(two_rings().loop, np.array([1.4, 0.0]), 45.0, 10.0)
        assert found.period == pytest.approx(2 * np.pi, rel=1e-4)
        assert found.amplitude == pytest.approx([2.0, 2.0], rel=1e-3)

    def test_van_der_pol_forward(self):
        # Period 6.663286859 and amplitude 2.008619861 at mu = 1 (recalled and recomputed independently).
        loop = gallery.configuration("xv", ["v", "(1 - x**2)*v - x"], [(-3.0, 3.0), (-4.0, 4.0)]).loop
        found = cycle_from(loop, np.array([0.5, 0.0]), 60.0, 10.0)
        assert found.period == pytest.approx(6.663286859, rel=1e-4)
        assert found.amplitude[0] == pytest.approx(2.008619861, rel=1e-3)

    @pytest.mark.parametrize(
        "dynamics", [["-x", "-y"], ["-0.01*x - y", "x - 0.01*y"], ["1.0 + 0*x", "-y"]], ids=["rest", "spiral", "drift"]
    )
    def test_what_does_not_come_back_is_no_cycle(self, dynamics):
        loop = gallery.configuration("xy", dynamics, [(-3.0, 3.0)] * 2).loop
        assert cycle_from(loop, np.array([1.0, 0.5]), 60.0, 1e3) is None

    def test_the_lorenz_attractor_is_no_cycle(self):
        loop = gallery.configuration(
            "xyz", ["10*(y - x)", "x*(28 - z) - y", "x*y - 8/3*z"], [(-30.0, 30.0), (-30.0, 30.0), (0.0, 60.0)]
        ).loop
        assert cycle_from(loop, np.array([1.0, 1.0, 20.0]), 25.0, 10.0) is None


def swept(loop, outcomes, final, starts):
    rows = replace(trajectories_of(starts, outcomes), final=final)
    return SamplesInMemory(rows, "sobol", 16)


def test_shares_of_attractors():
    # x' = x - x³ in each of two states: rests at (±1, ±1), a saddle or source at every point with a zero.
    configuration = gallery.configuration(
        "xy", ["x - x**3", "y - y**3"], [(-2.0, 2.0)] * 2, equilibrium={"x": 1.0, "y": 1.0}
    )
    loop, equilibrium = configuration.loop, find_equilibrium(configuration.loop, "gallery")
    elsewhere = np.array([[-1.0, -1.0], [-1.0, 1.0], [1.0, -1.0]])
    target = Target("ball", equilibrium.x, loop.half_widths, dwell=1.0, elsewhere=elsewhere)
    starts = np.random.default_rng(3).uniform(-2, 2, (4096, 2))
    final = np.sign(starts)
    here = (final == 1).all(axis=1)
    outcomes = np.where(here, Outcome.CONVERGED, Outcome.SETTLED_ELSEWHERE)
    found = attractors(swept(loop, outcomes, final, starts), loop, equilibrium, target, INTEGRATION, 0.99)
    stable = [one for one in found if one.stability == "stable"]
    assert len(stable) == 4
    for one in stable:
        assert one.count == int((final == one.at).all(axis=1).sum())
        assert one.interval.low < 0.25 < one.interval.high
    unstable = {tuple(one.at) for one in found if one.stability == "unstable"}
    assert unstable == {(0.0, 0.0), (0.0, 1.0), (0.0, -1.0), (1.0, 0.0), (-1.0, 0.0)}


def test_unresolved_on_a_cycle_is_named():
    configuration = two_rings()
    loop, equilibrium = configuration.loop, find_equilibrium(configuration.loop, "gallery")
    target = Target("ball", equilibrium.x, loop.half_widths, dwell=1.0, elsewhere=np.empty((0, 2)))
    starts = np.random.default_rng(3).uniform(-2.5, 2.5, (512, 2))
    inside = (starts**2).sum(axis=1) < 1
    outcomes = np.where(inside, Outcome.CONVERGED, Outcome.UNRESOLVED)
    final = np.where(inside[:, None], 0.0, 2 * starts / np.linalg.norm(starts, axis=1, keepdims=True))
    found = attractors(
        swept(loop, outcomes, final, starts), loop, equilibrium, target, replace(INTEGRATION, horizon=12.0), 0.99
    )
    (cycle,) = [one for one in found if one.kind == "cycle"]
    assert cycle.name == "unresolved: periodic, period 6.283 s"
    assert cycle.count == int((~inside).sum())


class TestAudit:
    def make(self, wrong):
        configuration = gallery.cubic()
        loop, equilibrium = configuration.loop, find_equilibrium(configuration.loop, "gallery")
        target = Target("level", equilibrium.x, loop.half_widths, P=np.eye(1), level=0.25)
        starts = np.linspace(-1.9, 1.9, 400)[:, None]
        outcomes = np.where(np.abs(starts[:, 0]) < 1, Outcome.CONVERGED, Outcome.ESCAPED)
        outcomes[wrong] = Outcome.SETTLED_ELSEWHERE
        return audit(
            SamplesInMemory(trajectories_of(starts, outcomes), "sobol", 16), loop, target, INTEGRATION, 40, 1, 0.95
        )

    def test_all_agree(self):
        found = self.make([])
        assert (len(found.at_random), len(found.near), found.disagreements) == (20, 20, ())
        assert found.share_upper == pytest.approx(1 - 0.05 ** (1 / 20))  # the success run of 20
        nearest = [abs(abs(float(one.initial[0])) - 1) for one in found.near]
        assert max(nearest) < 0.2

    def test_a_wrong_outcome_is_seen(self):
        found = self.make(slice(0, 400))
        assert len(found.disagreements) == 20  # there is no edge where all answers are the same
        assert found.document["disagreements"][0]["stored"] == "settled_elsewhere"

    def test_same_seed_same_starts(self):
        one, other = self.make([]), self.make([])
        assert [r.index for r in one.at_random] == [r.index for r in other.at_random]


def test_distance_to_the_edge():
    loop = SimpleNamespace(half_widths=np.array([2.0]))
    rows = trajectories_of(np.array([[0.0], [1.0], [1.5], [4.0]]), [1, 1, 3, 3])
    assert distance_to_the_edge(rows, loop).tolist() == [0.75, 0.25, 0.25, 1.5]
    assert np.isinf(distance_to_the_edge(trajectories_of(np.zeros((3, 1)), [1, 1, 1]), loop)).all()
