"""Intervals about shares: never empty, honest at the ends, and covering what they say."""

import math

import numpy as np
import pytest

from roa.basin.intervals import (
    clopper_pearson,
    clopper_pearson_upper,
    grid_interval,
    replicate_interval,
    success_run_samples,
    wilson,
)
from roa.sweep.designs import load


@pytest.mark.parametrize("of", [clopper_pearson, wilson])
@pytest.mark.parametrize(("k", "n"), [(0, 1), (1, 1), (0, 5000), (5000, 5000), (1, 5000)])
def test_ends_are_finite_ordered_and_hold_the_share(of, k, n):
    interval = of(k, n, 0.99)
    assert 0.0 <= interval.low < interval.high <= 1.0
    assert interval.low <= k / n <= interval.high


@pytest.mark.parametrize("of", [clopper_pearson, wilson])
def test_nothing_seen_says_nothing(of):
    assert (of(0, 0, 0.95).low, of(0, 0, 0.95).high) == (0.0, 1.0)
    assert clopper_pearson_upper(0, 0, 0.95) == 1.0


@pytest.mark.parametrize(("fraction", "confidence", "failures"), [(0.999, 0.99, 0), (0.95, 0.95, 3), (0.5, 0.9, 1)])
def test_success_run_is_the_smallest_that_the_exact_limit_lets_through(fraction, confidence, failures):
    n = success_run_samples(fraction, confidence, failures)
    assert clopper_pearson_upper(failures, n, confidence) <= 1 - fraction
    assert clopper_pearson_upper(failures, n - 1, confidence) > 1 - fraction


@pytest.mark.parametrize(("fraction", "confidence"), [(1.0, 0.99), (0.9, 1.0), (0.0, 0.5), (float("nan"), 0.5)])
def test_impossible_goals_are_refused(fraction, confidence):
    with pytest.raises(ValueError, match="strictly between 0 and 1"):
        success_run_samples(fraction, confidence)


def test_few_hits_or_misses_fall_back_on_the_exact_binomial():
    for hits in ([0] * 16, [1000] * 16, [1] + [0] * 15, [999] + [1000] * 15):
        interval = replicate_interval(hits, [1000] * 16, 0.95)
        exact = clopper_pearson(sum(hits), 16000, 0.95)
        assert (interval.low, interval.high) == (exact.low, exact.high)
        assert "exact binomial" in interval.method


def test_replicates_that_agree_by_chance_leave_what_one_sample_cannot_resolve():
    interval = replicate_interval([250] * 16, [1000] * 16, 0.95)
    assert interval.low < 0.25 < interval.high
    assert 1 / 16000 < interval.high - interval.low < 1 / 1000
    assert "16 independent replicates" in interval.method


def test_replicate_interval_is_students_t_on_equal_sizes():
    # By hand: shares .2 and .4 in turn, mean .3, standard deviation .1 * sqrt(8/7); t(7 degrees, .975) = 2.364624.
    interval = replicate_interval([200, 400] * 4, [1000] * 8, 0.95)
    half = 2.364624 * 0.1 * math.sqrt(8 / 7) / math.sqrt(8)
    assert interval.low == pytest.approx(0.3 - half, abs=1e-6)
    assert interval.high == pytest.approx(0.3 + half, abs=1e-6)


def test_replicates_without_a_sample_do_not_count():
    assert replicate_interval([1, 0, 0, 0], [1, 1, 1, 0], 0.95).high < 1.0


# A disc in a box; a small one, of a share where the binomial takes over; and two near that border.
SHARES = {"disc": math.pi * 0.64 / 4, "share of 1e-4": 1e-4, "share of 5e-3": 5e-3, "share of 1e-2": 1e-2}
REPLICATES, SAMPLES, SWEEPS = 8, 8 * 512, 400


@pytest.fixture(scope="module")
def sweeps():
    box = np.array([[-1.0, 1.0]] * 2)
    return [load("sobol")(box, 7000 + seed, REPLICATES, SAMPLES).points(0, SAMPLES) for seed in range(SWEEPS)]


@pytest.mark.parametrize("name", SHARES)
def test_coverage_of_the_replicate_interval(name, sweeps):
    """Stated 95 % covers at least 92 % on scrambled Sobol' points; 400 sweeps leave a standard error of 1.1 %."""
    share = SHARES[name]
    radius, centre = math.sqrt(4 * share / math.pi), 0.0 if name == "disc" else 0.21
    covered = 0
    for points in sweeps:
        inside = ((points - centre) ** 2).sum(axis=1) < radius**2
        hits = inside.reshape(-1, REPLICATES).sum(axis=0)
        interval = replicate_interval(hits.tolist(), [SAMPLES // REPLICATES] * REPLICATES, 0.95)
        covered += interval.low <= share <= interval.high
    assert covered / SWEEPS >= 0.92


@pytest.mark.parametrize(("n", "per_state"), [(1, 50), (2, 21), (2, 128), (3, 20)])
def test_grid_interval_holds_the_ball(n, per_state):
    box = np.array([[-1.2, 1.2]] * n)
    points = load("grid")(box, 1, 1, per_state**n).points(0, per_state**n)
    inside = ((points**2).sum(axis=1) < 1).reshape((per_state,) * n)
    interval = grid_interval(inside, 0.95)
    share = math.pi ** (n / 2) / math.gamma(n / 2 + 1) / 2.4**n
    assert interval.low < share < interval.high
    assert interval.high - interval.low < 10 * n / per_state


def test_grid_interval_holds_an_edge_along_an_axis():
    """The worst case of a grid, and where an exact binomial interval would be far too narrow."""
    per_state = 40
    middle = (np.arange(per_state) + 0.5) / per_state
    for share in (0.5, 0.5124, 0.5249, 0.51):
        inside = np.broadcast_to((middle < share)[:, None, None], (per_state,) * 3)
        interval = grid_interval(inside, 0.95)
        assert interval.low < share < interval.high


def test_grid_without_an_edge_is_as_wide_as_the_number_of_cells_allows():
    for inside in (np.zeros((30, 30), bool), np.ones((30, 30), bool)):
        interval = grid_interval(inside, 0.95)
        assert 1e-3 < interval.high - interval.low < 1e-2
