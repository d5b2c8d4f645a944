"""What every design that refines in rounds must do; each design's class inherits the properties."""

import json

import numpy as np
import pytest

from roa.errors import UserError
from roa.sweep import designs

BOX = np.array([[-2.0, 2.0], [-1.5, 2.5]])
CENTRE = np.array([0.0, 0.5])


def disc(x):
    return ((x - CENTRE) ** 2).sum(axis=1) < 1


def played(design, rule):
    """Starts and answers of every round of a course whose answers a rule gives."""
    course = design.course()
    rounds = course.rounds()
    starts, given = next(rounds, None), []
    while starts is not None:
        given.append((starts, rule(starts)))
        starts = designs.following(rounds, given[-1][1])
    return course, given


class RoundDesignProperties:
    name = ""
    samples = 2048

    def make(self, seed=5, samples=None, box=BOX, centre=CENTRE):
        return designs.make(self.name, box, seed, 16, samples or self.samples, centre)

    def test_is_found_by_its_name_and_says_what_it_is(self):
        assert self.name in designs.available()
        assert designs.load(self.name).in_rounds

    def test_rounds_follow_from_the_answers_alone(self):
        first, second = (played(self.make(), disc)[1] for _ in range(2))
        assert len(first) == len(second) > 3
        for (one, _), (other, _) in zip(first, second, strict=True):
            assert np.array_equal(one, other)

    def test_another_answer_changes_later_rounds_alone(self):
        _, given = played(self.make(), disc)
        turned = len(given) // 2
        calls = iter(range(10**6))

        def rule(x):
            return disc(x) ^ (next(calls) == turned)

        _, other = played(self.make(), rule)
        for k in range(turned + 1):
            assert np.array_equal(given[k][0], other[k][0])
        assert not all(
            np.array_equal(a[0], b[0]) for a, b in zip(given[turned + 1 :], other[turned + 1 :], strict=False)
        )

    def test_no_round_is_empty_and_all_are_within_the_samples(self):
        _, given = played(self.make(), disc)
        assert all(len(starts) > 0 for starts, _ in given)
        total = sum(len(starts) for starts, _ in given)
        assert 0.5 * self.samples < total <= self.samples

    def test_starts_lie_in_the_box(self):
        for starts, _ in played(self.make(), disc)[1]:
            assert (starts >= BOX[:, 0]).all()
            assert (starts <= BOX[:, 1]).all()

    def test_follow_stops_where_the_answers_stop(self):
        _, given = played(self.make(), disc)
        sizes = [len(starts) for starts, _ in given]
        answers = np.concatenate([yes for _, yes in given])
        assert designs.follow(self.make().course(), answers) == sum(sizes)
        assert designs.follow(self.make().course(), answers[: sizes[0] + sizes[1] - 1]) == sizes[0]

    def test_another_seed_draws_others(self):
        one, other = (np.concatenate([s for s, _ in played(self.make(seed=seed), disc)[1]]) for seed in (1, 2))
        assert len({tuple(x) for x in one} & {tuple(x) for x in other}) < 100

    @pytest.mark.parametrize("everywhere", [True, False])
    def test_ends_where_all_answers_are_the_same(self, everywhere):
        _, given = played(self.make(), lambda x: np.full(len(x), everywhere))
        assert sum(len(starts) for starts, _ in given) <= self.samples

    def test_ends_whatever_is_answered(self):
        rng = np.random.default_rng(1)
        _, given = played(self.make(), lambda x: rng.random(len(x)) < 0.5)
        assert sum(len(starts) for starts, _ in given) <= self.samples

    @pytest.mark.parametrize("n", [1, 3, 5])
    def test_other_numbers_of_states(self, n):
        box, centre = np.array([[-1.2, 1.3]] * n), np.zeros(n)
        _, given = played(self.make(samples=4096, box=box, centre=centre), lambda x: (x**2).sum(axis=1) < 1)
        assert given[0][0].shape[1] == n

    def test_parts_stand_in_json(self):
        parts = self.make().parts
        assert json.loads(json.dumps(parts)) == parts


