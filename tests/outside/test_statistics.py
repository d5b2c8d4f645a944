"""Sample sizes, binomial intervals and volumes against published tables and independent computation.

Where a source is named, its figures were recalled from memory and agree with an independent computation, unless the
line says otherwise.
"""

import math

import numpy as np
import pytest
from scipy.optimize import brentq
from scipy.stats import binom

from roa.basin.intervals import clopper_pearson, clopper_pearson_upper, success_run_samples, wilson
from roa.bound.volume import ellipsoid_volume


@pytest.mark.parametrize(
    ("k", "n", "low", "high"),
    [
        # Clopper and Pearson, Biometrika 26 (1934), 404-413: limits at 95 %; from memory, computed independently.
        (0, 10, 0.0, 0.308497),
        (1, 10, 0.002529, 0.445016),
        (5, 10, 0.187086, 0.812914),
        (10, 100, 0.049005, 0.176223),
        # Computed independently.
        (0, 100, 0.0, 0.036217),
    ],
)
def test_clopper_pearson_95(k, n, low, high):
    interval = clopper_pearson(k, n, 0.95)
    assert interval.low == pytest.approx(low, abs=1e-6)
    assert interval.high == pytest.approx(high, abs=1e-6)


def test_clopper_pearson_of_the_nist_handbook():
    # NIST/SEMATECH e-Handbook of Statistical Methods, 7.2.4.2: 4 defectives among 20, 90 % (set-up read in the source,
    # its spreadsheet's answers .071354 and .401029 from memory, the limits computed independently).
    interval = clopper_pearson(4, 20, 0.90)
    assert interval.low == pytest.approx(0.071354, abs=1e-5)
    assert interval.high == pytest.approx(0.401028, abs=1e-5)


def test_clopper_pearson_one_sided():
    # Computed independently: 1 - .05^(1/100).
    assert clopper_pearson_upper(0, 100, 0.95) == pytest.approx(0.029513, abs=1e-6)


@pytest.mark.parametrize(("k", "n"), [(0, 1), (3, 17), (40, 41), (7, 4603)])
def test_clopper_pearson_inverts_the_binomial_law(k, n):
    # Computed independently: the limits are where the tails of scipy's binomial law hold half of the doubt each.
    interval = clopper_pearson(k, n, 0.98)
    upper = brentq(lambda p: binom.cdf(k, n, p) - 0.01, 1e-12, 1 - 1e-12, xtol=1e-14)
    assert interval.high == pytest.approx(upper, rel=1e-9)
    if k:
        lower = brentq(lambda p: binom.sf(k - 1, n, p) - 0.01, 1e-12, 1 - 1e-12, xtol=1e-14)
        assert interval.low == pytest.approx(lower, rel=1e-9)


@pytest.mark.parametrize(
    ("k", "n", "confidence", "low", "high"),
    [
        # Newcombe, Statistics in Medicine 17 (1998), 857-872, method without continuity correction; from memory,
        # computed independently.
        (81, 263, 0.95, 0.255289, 0.366210),
        (15, 148, 0.95, 0.062386, 0.160487),
        (0, 20, 0.95, 0.0, 0.161125),
        (1, 29, 0.95, 0.006113, 0.171755),
        # Computed independently.
        (4, 20, 0.90, 0.093118, 0.378377),
    ],
)
def test_wilson(k, n, confidence, low, high):
    interval = wilson(k, n, confidence)
    assert interval.low == pytest.approx(low, abs=1e-6)
    assert interval.high == pytest.approx(high, abs=1e-6)


# Wilks's one-sided sample sizes for 0, 1, 2… allowed failures. The first entry of 95/95 was read in the abstract of
# "Uncertainty, Sample Size and the 95/95 Tolerance Limit" (article 5492); the rest of that row is from memory and
# computed independently, the other rows are computed independently.
WILKS = [
    (0.95, 0.95, [59, 93, 124, 153, 181, 208]),
    (0.95, 0.90, [45, 77, 105, 132, 158, 184]),
    (0.90, 0.90, [22, 38, 52, 65, 78, 91]),
    (0.90, 0.95, [29, 46, 61, 76, 89, 103]),
    (0.99, 0.90, [230, 388, 531, 667, 798, 926]),
    (0.99, 0.95, [299, 473, 628, 773, 913, 1049]),
    (0.99, 0.99, [459, 662, 838, 1001, 1157, 1307]),
    (0.999, 0.95, [2995, 4742, 6294, 7752]),
    (0.9999, 0.95, [29956, 47437]),
    (0.99865, 0.90, [1705, 2880, 3941, 4947, 5920, 6868]),
    (0.9973, 0.90, [852, 1440, 1970, 2473, 2959, 3433]),
    (0.999, 0.99, [4603]),
]


