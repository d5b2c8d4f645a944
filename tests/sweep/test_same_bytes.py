"""The same bytes, with the real lanes: any number of workers, any order of blocks, any size of block."""

import random

import numpy as np
import pytest
from sweep import small

from roa.kernel.lanes import compile_lanes
from roa.sweep import crew
from roa.sweep.block import blocks_of
from roa.sweep.executors.serial import run as serially

SAMPLES = 3000
BLOCK = 256  # eight starts for each of the 32 lanes


@pytest.fixture(scope="module")
def plan():
    return small.make(SAMPLES, block_size=BLOCK)


@pytest.fixture(scope="module")
def lanes(plan):
    return compile_lanes(plan.configuration.loop, plan.target, plan.integration)


@pytest.fixture(scope="module")
def serial(tmp_path_factory, plan, lanes):
    return small.datasets(small.sweep(tmp_path_factory.mktemp("serial"), plan=plan, lanes=lanes).sweep)


def test_workers(tmp_path, plan, lanes, serial):
    for jobs in (2, 3):
        folder = small.sweep(tmp_path / str(jobs), plan=plan, lanes=lanes, jobs=jobs)
        assert small.datasets(folder.sweep) == serial


def test_order_of_blocks(tmp_path, plan, lanes, serial, monkeypatch):
    orders = []

    def shuffled(task, blocks, jobs):
        orders.append(random.sample(blocks := list(blocks), len(blocks)))
        return serially(task, orders[-1], jobs)

    monkeypatch.setattr(crew.executors, "load", lambda name: shuffled)
    assert small.datasets(small.sweep(tmp_path, plan=plan, lanes=lanes).sweep) == serial
    assert len(orders[0]) == 12


def test_size_of_blocks_changes_no_sample(tmp_path, plan, lanes, serial):
    for size in (SAMPLES, 77 * 7):
        other = small.make(SAMPLES, block_size=size)
        assert small.datasets(small.sweep(tmp_path / str(size), plan=other, lanes=lanes).sweep) == serial


def test_eight_or_eight_thousand_starts_a_lane(plan, lanes):
    def run(size):
        pieces = [lanes.run(plan.design.points(block.first, block.count)) for block in blocks_of(256_000, size)]
        return {name: np.concatenate([getattr(piece, name) for piece in pieces]).tobytes() for name in small.DATASETS}

    assert run(BLOCK) == run(256_000)
