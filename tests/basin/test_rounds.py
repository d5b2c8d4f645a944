"""Shares from designs in rounds, and goals: intervals that cover, refusals, looks fixed beforehand.

Exact shares: the disc and the ball by the volume of the ball; x1 x2 < 1 in [-2, 2]²: (10 + 4 ln 2)/16 (computed
independently); a slab of a given thickness.
"""

import math

import numpy as np
import pytest

from roa.basin.edge_share import EdgeShare
from roa.basin.goal import half_width
from roa.basin.intervals import clopper_pearson, replicate_interval
from roa.basin.ray_share import RayShare
from roa.basin.tally import tally_for
from roa.sweep import designs
from roa.sweep.designs.sobol import Sobol

SQUARE = np.array([[-2.0, 2.0]] * 2)
CUBE = np.array([[-1.2, 1.2]] * 4)


def product_rule(x):
    return x[:, 0] * x[:, 1] < 1


def ball_rule(x):
    return (x**2).sum(axis=1) < 1


def skewed_rule(x):
    skew = np.array([[3.0, 1.0], [1.0, 0.7]])
    return np.einsum("ki,ij,kj->k", x, skew, x) < 0.9


EXACT = {
    "product": (SQUARE, product_rule, (10 + 4 * math.log(2)) / 16),
    "ball of 4": (CUBE, ball_rule, math.pi**2 / 2 / 2.4**4),
    "ellipse": (SQUARE, skewed_rule, math.pi * 0.9 / math.sqrt(3 * 0.7 - 1) / 16),
}


def tallied(name, box, rule, samples, seed=1):
    """The tally of a whole sweep whose answers a rule gives."""
    design = designs.make(name, box, seed, 16, samples, np.zeros(len(box)))
    rounds = design.course().rounds()
    tally, starts = tally_for(design), next(rounds)
    while starts is not None:
        answers = rule(starts)
        tally.add(tally.samples, answers)
        starts = designs.following(rounds, answers)
    return tally


def covered(name, box, rule, exact, samples, confidence, seeds):
    n = len(box)
    hit = []
    for seed in seeds:
        found = tallied(name, box, rule, samples, seed).interval(n, confidence)
        hit.append(found.low <= exact <= found.high)
    return float(np.mean(hit))


@pytest.mark.parametrize("case", EXACT)
@pytest.mark.parametrize("name", ["rays", "boundary"])
def test_interval_holds_the_exact_share(name, case):
    box, rule, exact = EXACT[case]
    assert covered(name, box, rule, exact, 4096, 0.99, range(8)) == 1.0


@pytest.mark.parametrize(("case", "most"), [("product", 1e-4), ("ellipse", 1e-4), ("ball of 4", 1e-3)])
def test_error_of_rays_at_4096_starts(case, most):
    box, rule, exact = EXACT[case]
    errors = [tallied("rays", box, rule, 4096, seed).fraction / exact - 1 for seed in range(16)]
    assert np.sqrt(np.mean(np.square(errors))) < most


@pytest.mark.long
@pytest.mark.parametrize("case", EXACT)
@pytest.mark.parametrize("name", ["rays", "boundary"])
def test_coverage_of_rounds(name, case):
    box, rule, exact = EXACT[case]
    seeds = range(1000, 1400)
    n = len(box)
    hits = {0.99: 0, 0.95: 0}
    for seed in seeds:
        tally = tallied(name, box, rule, 4096, seed)
        for confidence in hits:
            found = tally.interval(n, confidence)
            hits[confidence] += found.low <= exact <= found.high
    print(f"\ncoverage {name}, {case}: " + ", ".join(f"{c:.0%}: {k / len(seeds):.4f}" for c, k in hits.items()))
    assert hits[0.99] / len(seeds) >= 0.975
    assert hits[0.95] / len(seeds) >= 0.92


def _slab(share):
    """A slab across the square of [-2, 2]², of a given share."""
    return lambda x: np.abs(x[:, 0] - 0.3) < 2 * share


@pytest.mark.long
@pytest.mark.parametrize("name", ["sobol", "independent", "grid", "boundary"])
@pytest.mark.parametrize("share", [0.0, 1e-5, 0.3, 1.0])
def test_coverage_of_small_empty_and_full_basins(name, share):
    rule = (lambda x: np.full(len(x), share == 1.0)) if share in (0.0, 1.0) else _slab(share)
    seeds = range(400) if name != "grid" else range(1)
    hits = {0.99: 0, 0.95: 0}
    for seed in seeds:
        for confidence in hits:
            found = _interval(name, rule, seed, confidence)
            assert found.low < found.high
            hits[confidence] += found.low <= share <= found.high
    rates = {c: k / len(seeds) for c, k in hits.items()}
    print(f"\ncoverage {name}, share {share:g}: " + ", ".join(f"{c:.0%}: {rate:.4f}" for c, rate in rates.items()))
    assert rates[0.99] >= 0.975
    assert rates[0.95] >= 0.92


