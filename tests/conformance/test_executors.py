"""What every executor must do; each executor's class inherits the properties."""

import threading
import time

import pytest

from roa.sweep import executors
from roa.sweep.block import Block
from roa.sweep.executors import serial

BLOCKS = [Block(index, 10 * index, 10) for index in range(40)]


def number(block):
    """A task whose result shows which block it was."""
    return block.index**2


class ExecutorProperties:
    name = ""
    jobs = 1

    def run(self, task, blocks):
        return executors.load(self.name)(task, blocks, self.jobs)

    def test_is_found_by_its_name(self):
        assert self.name in executors.available()

    def test_same_results_as_serial(self):
        finished = dict(self.run(number, BLOCKS))
        assert finished == dict(serial.run(number, BLOCKS))
        assert len(finished) == 40

    def test_no_blocks(self):
        assert list(self.run(number, [])) == []

    def test_failing_block_does_not_end_the_others(self):
        def task(block):
            if block.index == 7:
                raise ValueError("seven")
            return number(block)

        finished = dict(self.run(task, BLOCKS))
        assert isinstance(finished[BLOCKS[7]], ValueError)
        assert sum(isinstance(result, Exception) for result in finished.values()) == 1
        assert len(finished) == 40

    def test_end_of_the_blocks_ends_the_work(self):
        stop = threading.Event()

        def until_stopped():
            for block in BLOCKS:
                if stop.is_set():
                    return
                yield block

        finished = []
        for block, _ in self.run(number, until_stopped()):
            finished.append(block)
            stop.set()
        assert 1 <= len(finished) <= 1 + 4 * self.jobs

    def test_slow_caller_is_not_overrun(self):
        begun = []

        def task(block):
            begun.append(block)
            return number(block)

        taken = 0
        for _ in self.run(task, BLOCKS):
            taken += 1
            time.sleep(0.002)
            assert len(begun) <= taken + 3 * self.jobs
        assert taken == 40

    def test_closing_early_leaves_nobody_behind(self):
        before = threading.active_count()
        results = self.run(number, BLOCKS)
        next(results)
        results.close()
        for _ in range(200):
            if threading.active_count() <= before:
                break
            time.sleep(0.01)
        assert threading.active_count() <= before


class TestSerial(ExecutorProperties):
    name = "serial"


class TestThreads(ExecutorProperties):
    name = "threads"
    jobs = 2


class TestManyThreads(ExecutorProperties):
    name = "threads"
    jobs = 7


def test_blocks_run_at_the_same_time_on_threads():
    both = threading.Barrier(2, timeout=20)
    finished = dict(executors.load("threads")(lambda block: both.wait(), BLOCKS[:2], 2))
    assert sorted(finished.values()) == [0, 1]


def test_unknown_executor():
    with pytest.raises(ModuleNotFoundError):
        executors.load("thread")


def test_processors_are_counted():
    from roa.sweep.executors.threads import cpu_count

    assert cpu_count() >= 1
