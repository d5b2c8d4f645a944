"""What every executor must do; each executor's class inherits the properties."""

import os
import signal
import threading
import time
from functools import partial
from pathlib import Path

import pytest

from roa.errors import UserError
from roa.sweep import executors
from roa.sweep.block import Block
from roa.sweep.executors import WorkersLost, serial

BLOCKS = [Block(index, 10 * index, 10) for index in range(40)]
SEVENTH = BLOCKS[7]


def number(block):
    """A task whose result shows which block it was."""
    return block.index**2


def fail_at_seven(block):
    if block == SEVENTH:
        raise ValueError("seven")
    return number(block)


def note(folder, block):
    """Leave a file for each block that was begun: the workers may be other processes."""
    (Path(folder) / f"{block.index}-{os.getpid()}-{time.monotonic_ns()}").touch()
    return number(block)


def die_once_at_seven(folder, block):
    """End the worker at block 7 when it comes there first."""
    if block == SEVENTH:
        try:
            (Path(folder) / "died").touch(exist_ok=False)
        except FileExistsError:
            return number(block)
        os.kill(os.getpid(), signal.SIGKILL)
    return number(block)


def die_at_seven(block):
    if block == SEVENTH:
        os.kill(os.getpid(), signal.SIGKILL)
    return number(block)


def sleep_for_ever(block):
    time.sleep(3600 if block.index > 1 else 0)
    return number(block)


class ExecutorProperties:
    name = ""
    jobs = 1

    def run(self, task, blocks, **keywords):
        return executors.load(self.name)(task, blocks, self.jobs, **keywords)

    def test_is_found_by_its_name(self):
        assert self.name in executors.available()

    def test_same_results_as_serial(self):
        finished = dict(self.run(number, BLOCKS))
        assert finished == dict(serial.run(number, BLOCKS))
        assert len(finished) == 40

    def test_no_blocks(self):
        assert list(self.run(number, [])) == []

    def test_failing_block_does_not_end_the_others(self):
        finished = dict(self.run(fail_at_seven, BLOCKS))
        assert isinstance(finished[SEVENTH], ValueError)
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

    def test_slow_caller_is_not_overrun(self, tmp_path):
        taken = 0
        for _ in self.run(partial(note, str(tmp_path)), BLOCKS):
            taken += 1
            time.sleep(0.002)
            assert len(list(tmp_path.iterdir())) <= taken + 3 * self.jobs
        assert taken == 40

    def test_closing_early_leaves_nobody_behind(self):
        before = threading.active_count(), children()
        results = self.run(number, BLOCKS)
        next(results)
        results.close()
        for _ in range(1000):
            if (threading.active_count(), children()) <= before:
                break
            time.sleep(0.01)
        assert threading.active_count() <= before[0]
        assert children() <= before[1]


class OwnProcesses:
    """What an executor must do besides, whose workers can die without this process."""

    def test_killed_worker_costs_nothing(self, tmp_path):
        finished = dict(self.run(partial(die_once_at_seven, str(tmp_path)), BLOCKS))
        assert (tmp_path / "died").exists()
        assert finished == dict(serial.run(number, BLOCKS))

    def test_block_that_kills_two_workers_is_named_and_the_others_run(self):
        finished = dict(self.run(die_at_seven, BLOCKS))
        assert isinstance(finished.pop(SEVENTH), WorkersLost)
        expected = dict(serial.run(number, BLOCKS))
        del expected[SEVENTH]
        assert finished == expected

    def test_giving_up_ends_what_runs(self):
        begun = time.monotonic()
        given_up = threading.Event()
        finished = []
        for block, _ in self.run(sleep_for_ever, BLOCKS, given_up=given_up.is_set):
            finished.append(block)
            given_up.set()
        assert len(finished) <= 2
        assert time.monotonic() - begun < 60


def children():
    """Processes that this one started and that live."""
    found = Path(f"/proc/self/task/{os.getpid()}/children")
    return len(found.read_text().split()) if found.exists() else 0


class TestSerial(ExecutorProperties):
    name = "serial"


class TestThreads(ExecutorProperties):
    name = "threads"
    jobs = 2


class TestManyThreads(ExecutorProperties):
    name = "threads"
    jobs = 7


class TestProcesses(ExecutorProperties, OwnProcesses):
    name = "processes"
    jobs = 2


def test_blocks_run_at_the_same_time_on_threads():
    both = threading.Barrier(2, timeout=20)
    finished = dict(executors.load("threads")(lambda block: both.wait(), BLOCKS[:2], 2))
    assert sorted(finished.values()) == [0, 1]


def test_unknown_executor():
    with pytest.raises(UserError, match=r"--executor thread: no such executor; available: .*threads"):
        executors.load("thread")


def test_processors_are_counted():
    from roa.sweep.executors.threads import cpu_count

    assert cpu_count() >= 1
