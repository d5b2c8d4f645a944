"""What every sampling design must do; each design's class inherits the properties."""

import json
from itertools import pairwise

import numpy as np
import pytest
from scipy.stats import qmc

from roa.errors import UserError
from roa.sweep import designs
from roa.sweep.designs.sobol import DIGITS, STREAM

BOX = np.array([[-3.0, 3.0], [0.1, 0.7], [1e6, 1e6 + 1.0]])


class DesignProperties:
    name = ""
    samples = 4096

    def make(self, seed=5, samples=None, box=BOX, replicates=16):
        return designs.load(self.name)(box, seed, replicates, samples or self.samples)

    def test_is_found_by_its_name(self):
        assert self.name in designs.available()

    def test_same_points_in_any_split(self):
        design = self.make()
        whole = design.points(0, design.samples)
        assert whole.shape == (design.samples, 3)
        for cuts in ([1], [7, 8, 9], [1024, 3000], range(100, design.samples, 777)):
            edges = [0, *cuts, design.samples]
            pieces = [design.points(a, b - a) for a, b in pairwise(edges)]
            assert np.array_equal(np.concatenate(pieces), whole)

    def test_same_points_another_time(self):
        assert np.array_equal(self.make().points(17, 99), self.make().points(17, 99))

    def test_no_points(self):
        assert self.make().points(3, 0).shape == (0, 3)

    def test_points_lie_in_the_box(self):
        design = self.make()
        points = design.points(0, design.samples)
        assert (points >= BOX[:, 0]).all()
        assert (points <= BOX[:, 1]).all()

    def test_mean_and_variance_are_those_of_the_box(self):
        design = self.make()
        unit = (design.points(0, design.samples) - BOX[:, 0]) / (BOX[:, 1] - BOX[:, 0])
        assert unit.mean(axis=0) == pytest.approx(1 / 2, abs=2e-3)
        assert unit.var(axis=0) == pytest.approx(1 / 12, rel=1e-2)

    def test_forty_states(self):
        box = np.tile([-1.0, 1.0], (40, 1))
        points = self.make(box=box, samples=64).points(0, 1)
        assert points.shape == (1, 40)
        assert np.isfinite(points).all()

    def test_parts_stand_in_json(self):
        parts = self.make().parts
        assert json.loads(json.dumps(parts)) == parts


class TestSobol(DesignProperties):
    name = "sobol"

    def test_is_scipy_s_sequence_in_every_replicate(self):
        # scipy.stats.qmc.Sobol, drawn point by point in its own order.
        points = self.make(box=np.array([[0.0, 1.0]] * 3)).points(0, 16 * 4096)
        for r in range(16):
            stream = np.random.SeedSequence(entropy=5, spawn_key=(STREAM, r))
            engine = qmc.Sobol(3, scramble=True, bits=DIGITS, rng=np.random.default_rng(stream))
            assert np.array_equal(points[r::16], engine.random(4096))

    def test_index_means_the_same_at_any_number_of_samples(self):
        assert np.array_equal(self.make(samples=100).points(0, 100), self.make(samples=10**6).points(0, 100))

    def test_every_replicate_is_stratified(self):
        # A digital (t, m, s)-net in base 2: 2^m points have one coordinate in each of 2^m equal parts.
        points = self.make(box=np.array([[0.0, 1.0]] * 3)).points(0, 16 * 256)
        for r in range(16):
            parts = np.sort(np.floor(points[r::16] * 256), axis=0)
            assert (parts == np.arange(256)[:, None]).all()

    def test_errors_of_replicates_do_not_hang_together(self):
        # The share of a disc in the unit square, pi/16, from 64 points: errors of replicates 0 and 1 over 150 seeds.
        def share(points):
            return (np.square(points).sum(axis=1) < 0.25).mean()

        errors = []
        for seed in range(150):
            points = self.make(seed=seed, box=np.array([[0.0, 1.0]] * 2), replicates=2).points(0, 128)
            errors.append([share(points[0::2]) - np.pi / 16, share(points[1::2]) - np.pi / 16])
        first, second = np.array(errors).T
        assert abs(np.corrcoef(first, second)[0, 1]) < 0.3  # 3.7 standard deviations of a correlation of zero
        assert 0 < first.std() < np.sqrt(np.pi / 16 * (1 - np.pi / 16) / 64)  # and smaller than by chance
        assert abs(first.mean()) < 4 * first.std() / np.sqrt(150)

    def test_another_seed_shares_no_replicate(self):
        first = {tuple(point) for seed in range(20) for point in self.make(seed=seed).points(0, 16)}
        assert len(first) == 20 * 16

    def test_far_indices_are_reached_at_once(self):
        design = self.make()
        far = design.points(2**40 - 16, 16)  # point by point it would take hours
        assert len({tuple(point) for point in far}) == 16

    def test_extendable(self):
        assert self.make().extendable
        assert self.make().replicates == 16


class TestGrid(DesignProperties):
    name = "grid"

    @pytest.mark.parametrize(
        ("asked", "n", "per_state"),
        [(4096, 3, 16), (4095, 3, 15), (1, 2, 1), (3, 2, 1), (10**6, 3, 100), (2**40, 40, 2)],
    )
    def test_number_of_points(self, asked, n, per_state):
        design = self.make(samples=asked, box=np.array([[0.0, 1.0]] * n))
        assert design.samples == per_state**n
        assert design.parts == {"points_per_state": per_state}

    def test_cell_centres_with_the_last_state_fastest(self):
        points = self.make(samples=6, box=np.array([[0.0, 1.0], [10.0, 14.0]])).points(0, 4)
        assert points.tolist() == [[0.25, 11.0], [0.25, 13.0], [0.75, 11.0], [0.75, 13.0]]

    def test_has_no_seed_and_cannot_grow(self):
        assert np.array_equal(self.make(seed=1).points(0, 50), self.make(seed=2).points(0, 50))
        assert not self.make().extendable
        assert self.make().replicates == 1
        assert "deterministic" in self.make().interval


def test_unknown_design_names_the_known_ones():
    with pytest.raises(UserError, match=r'"sobl".*available: .*grid.*sobol.*did you mean "sobol"'):
        designs.load("sobl")


def test_each_file_is_one_design():
    refining = {name for name in designs.available() if designs.load(name).in_rounds}
    assert {TestSobol.name, TestGrid.name} == set(designs.available()) - refining
