"""Sweeps in rounds: the same samples whatever stopped them, and whoever ran them."""

import os
import signal
from itertools import count

import numpy as np
import pytest
from sweep import small

from roa.errors import Interrupted, UserError
from roa.sweep import launch as launching
from roa.sweep.finished import open_partial
from roa.sweep.run_folder import RunFolder
from roa.sweep.store import open_samples

ASKED = 5000


def plan(design="rays", samples=ASKED, **keywords):
    return small.make(samples, sweep=f'horizon = 10.0\ndesign = "{design}"', **keywords)


class Counting(small.ClosedForm):
    """Lanes that count their calls; the call of number `stop_at` asks to stop."""

    def __init__(self, stop_at=None):
        self.calls, self.stop_at = count(), stop_at
        self.starts = 0

    def run(self, initial):
        if next(self.calls) == self.stop_at:
            os.kill(os.getpid(), signal.SIGINT)
        self.starts += len(initial)
        return super().run(initial)


@pytest.fixture(scope="module", params=["rays", "boundary"])
def design(request):
    return request.param


@pytest.fixture(scope="module")
def whole(design, tmp_path_factory):
    folder = small.sweep(tmp_path_factory.mktemp("whole"), plan=plan(design))
    return small.datasets(folder.sweep)


def test_two_jobs_give_the_same(design, whole, tmp_path):
    assert small.datasets(small.sweep(tmp_path, plan=plan(design), jobs=2).sweep) == whole


@pytest.mark.parametrize("stop_at", [0, 3, 30])
def test_interrupted_and_resumed_gives_the_same(design, whole, tmp_path, stop_at):
    first, second = Counting(stop_at), Counting()
    with pytest.raises(Interrupted):
        small.sweep(tmp_path, plan=plan(design), lanes=first)
    folder = small.sweep(tmp_path, plan=plan(design), lanes=second)
    assert small.datasets(folder.sweep) == whole
    assert first.starts + second.starts == open_samples(folder.sweep).n


def test_blocks_that_are_lost_or_damaged_are_run_again(design, whole, tmp_path):
    with pytest.raises(Interrupted):
        small.sweep(tmp_path, plan=plan(design), lanes=Counting(12))
    (tmp_path / "blocks" / "block-000000002.h5").unlink()
    (tmp_path / "blocks" / "block-000000005.h5").write_bytes(b"half")
    assert small.datasets(small.sweep(tmp_path, plan=plan(design)).sweep) == whole


def test_finished_run_does_nothing(design, tmp_path, monkeypatch):
    folder = small.sweep(tmp_path, plan=plan(design))
    before = small.file_identity(folder.sweep)
    monkeypatch.setattr(launching, "compile_lanes", None)  # would fail if it were called
    launching.launch(plan(design), folder)
    assert small.file_identity(folder.sweep) == before
    assert not folder.blocks.exists()


def test_prefix_of_a_sweep_under_way(design, whole, tmp_path):
    with pytest.raises(Interrupted):
        small.sweep(tmp_path, plan=plan(design), lanes=Counting(7))
    (tmp_path / "blocks" / "block-000000006.h5").unlink()
    partial = open_partial(RunFolder(tmp_path))
    assert partial.partial
    initial = np.frombuffer(whole["samples/initial"]).reshape(-1, 2)
    assert 0 < partial.n < len(initial)
    assert np.array_equal(partial.read(0, partial.n).initial, initial[: partial.n])


def test_file_says_how_many_were_asked_for(design, tmp_path):
    samples = open_samples(small.sweep(tmp_path, plan=plan(design)).sweep)
    assert samples.attributes["asked"] == ASKED
    assert not samples.partial
    assert samples.n <= ASKED


def test_rays_cannot_grow(tmp_path):
    small.sweep(tmp_path, plan=plan("rays"))
    with pytest.raises(UserError, match="a rays of 5,000 starts cannot be extended"):
        small.sweep(tmp_path, plan=plan("rays", samples=6000))


def test_boundary_grows(tmp_path):
    small.sweep(tmp_path, plan=plan("boundary", samples=3333))
    counting = Counting()
    folder = small.sweep(tmp_path, plan=plan("boundary"), lanes=counting)
    assert counting.starts < ASKED - 3333 + 2 * small.SIZE  # the block that was cut short is run again
    assert small.datasets(folder.sweep) == small.datasets(small.sweep(tmp_path / "whole", plan=plan("boundary")).sweep)
