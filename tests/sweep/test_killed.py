"""SIGKILL at any moment of sweep, merge and extension leaves a folder that resumes to the same bytes."""

import os
import random
import signal
import time

import pytest
from sweep import small

FIRST, LATER = 130, 200  # three blocks, the last of two starts; then four, the last of eight

# Every call that changes what is on the disk, or promises that it is there.
STEPS = ["open", "fsync", "replace", "unlink", "rmdir", "mkdir"]
STRIDE = 17


def sweep_and_extend(path):
    small.sweep(path, FIRST)
    small.sweep(path, LATER)


def sweep_and_die(path, at_step):
    """Sweep and extend in a process that kills itself just before its step number `at_step`."""
    count = 0

    def deadly(step):
        def counted(*arguments, **keywords):
            nonlocal count
            count += 1
            if count == at_step:
                os.kill(os.getpid(), signal.SIGKILL)
            return step(*arguments, **keywords)

        return counted

    for name in STEPS:
        setattr(os, name, deadly(getattr(os, name)))
    sweep_and_extend(path)


def announce_and_sweep(path, begun):
    begun.set()
    sweep_and_extend(path)


@pytest.fixture(scope="module")
def undisturbed(tmp_path_factory):
    return small.datasets(small.sweep(tmp_path_factory.mktemp("undisturbed") / "run", LATER).sweep)


def require_whole(path, undisturbed):
    folder = small.sweep(path, LATER)
    assert small.datasets(folder.sweep) == undisturbed
    assert sorted(entry.name for entry in path.iterdir()) == [
        "config.toml",
        "plan.json",
        "run.log",
        "status.json",
        "sweep.h5",
    ]
    return folder


def test_extension_equals_one_sweep(tmp_path, undisturbed):
    sweep_and_extend(tmp_path)
    require_whole(tmp_path, undisturbed)


def test_killed_before_a_step(tmp_path, undisturbed, spawner):
    # Every STRIDE-th step of about a hundred; where the first one lies differs from run to run.
    at_step = random.randint(1, STRIDE)
    kills = 0
    while True:
        path = tmp_path / f"step-{at_step}"
        child = spawner.Process(target=sweep_and_die, args=(path, at_step))
        child.start()
        child.join()
        if child.exitcode == 0:
            break
        assert child.exitcode == -signal.SIGKILL
        require_whole(path, undisturbed)
        kills += 1
        at_step += STRIDE
    assert kills >= 5


def test_killed_again_and_again_at_random_moments(tmp_path, undisturbed, spawner):
    path = tmp_path / "run"
    for _ in range(6):
        begun = spawner.Event()
        child = spawner.Process(target=announce_and_sweep, args=(path, begun))
        child.start()
        assert begun.wait(60)
        time.sleep(random.uniform(0, 0.5))
        child.kill()
        child.join()
    require_whole(path, undisturbed)
