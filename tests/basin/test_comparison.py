"""Bounds against a basin whose volume is known: ratios and their intervals."""

import math

import numpy as np
import pytest

import gallery
from roa.basin.comparison import compare
from roa.basin.size import measure
from roa.bound.lyapunov_function import Quadratic
from roa.bound.statement import Bound, Strength
from roa.kernel.outcomes import Outcome


def a_bound(loop, level, P=None, name="norm bound"):
    return Bound(name, Quadratic(loop, np.zeros(loop.n), np.eye(loop.n) if P is None else P), level, Strength.PROVED)


def swept_ball(n, sweep, inside, **keywords):
    loop = gallery.ball(n).loop
    samples = sweep(loop, inside(lambda x: (x**2).sum(axis=1) < 1), **keywords)
    return loop, samples, measure(samples, loop, 0.99)


@pytest.mark.parametrize("n", [2, 3, 4])
def test_ball_of_half_the_radius(n, sweep, inside):
    loop, samples, basin = swept_ball(n, sweep, inside)
    (compared,) = compare([a_bound(loop, 0.25)], basin, samples)
    # Exact: half the radius of the unit ball (computed independently).
    assert compared.radius_ratio.interval.low < 0.5 < compared.radius_ratio.interval.high
    assert compared.volume_ratio.interval.low < 0.5**n < compared.volume_ratio.interval.high
    assert compared.volume == pytest.approx(math.pi ** (n / 2) / math.gamma(n / 2 + 1) * 0.5**n)
    assert compared.volume_interval is None
    assert compared.radius_ratio.value == pytest.approx(compared.volume_ratio.value ** (1 / n))
    assert compared.volume_ratio.interval.confidence == 0.99


@pytest.mark.parametrize("design", ["sobol", "grid"])
def test_set_that_leaves_the_domain_is_measured_by_the_samples(design, sweep, inside):
    # {4 x² + y² <= 2} in the box ±1.2: the part beyond y = ±1.2 is cut off (computed independently, by quadrature).
    loop, samples, basin = swept_ball(2, sweep, inside, design=design)
    y = np.linspace(-1.2, 1.2, 200_001)
    area = np.trapezoid(np.sqrt(2 - y**2), y)
    (compared,) = compare([a_bound(loop, 2.0, np.diag([4.0, 1.0]))], basin, samples)
    assert compared.volume_interval.low < area < compared.volume_interval.high
    assert compared.volume_ratio.interval.low < area / math.pi < compared.volume_ratio.interval.high
    # The error of both is in it: wider than that of the basin alone.
    own = compared.volume_ratio.interval
    alone = basin.interval
    assert own.high / own.low > alone.high / alone.low
    if design == "sobol":  # each gets half of the doubt, which widens both; cells of a grid know no confidence
        assert own.low < compared.volume_interval.low / basin.volume_interval.high
        assert own.high > compared.volume_interval.high / basin.volume_interval.low


def test_ratio_of_an_empty_basin_is_unknown(sweep):
    loop = gallery.ball(2).loop
    samples = sweep(loop, lambda x: np.full(len(x), Outcome.ESCAPED))
    (compared,) = compare([a_bound(loop, 0.25)], measure(samples, loop, 0.95), samples)
    assert compared.volume == pytest.approx(math.pi / 4)
    assert compared.volume_ratio is None
    assert compared.radius_ratio is None


def test_ratio_of_a_basin_that_may_be_empty_has_no_upper_end(sweep, inside):
    loop = gallery.ball(2).loop
    samples = sweep(loop, lambda x: np.where(np.arange(len(x)) == 5, Outcome.CONVERGED, Outcome.ESCAPED), samples=64)
    (compared,) = compare([a_bound(loop, 0.25)], measure(samples, loop, 0.999999), samples)
    assert compared.volume_ratio.value > 0
    assert compared.volume_ratio.interval.high > 1e3


def test_no_level_is_no_volume(sweep, inside):
    loop, samples, basin = swept_ball(2, sweep, inside)
    (compared,) = compare([a_bound(loop, 0.0)], basin, samples)
    assert (compared.volume, compared.volume_ratio.value, compared.radius_ratio.value) == (0.0, 0.0, 0.0)


def test_set_of_an_indefinite_P_is_measured_by_the_samples(sweep, inside):
    # {x² - y² <= 0}: half of the square (computed independently).
    loop, samples, basin = swept_ball(2, sweep, inside)
    (compared,) = compare([a_bound(loop, 1e-12, np.diag([1.0, -1.0]))], basin, samples)
    assert compared.volume_interval.low < 2.4**2 / 2 < compared.volume_interval.high
