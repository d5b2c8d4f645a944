"""The sweep seen along V: shells and the unfalsified level of loops whose basin is known."""

from itertools import pairwise

import numpy as np
import pytest

import gallery
from roa.basin.levels import by_level
from roa.bound.lyapunov_function import Quadratic
from roa.bound.statement import Strength
from roa.kernel.outcomes import Outcome


@pytest.fixture
def disc(sweep, inside):
    loop = gallery.ball(2).loop
    return sweep(loop, inside(lambda x: (x**2).sum(axis=1) < 1)), Quadratic(loop, np.zeros(2), np.eye(2))


def test_unfalsified_level_is_the_lowest_start_that_does_not_converge(disc):
    samples, V = disc
    found = by_level(samples, V, 0.95).unfalsified
    starts = samples.trajectories.initial
    outside = (starts**2).sum(axis=1) >= 1
    assert found.level == pytest.approx((starts[outside] ** 2).sum(axis=1).min(), rel=1e-15)
    assert 1 <= found.level < 1.01
    assert found.start.tolist() == starts[found.index].tolist()
    assert samples.trajectories.outcome[found.index] == Outcome.ESCAPED


@pytest.mark.parametrize("outcome", [Outcome.UNRESOLVED, Outcome.FAILED, Outcome.SETTLED_ELSEWHERE])
def test_every_start_that_does_not_converge_counts(disc, outcome):
    samples, V = disc
    samples.trajectories.outcome[777] = outcome
    samples.trajectories.initial[777] = [0.1, 0.2]
    found = by_level(samples, V, 0.95).unfalsified
    assert (found.index, found.level) == (777, pytest.approx(0.05))


def test_over_a_limit_is_still_converged(disc):
    samples, V = disc
    before = by_level(samples, V, 0.95).unfalsified
    samples.trajectories.outcome[samples.trajectories.outcome == Outcome.CONVERGED] = Outcome.CONVERGED_OVER_LIMIT
    assert by_level(samples, V, 0.95).unfalsified.index == before.index


def test_no_unfalsified_level_where_every_start_converges(disc):
    samples, V = disc
    samples.trajectories.outcome[:] = Outcome.CONVERGED
    levels = by_level(samples, V, 0.95)
    assert levels.unfalsified is None
    assert levels.bound is None


def test_unfalsified_level_as_a_bound_is_simulated(disc):
    levels = by_level(*disc, 0.95)
    assert levels.bound.name == "unfalsified level"
    assert levels.bound.strength is Strength.SIMULATED
    assert str(levels.unfalsified.index) in levels.bound.note


def test_shells_hold_every_sample_once_and_turn_at_the_edge_of_the_basin(disc):
    samples, V = disc
    shells = by_level(samples, V, 0.95).shells
    assert sum(shell.samples for shell in shells) == samples.n
    assert shells[0].low == 0.0
    assert all(left.high == right.low for left, right in pairwise(shells))
    for shell in shells:
        share = shell.converged / shell.samples
        assert shell.interval.low <= share <= shell.interval.high
        assert share == 1 if shell.high <= 1 else share == 0 if shell.low >= 1 else 0 < share < 1
    # Small levels are told apart although shells of equal counts would lump them together.
    assert shells[0].high < 0.03 < 5.76 / 40 / np.pi


def test_shells_do_not_depend_on_the_size_of_the_slices_for_their_counts(disc):
    samples, V = disc
    edges = [shell.high for shell in by_level(samples, V, 0.95).shells]
    values = V.value(samples.trajectories.initial)
    counted = [shell.samples for shell in by_level(samples, V, 0.95).shells]
    assert counted[:-1] == np.histogram(values, [0.0, *edges[:-1]])[0].tolist()[: len(counted) - 1]


def test_starts_without_a_finite_V_are_left_out(disc):
    samples, V = disc

    class Holed:
        def value(self, x):
            values = V.value(x)
            values[::10] = np.nan
            return values

    shells = by_level(samples, Holed(), 0.95).shells
    assert sum(shell.samples for shell in shells) == samples.n - 1000 - 639