def _interval(name, rule, seed, confidence):
    if name == "boundary":
        return tallied(name, SQUARE, rule, 4096, seed).interval(2, confidence)
    if name == "independent":
        x = np.random.default_rng(seed).uniform(-2, 2, (4096, 2))
        return clopper_pearson(int(rule(x).sum()), len(x), confidence)
    from roa.basin.share import Share

    design = designs.make(name, SQUARE, seed, 16, 4096, np.zeros(2))
    share = Share(name, design.replicates)
    share.add(0, rule(design.points(0, design.samples)))
    return share.interval(2, confidence)


class TestRefusals:
    def test_part_behind_a_gap(self):
        def ring(x):
            r = np.linalg.norm(x, axis=1)
            return (r < 0.7) | ((r > 1.2) & (r < 1.6))

        tally = tallied("rays", SQUARE, ring, 4096)
        assert "not star-shaped" in tally.refusal
        assert 'design = "boundary"' in tally.refusal
        assert math.isnan(tally.fraction)

    def test_radii_that_spread_too_widely(self):
        def star(x):  # sixteen spikes along the axes, concave between them
            return np.sqrt(np.abs(x)).sum(axis=1) < 1

        tally = tallied("rays", np.array([[-1.0, 1.0]] * 8), star, 8192)
        assert "spread so widely" in tally.refusal
        assert 'design = "sobol"' in tally.refusal

    def test_unfinished(self):
        design = designs.make("boundary", SQUARE, 1, 16, 4096, np.zeros(2))
        tally = tally_for(design)
        tally.add(0, np.ones(700, bool))
        assert "ended before" in tally.refusal


class TestAllOrNothing:
    @pytest.mark.parametrize("name", ["rays", "boundary"])
    def test_everything(self, name):
        tally = tallied(name, SQUARE, lambda x: np.full(len(x), True), 4096)
        found = tally.interval(2, 0.99)
        assert tally.fraction == pytest.approx(1.0, abs=1e-12)
        assert 0.95 < found.low < 1.0 <= found.high

    def test_nothing(self):
        tally = tallied("boundary", SQUARE, lambda x: np.full(len(x), False), 4096)
        found = tally.interval(2, 0.99)
        assert (tally.fraction, found.low) == (0.0, 0.0)
        assert 0 < found.high < 0.005


def test_interval_of_boundary_owns_up_to_what_the_cells_cannot_see():
    # A component of share 1e-4 is missed by most coarse passes: the interval must hold it all the same.
    def with_an_island(x):
        return skewed_rule(x) | (np.abs(x - [1.7, 1.6]).max(axis=1) < 0.02)

    exact = EXACT["ellipse"][2] + 0.04**2 / 16
    assert covered("boundary", SQUARE, with_an_island, exact, 8192, 0.99, range(12)) == 1.0


class TestEnough:
    def test_boundary_stops_at_the_accuracy(self, tmp_path):
        from sweep import small

        plans = small.make(200_000, sweep='horizon = 10.0\ndesign = "boundary"\naccuracy = 2e-3', block_size=4096)
        from roa.basin.goal import stopping

        folder = small.sweep(tmp_path, plan=stopping(plans))
        from roa.sweep.store import open_samples

        samples = open_samples(folder.sweep)
        assert 10_000 < samples.n < 100_000
        assert not samples.partial
        tally = tally_for(plans.design)
        tally.add(0, samples.read(0, samples.n).in_basin)
        assert abs(tally.fraction - math.pi / 2.4**2) < 2e-3
        assert half_width(tally.interval(2, 0.99), tally.fraction) < 2e-3

    def test_goal_is_reached_at_a_look_fixed_beforehand(self, tmp_path):
        from sweep import small

        from roa.basin.goal import goal_samples, number_of_looks, stopping
        from roa.sweep.plan import FIRST_LOOK
        from roa.sweep.store import open_samples

        plan = small.make(2**19, sweep="horizon = 10.0\ngoal = { width = 0.004 }", block_size=FIRST_LOOK)
        most = goal_samples(plan.configuration)
        assert most == 2**20
        assert number_of_looks(plan.configuration.sweep, most) == 7
        samples = open_samples(small.sweep(tmp_path, plan=stopping(plan)).sweep)
        assert samples.n in [FIRST_LOOK << k for k in range(4)]  # Sobol' points need far fewer than independent ones
        hits = samples.read(0, samples.n).in_basin
        counts = [int(hits[r::16].sum()) for r in range(16)]
        found = replicate_interval(counts, [samples.n // 16] * 16, 1 - 0.01 / 6)
        assert found.high - found.low <= 0.004
        assert found.low <= math.pi / 2.4**2 <= found.high


def test_kinds_of_tally():
    kinds = {"rays": RayShare, "boundary": EdgeShare}
    for name, kind in kinds.items():
        assert isinstance(tally_for(designs.make(name, SQUARE, 1, 16, 4096, np.zeros(2))), kind)
    assert not designs.load("sobol").in_rounds
    assert isinstance(designs.make("sobol", SQUARE, 1, 16, 64, np.zeros(2)), Sobol)
