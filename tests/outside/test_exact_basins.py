"""Whole sweeps of loops whose basins are known exactly.

Sources are named at each loop of the gallery; where it says "computed independently", the basin follows from a
closed form that anybody can check by hand and that this program does not use.
"""

import math

import numpy as np
import pytest
from scipy.special import gamma

import gallery
from roa import verbs
from roa.kernel.outcomes import Outcome
from roa.sweep.store import open_samples

SAMPLES = 32768


def swept(configuration, tmp_path, samples=SAMPLES):
    file = tmp_path / "loop.toml"
    file.write_text(configuration.text, encoding="utf-8")
    result = verbs.sweep(file, out=tmp_path / "run", samples=samples)
    return result.document, open_samples(tmp_path / "run" / "sweep.h5").read(0, samples)


def assert_membership(trajectories, inside, clear):
    """Outcomes agree with the exact basin for all starts that are `clear` of its edge."""
    converged = trajectories.outcome == Outcome.CONVERGED
    np.testing.assert_array_equal(converged[clear], inside[clear])


def assert_share(verdict, exact):
    low, high = verdict["basin"]["interval"]
    assert low <= exact <= high
    assert 0 < high - low < 0.02


def test_cubic_line(tmp_path):
    verdict, found = swept(gallery.cubic(), tmp_path)
    x = found.initial[:, 0]
    assert_membership(found, np.abs(x) < 1, np.abs(np.abs(x) - 1) > 1e-6)
    assert_share(verdict, 0.5)


def test_cubic_line_times(tmp_path):
    # x²/(1 - x²) = e^(-2t) x0²/(1 - x0²), computed independently; to the face X of the escape box alike.
    _, found = swept(gallery.cubic(sweep="rtol = 1e-9\natol = 1e-12\nescape = 5"), tmp_path, 4096)
    moved = found.steps > 0
    start, end = found.initial[moved, 0], found.final[moved, 0]
    exact = 0.5 * (np.log(start**2 / np.abs(1 - start**2)) - np.log(end**2 / np.abs(1 - end**2)))
    np.testing.assert_allclose(found.time[moved], exact, rtol=0, atol=1e-5)
    escaped = found.outcome == Outcome.ESCAPED
    face = 10.0
    start = found.initial[escaped, 0]
    reached = 0.5 * np.log(start**2 * (face**2 - 1) / (face**2 * (start**2 - 1)))
    no_later = 0.5 * np.log(start**2 / (start**2 - 1))
    assert (found.time[escaped] >= reached - 1e-6).all()
    assert (found.time[escaped] <= no_later + 1e-6).all()


def test_product_of_two_states(tmp_path):
    # Excursions reach 29 domain sizes, so that the default escape box would cut the basin.
    verdict, found = swept(gallery.product(sweep="escape = 1e4"), tmp_path)
    product = found.initial[:, 0] * found.initial[:, 1]
    assert_membership(found, product < 1, np.abs(product - 1) > 1e-4)
    assert_share(verdict, (10 + 4 * math.log(2)) / 16)


@pytest.mark.parametrize("n", [2, 3, 4])
def test_unit_ball(n, tmp_path):
    verdict, found = swept(gallery.ball(n), tmp_path)
    radius = np.linalg.norm(found.initial, axis=1)
    assert_membership(found, radius < 1, np.abs(radius - 1) > 1e-6)
    volume = math.pi ** (n / 2) / gamma(1 + n / 2)
    assert volume == pytest.approx([3.141592654, 4.188790205, 4.934802201][n - 2])
    assert_share(verdict, volume / 2.4**n)


def test_parabola_with_another_equilibrium(tmp_path):
    verdict, found = swept(gallery.parabola(sweep="escape = 50"), tmp_path)
    gap = found.initial[:, 0] - found.initial[:, 1] ** 2
    assert_membership(found, gap > 0, np.abs(gap) > 1e-4)
    assert_share(verdict, 8 * math.sqrt(2) / 3 / 16)
    settled = found.outcome == Outcome.SETTLED_ELSEWHERE
    np.testing.assert_array_equal(settled[np.abs(gap) > 1e-4], gap[np.abs(gap) > 1e-4] < 0)


@pytest.mark.parametrize("k", [2.0, 0.6])
def test_saturated_unstable_line(k, tmp_path):
    # Any gain above a gives the same basin |x| < 1/a = 2 (Hu and Lin 2001, from memory).
    verdict, found = swept(gallery.saturated_integrator(a=0.5, k=k), tmp_path, 8192)
    x = np.abs(found.initial[:, 0])
    assert_membership(found, x < 2, np.abs(x - 2) > 1e-6)
    assert_share(verdict, 4 / 6)


def test_capture_strip(tmp_path):
    verdict, found = swept(gallery.capture_point(), tmp_path)
    strip = np.abs(3 * found.initial[:, 0] + found.initial[:, 1])
    assert_membership(found, strip < 2 / 3, np.abs(strip - 2 / 3) > 1e-5)
    assert_share(verdict, (8 / 9) / 4)


def test_double_well_by_symmetry(tmp_path):
    verdict, found = swept(gallery.double_well(), tmp_path)
    assert_share(verdict, 0.5)
    counts = verdict["basin"]["counts"]
    assert counts["converged"] + counts["settled_elsewhere"] == len(found)
