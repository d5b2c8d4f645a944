"""The cluster: the properties of every executor, and what only a scheduler elsewhere can do wrong."""

import socket
import subprocess
import sys
import time

import pytest

pytest.importorskip("distributed", reason="the extra `cluster` is not installed")

from conformance.test_executors import BLOCKS, ExecutorProperties, OwnProcesses, number, sleep_for_ever

from roa.errors import UserError
from roa.sweep import executors
from roa.sweep.executors import SchedulerLost, serial


@pytest.fixture(scope="module")
def scheduler():
    """A scheduler with two workers, each a process of its own, as on a real cluster."""
    with socket.socket() as free:
        free.bind(("127.0.0.1", 0))
        port = free.getsockname()[1]
    address = f"tcp://127.0.0.1:{port}"
    quiet = {"stdout": subprocess.DEVNULL, "stderr": subprocess.DEVNULL}
    dask = [sys.executable, "-m", "dask"]
    place = ["--host", "127.0.0.1", "--port", str(port), "--no-dashboard"]
    started = [subprocess.Popen([*dask, "scheduler", *place], **quiet)]
    for _ in range(1200):
        with socket.socket() as asking:
            if asking.connect_ex(("127.0.0.1", port)) == 0:
                break
        time.sleep(0.1)
    worker = [*dask, "worker", address, "--nthreads", "1", "--no-dashboard", "--no-nanny"]
    started += [subprocess.Popen(worker, **quiet) for _ in range(2)]
    yield address, started[0]
    for process in reversed(started):
        process.kill()
    for process in started:
        process.wait()


class TestCluster(ExecutorProperties):
    name = "cluster"
    jobs = 2

    @pytest.fixture(autouse=True)
    def _at(self, scheduler):
        self.address = scheduler[0]

    def run(self, task, blocks, **keywords):
        return executors.load("cluster")(task, blocks, self.jobs, address=self.address, **keywords)

    def test_giving_up_ends_at_once(self):
        finished = []
        begun = time.monotonic()
        for block, _ in self.run(sleep_for_ever, BLOCKS[:2], given_up=lambda: len(finished) > 0):
            finished.append(block)
        assert len(finished) <= 2
        assert time.monotonic() - begun < 60


@pytest.mark.slow
class TestLocalCluster(OwnProcesses):
    name = "cluster"
    jobs = 2

    def run(self, task, blocks, **keywords):
        return executors.load("cluster")(task, blocks, self.jobs, **keywords)

    def test_same_results_as_serial(self):
        assert dict(self.run(number, BLOCKS)) == dict(serial.run(number, BLOCKS))


def test_address_that_does_not_answer_is_named_in_time():
    begun = time.monotonic()
    for address in ("tcp://127.0.0.1:9", "nonsense://x"):
        with pytest.raises(UserError, match=f"--cluster {address}: no scheduler answers there"):
            list(executors.load("cluster")(number, BLOCKS, 2, address=address))
    assert time.monotonic() - begun < 30


def test_scheduler_that_dies_ends_the_work(scheduler):
    # The last test of this file: the scheduler is gone afterwards.
    address, process = scheduler
    results = executors.load("cluster")(sleep_for_ever, BLOCKS, 2, address=address)
    next(results)
    process.kill()
    with pytest.raises(SchedulerLost, match=f"the scheduler at {address} is lost"):
        list(results)
