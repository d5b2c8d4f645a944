"""Portions: the length of kernel calls follows the clock, and the results do not."""

import threading

import numpy as np
import pytest
from sweep import small

from roa.sweep.kept import row_bytes
from roa.sweep.plan import fitting_block_size
from roa.sweep.portions import CALL, FIRST, Portions, side_by_side

STARTS = np.random.default_rng(5).uniform(-1.2, 1.2, (5000, 2))


class Timed:
    """Lanes on a clock of their own: so many seconds a start."""

    def __init__(self, seconds):
        self.seconds, self.now, self.calls = seconds, 0.0, []

    def run(self, starts):
        self.calls.append(len(starts))
        self.now += self.seconds * len(starts)
        return small.ClosedForm().run(starts)

    def portions(self):
        return Portions(self.run, clock=lambda: self.now)


def same(one, other):
    return all(np.array_equal(getattr(one, name), getattr(other, name)) for name in small.DATASETS)


def test_calls_grow_to_about_a_second_and_not_beyond():
    timed = Timed(seconds=1e-3)
    assert same(timed.portions().all(STARTS), small.ClosedForm().run(STARTS))
    assert timed.calls[0] == FIRST
    assert max(timed.calls) * 1e-3 <= CALL * 1.001
    assert 900 <= max(timed.calls) <= 1001
    assert sum(timed.calls) == len(STARTS)


def test_quick_starts_soon_need_one_call():
    timed = Timed(seconds=1e-9)
    portions = timed.portions()
    portions.all(STARTS)
    timed.calls.clear()
    portions.all(STARTS)
    assert timed.calls == [len(STARTS)]


def test_starts_that_take_a_second_each_still_go_in_lanes():
    timed = Timed(seconds=1.0)
    timed.portions().all(STARTS[:200])
    assert timed.calls == [64, 64, 64, 8]


def test_giving_up_ends_between_two_calls_and_never_loses_what_is_done():
    timed = Timed(seconds=1e-2)
    assert timed.portions().run(STARTS, lambda: timed.now > 2) is None
    assert 2 < timed.now < 4
    assert timed.portions().run(STARTS[:FIRST], lambda: True) is not None


def test_no_starts():
    assert len(Timed(1.0).portions().all(STARTS[:0])) == 0


def test_side_by_side_keeps_the_order():
    both = threading.Barrier(2, timeout=20)

    def run(starts):
        both.wait()
        return small.ClosedForm().run(starts)

    assert same(side_by_side(run, 2)(STARTS), small.ClosedForm().run(STARTS))
    assert len(side_by_side(small.ClosedForm().run, 3)(STARTS[:1])) == 1


# 2**24 steps: on a heavy loop about a second; at most 2**17 starts, and 64 MB.
@pytest.mark.parametrize(
    ("steps", "n", "starts"),
    [(0, 2, 2**17), (128, 2, 2**17), (129, 2, 2**16), (2000, 4, 2**13), (2e5, 2, 2**8), (1, 40, 2**16)],
)
def test_size_of_a_block(steps, n, starts):
    assert fitting_block_size(steps, n) == starts
    assert starts * row_bytes("all", n) <= 64e6