class TestRays(RoundDesignProperties):
    name = "rays"

    def test_brackets_hold_the_edge(self):
        course, _ = played(self.make(), disc)
        bundle = course.bundle
        starts = [bundle.at(np.arange(len(r)), r) for r in (bundle.low, bundle.high)]
        assert disc(starts[0]).all()
        assert not disc(starts[1]).any()
        np.testing.assert_allclose(bundle.high, bundle.low, rtol=2e-3)
        assert not course.contrary
        assert not bundle.crossed

    def test_frame_makes_radii_equal_where_the_basin_is_an_ellipsoid(self):
        skew = np.array([[3.0, 1.0], [1.0, 0.7]])
        course, _ = played(self.make(), lambda x: np.einsum("ki,ij,kj->k", x - CENTRE, skew, x - CENTRE) < 0.5)
        assert np.ptp(course.bundle.low) < 0.03 * course.bundle.low.mean()

    def test_rays_end_at_the_face_where_the_basin_reaches_it(self):
        course, _ = played(self.make(), lambda x: x[:, 0] < 1)
        bundle = course.bundle
        reached = bundle.low == bundle.face
        ends = bundle.at(np.arange(len(reached)), bundle.face)
        assert (ends[reached, 0] < 1).all()
        assert 0.5 < reached.mean() < 1

    def test_a_part_behind_a_gap_is_seen(self):
        def with_a_ring(x):
            r = np.linalg.norm(x - CENTRE, axis=1)
            return (r < 0.6) | ((r > 1) & (r < 1.3))

        course, _ = played(self.make(), with_a_ring)
        assert course.contrary + course.bundle.crossed > 0

    def test_cannot_grow(self):
        assert not self.make().extendable

    def test_too_few_starts_say_how_many_are_needed(self):
        with pytest.raises(UserError, match=r'samples = 300: design = "rays" needs at least ([\d,]+) starts') as caught:
            self.make(samples=300)
        needed = int(caught.value.faults[0].split("at least ")[1].split(" ")[0].replace(",", ""))
        self.make(samples=needed)
        with pytest.raises(UserError):
            self.make(samples=needed - 40)

    def test_equilibrium_on_a_face_is_refused(self):
        with pytest.raises(UserError, match=r"lies on a face of the domain .state 2 at 2\.5.*boundary"):
            self.make(centre=np.array([0.0, 2.5]))


class TestBoundary(RoundDesignProperties):
    name = "boundary"
    samples = 4096

    def test_cells_at_the_edge_get_small(self):
        course, _ = played(self.make(samples=16384), disc)
        area = sum(share * value.sum() for share, value, _ in course.leaves())
        assert area == pytest.approx(np.pi / 16, rel=1e-3)
        assert sum(share * len(value) for share, value, _ in course.leaves()) == pytest.approx(1)
        assert len(course.levels) > 4

    def test_more_starts_carry_it_on(self):
        few, many = (np.concatenate([s for s, _ in played(self.make(samples=m), disc)[1]]) for m in (3001, 9000))
        assert np.array_equal(few, many[: len(few)])
        assert self.make().extendable

    def test_an_island_smaller_than_a_cell_is_refined_once_it_is_hit(self):
        def with_an_island(x):
            return disc(x) | (np.abs(x - [-1.7, -1.2]).max(axis=1) < 0.05)

        course, _ = played(self.make(samples=65536), with_an_island)
        area = sum(share * value.sum() for share, value, _ in course.leaves())
        assert area == pytest.approx((np.pi + 0.01) / 16, rel=2e-4)

    def test_too_many_states_and_too_few_starts_are_refused(self):
        with pytest.raises(UserError, match="is for at most 8 states, 9 found"):
            self.make(box=np.array([[-1.0, 1.0]] * 9), centre=np.zeros(9))
        with pytest.raises(UserError, match="needs at least 2,048 starts"):
            self.make(samples=2000)


def test_each_file_is_one_design():
    assert {TestRays.name, TestBoundary.name} == {name for name in designs.available() if designs.load(name).in_rounds}