@pytest.mark.parametrize(("fraction", "confidence", "sizes"), WILKS)
def test_success_runs(fraction, confidence, sizes):
    assert [success_run_samples(fraction, confidence, failures) for failures in range(len(sizes))] == sizes


@pytest.mark.parametrize(("samples", "allowed"), [(1000, None), (2000, 0), (3000, 1), (10000, 8)])
def test_allowed_failures_of_a_three_sigma_requirement(samples, allowed):
    # 99.865 % at 10 % consumer risk; the form of the requirement is that of Hanson and Beard, NASA/TP-2010-216447
    # (abstract read), the numbers are computed independently.
    enough = [k for k in range(20) if success_run_samples(0.99865, 0.90, k) <= samples]
    assert (max(enough) if enough else None) == allowed


@pytest.mark.parametrize(
    ("fraction", "confidence", "samples"),
    [(0.95, 0.95, 93), (0.99, 0.95, 473), (0.90, 0.95, 46), (0.99, 0.99, 662)],
)
def test_two_sided_tolerance_limits(fraction, confidence, samples):
    # Wilks, Annals of Mathematical Statistics 12 (1941): smallest and largest of n hold the content; this is the
    # one-sided size with one failure allowed. Computed independently.
    assert success_run_samples(fraction, confidence, 1) == samples


def test_second_order_of_two_sided_limits():
    # Second smallest and second largest: three failures allowed. Computed independently.
    assert success_run_samples(0.95, 0.95, 3) == 153


def test_exact_edge_of_a_success_run():
    # Computed independently: 1 - .95^59 = .951505 and 1 - .95^58 = .948953; order 2 reaches .950024 with 93 samples.
    # At these confidences the exact upper limit is 5 %.
    assert clopper_pearson_upper(0, 59, 0.951505) == pytest.approx(0.05, abs=1e-6)
    assert clopper_pearson_upper(0, 58, 0.948953) == pytest.approx(0.05, abs=1e-6)
    assert clopper_pearson_upper(1, 93, 0.950024) == pytest.approx(0.05, abs=1e-6)
    assert clopper_pearson_upper(1, 93, 0.95) <= 0.05 < clopper_pearson_upper(1, 92, 0.95)


def test_rule_of_three():
    # The example of 300 trials without a failure was read in a source; the figures are computed independently.
    assert -math.log(0.05) == pytest.approx(2.9957, abs=1e-4)
    upper = clopper_pearson_upper(0, 300, 0.95)
    assert upper == pytest.approx(0.009936, abs=1e-6)
    assert upper == pytest.approx(3 / 300, rel=0.01)


@pytest.mark.parametrize(("fraction", "samples"), [(1 - 1e-6, 2_995_731)])
def test_what_a_rare_event_asks_for(fraction, samples):
    # Computed independently: ln .05 / ln(1 - 1e-6), rounded up.
    assert success_run_samples(fraction, 0.95) == samples


@pytest.mark.parametrize(
    ("n", "volume"),
    list(enumerate([2, 3.141593, 4.188790, 4.934802, 5.263789, 5.167713, 4.724766, 4.058712], start=1)),
)
def test_ball_volumes(n, volume):
    # pi^(n/2)/Gamma(n/2 + 1), computed independently.
    assert ellipsoid_volume(np.eye(n), 1.0) == pytest.approx(volume, abs=1e-6)


@pytest.mark.parametrize(("n", "share"), [(4, 0.308425), (6, 0.0807455), (8, 0.0158543)])
def test_share_of_the_ball_in_its_cube(n, share):
    # Computed independently.
    assert ellipsoid_volume(np.eye(n), 1.0) / 2**n == pytest.approx(share, abs=1e-6)
