"""The granted time: the sweep ends in it, what is done stays, and the rest is done later."""

import time

import pytest
from sweep import small

from roa.sweep.finished import open_partial
from roa.sweep.means import KEPT_MOST, Means, working_seconds
from roa.sweep.stop import GRACE, StopRequest


class Slow(small.ClosedForm):
    """Every block takes a tenth of a second."""

    def run(self, initial):
        time.sleep(0.1)
        return super().run(initial)


@pytest.mark.parametrize("jobs", [1, 2])
def test_time_runs_out(tmp_path, jobs):
    plan = small.make(2560)
    folder = small.sweep(tmp_path / "run", jobs=jobs, lanes=Slow(), plan=plan, deadline=time.monotonic() + 0.7)
    assert not folder.sweep.exists()
    samples = open_partial(folder)
    assert 64 <= samples.n < 2560
    assert (samples.wanted, samples.partial) == (2560, True)
    assert "the granted time is over" in folder.log.read_text()
    small.sweep(folder.path, plan=plan)
    assert small.datasets(folder.sweep) == small.datasets(small.sweep(tmp_path / "whole", plan=plan).sweep)


def test_no_time_at_all(tmp_path):
    folder = small.sweep(tmp_path, deadline=time.monotonic() - 1)
    assert open_partial(folder).n == 0


def test_part_of_the_time_is_kept_for_the_statistics():
    assert working_seconds(1) == 3600 - 180
    assert working_seconds(100) == 360_000 - KEPT_MOST
    before = time.monotonic()
    assert Means.granted(hours=2).deadline - before == pytest.approx(6900, abs=1)


def test_a_request_is_patient_at_first():
    now = 0.0
    stop = StopRequest(deadline=10, clock=lambda: now)
    assert not stop.made
    assert not stop.impatient
    now = 11.0
    assert stop.made
    assert not stop.impatient
    now += GRACE + 0.1
    assert stop.impatient
    assert not stop.signalled
