"""A disk that fills up, turns read-only or vanishes: a small file system of our own, seen by one child process alone.

What is stored stays whole, there is one sentence, and the same sweep goes on when there is room again.
"""

import ctypes
import os
import subprocess
import sys

import pytest
from sweep import small

from roa.errors import MachineError
from roa.sweep.finished import Finished, look_through
from roa.sweep.header import Header
from roa.sweep.run_folder import RunFolder, write_atomically

# Of Linux's <sched.h>; Python itself knows them from 3.12 on.
CLONE_NEWNS, CLONE_NEWUSER = 0x00020000, 0x10000000
SAMPLES = 600  # ten blocks; 62 bytes a start, and a few thousand of HDF5 a block


def mount(*arguments):
    subprocess.run(["mount", *arguments], check=True, capture_output=True)


def enter(path):
    """Give this process mounts of its own, and an empty disk of 400 kB at `path`."""
    user, group = os.getuid(), os.getgid()
    if ctypes.CDLL(None).unshare(CLONE_NEWNS | (0 if user == 0 else CLONE_NEWUSER)):
        raise OSError("a mount namespace of our own is not allowed")
    if user:
        for name, content in (("setgroups", "deny"), ("uid_map", f"0 {user} 1"), ("gid_map", f"0 {group} 1")):
            with open(f"/proc/self/{name}", "w", encoding="ascii") as file:
                file.write(content)
    mount("--make-rprivate", "/")
    mount("-t", "tmpfs", "-o", "size=400k", "roa", str(path))


def fill(path):
    """Use up all that is free."""
    with open(path / "filler", "wb", buffering=0) as file:
        try:
            while file.write(b"\0" * 4096):
                pass
        except OSError:
            return


class Until(small.ClosedForm):
    """Lanes of which one call is disturbed."""

    def __init__(self, call, disturb):
        self.left, self.disturb = call, disturb

    def run(self, initial):
        self.left -= 1
        if self.left == 0:
            self.disturb()
        return super().run(initial)


def refused(work):
    try:
        work()
    except MachineError as error:
        return "\n".join(error.faults)
    return "was not refused"


def finish(disk, report, **said):
    """Say what is stored, then carry on; `report` gets words and bytes, since the disk goes with this process."""
    folder, faults = RunFolder(disk / "run"), []
    finished = look_through(folder, Header.read(folder.plan), faults.append)
    small.sweep(folder.path, SAMPLES)
    report.send(
        said | {
            "faults": faults,
            "blocks": len(finished.separate),
            "merged": finished.merged_count,
            "asides": [str(aside) for aside in disk.glob("**/.*.aside")],
            "datasets": small.datasets(folder.sweep),
        }
    )  # fmt: skip


def fills_while_blocks_are_written(disk, report):
    enter(disk)
    lanes = Until(4, lambda: fill(disk))
    sentence = refused(lambda: small.sweep(disk / "run", SAMPLES, lanes=lanes))
    again = refused(lambda: small.sweep(disk / "run", SAMPLES))
    (disk / "filler").unlink()
    finish(disk, report, sentence=sentence, again=again)


def fills_while_merging(disk, report):
    enter(disk)
    columns = Finished.columns

    def disturbed(finished, block):
        if block.index == 3:
            fill(disk)
        return columns(finished, block)

    Finished.columns = disturbed
    sentence = refused(lambda: small.sweep(disk / "run", SAMPLES))
    Finished.columns = columns
    (disk / "filler").unlink()
    finish(disk, report, sentence=sentence)


def fills_before_the_verdict(disk, report):
    enter(disk)
    folder = small.sweep(disk / "run", SAMPLES)
    write_atomically(folder.verdict, b"old")
    fill(disk)
    sentence = refused(lambda: write_atomically(folder.verdict, b"new" * 10_000))
    old = folder.verdict.read_bytes()
    (disk / "filler").unlink()
    finish(disk, report, sentence=sentence, old=old)


def turns_read_only(disk, report):
    enter(disk)
    # Linux refuses to turn a mount read-only that has files open for writing, as a failing disk does not ask: so a
    # second mount of the same disk, read-only, is laid over the first.
    kept = disk.with_name("kept")
    kept.mkdir()

    def turn():
        mount("--bind", str(disk), str(kept))
        mount("-o", "remount,bind,ro", str(kept))
        mount("--move", str(kept), str(disk))

    lanes = Until(4, turn)
    sentence = refused(lambda: small.sweep(disk / "run", SAMPLES, lanes=lanes))
    again = refused(lambda: small.sweep(disk / "run", SAMPLES))
    subprocess.run(["umount", str(disk)], check=True)
    finish(disk, report, sentence=sentence, again=again)


def vanishes(disk, report):
    enter(disk)
    kept = disk.with_name("kept")
    kept.mkdir()
    mount("--bind", str(disk), str(kept))
    lanes = Until(4, lambda: subprocess.run(["umount", "--lazy", str(disk)], check=True))
    sentence = refused(lambda: small.sweep(disk / "run", SAMPLES, lanes=lanes))
    left = [str(entry) for entry in disk.iterdir()]
    mount("--bind", str(kept), str(disk))
    finish(disk, report, sentence=sentence, left=left)


def allowed(disk):
    try:
        enter(disk)
    except (OSError, subprocess.CalledProcessError):
        os._exit(1)


@pytest.fixture
def on_a_small_disk(spawner, tmp_path):
    if sys.platform != "linux":
        pytest.skip("a small disk of our own needs Linux")
    disk = tmp_path / "disk"
    disk.mkdir()
    probe = spawner.Process(target=allowed, args=(disk,))
    probe.start()
    probe.join()
    if probe.exitcode:
        pytest.skip("a mount namespace of our own is not allowed here")

    def work(scenario):
        found, report = spawner.Pipe(duplex=False)
        child = spawner.Process(target=scenario, args=(disk, report))
        child.start()
        report.close()
        said = found.recv()
        child.join()
        return said

    return work


@pytest.fixture(scope="module")
def undisturbed(tmp_path_factory):
    return small.datasets(small.sweep(tmp_path_factory.mktemp("undisturbed") / "run", SAMPLES).sweep)


@pytest.mark.parametrize(
    ("scenario", "words", "blocks", "merged"),
    [
        (fills_while_blocks_are_written, "No space left on device", 3, 0),
        (fills_while_merging, "sweep.h5: cannot be", 10, 0),
        (fills_before_the_verdict, "verdict.json: cannot be written (No space left on device)", 0, SAMPLES),
        (turns_read_only, "Read-only file system", 3, 0),
        (vanishes, "has vanished", 3, 0),
    ],
)
def test_nothing_is_lost(on_a_small_disk, undisturbed, scenario, words, blocks, merged):
    found = on_a_small_disk(scenario)
    assert words in found["sentence"]
    assert "\n" not in found["sentence"]
    assert (found["faults"], found["blocks"], found["merged"], found["asides"]) == ([], blocks, merged, [])
    assert found["datasets"] == undisturbed
    # Begun again while nothing has changed: refused once more, in one sentence.
    assert "\n" not in found.get("again", "")
    assert found.get("again") != "was not refused"
    assert found.get("left", []) == []
    assert found.get("old", b"old") == b"old"
