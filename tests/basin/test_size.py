"""Share, volume and counts of a sweep whose basin is known exactly."""

import math

import numpy as np
import pytest

import gallery
from roa.basin.share import Share
from roa.basin.size import measure
from roa.kernel.outcomes import Outcome


@pytest.mark.parametrize("n", [2, 3, 4])
@pytest.mark.parametrize("design", ["sobol", "grid"])
def test_ball_lies_within_the_interval(n, design, sweep, inside):
    # x' = Sx - (1 - |x|²)x: the basin is the unit ball (computed independently).
    loop = gallery.ball(n).loop
    basin = measure(sweep(loop, inside(lambda x: (x**2).sum(axis=1) < 1), design=design), loop, 0.99)
    volume = math.pi ** (n / 2) / math.gamma(n / 2 + 1)
    assert basin.volume_interval.low < volume < basin.volume_interval.high
    assert basin.volume == pytest.approx(basin.fraction * 2.4**n)
    assert basin.interval.low < basin.fraction < basin.interval.high
    assert ("grid" if design == "grid" else "16 independent replicates") in basin.interval.method


@pytest.mark.parametrize(("outcome", "fraction"), [(Outcome.CONVERGED, 1.0), (Outcome.ESCAPED, 0.0)])
@pytest.mark.parametrize("design", ["sobol", "grid"])
def test_interval_of_all_or_none_has_a_width(outcome, fraction, design, sweep):
    loop = gallery.ball(2).loop
    basin = measure(sweep(loop, lambda x: np.full(len(x), outcome), design=design), loop, 0.95)
    assert basin.fraction == fraction
    assert 0 < basin.interval.high - basin.interval.low < 1e-3
    assert fraction in (basin.interval.low, basin.interval.high)


def test_counts_list_every_outcome_and_reasons_only_what_occurred(sweep):
    loop = gallery.ball(2).loop
    samples = sweep(loop, lambda x: np.arange(len(x)) % 6 + 1, samples=600)
    samples.trajectories.reason[samples.trajectories.outcome == Outcome.FAILED] = 1
    basin = measure(samples, loop, 0.95)
    assert basin.counts == {outcome.word: 100 if outcome else 0 for outcome in Outcome}
    assert basin.reasons == {"step_cap": 100}
    # Over a limit or not, it came back: both belong to the basin.
    assert basin.fraction == pytest.approx(1 / 3)


def test_samples_belong_to_replicates_by_index_modulo_across_slices():
    whole, sliced = Share("sobol", 7), Share("sobol", 7)
    yes = np.arange(1000) % 3 == 0
    whole.add(0, yes)
    for first in range(0, 1000, 130):
        sliced.add(first, yes[first : first + 130])
    assert sliced.hits.tolist() == whole.hits.tolist() == [yes[r::7].sum() for r in range(7)]
    assert sliced.sizes.tolist() == [len(yes[r::7]) for r in range(7)]


def test_incomplete_grid_says_nothing_of_the_domain():
    share = Share("grid", 1)
    share.add(0, np.ones(90, bool))
    interval = share.interval(2, 0.95)
    assert (interval.low, interval.high) == (0.0, 1.0)
