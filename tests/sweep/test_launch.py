"""Launching: what is done again and what is not, extension, failing blocks, requests to stop, a full disk."""

import os
import resource
import signal
import threading
import weakref
from dataclasses import replace

import pytest
from sweep import small

from roa.errors import Interrupted, MachineError, UserError
from roa.sweep import launch as launching
from roa.sweep.header import Header
from roa.sweep.means import Means
from roa.sweep.progress import Progress
from roa.sweep.run_folder import RunFolder
from roa.sweep.stop import stop_on_signals
from roa.sweep.store import open_samples


class Watched(small.ClosedForm):
    """Lanes that note which starts they ran; `before` is called with the number of the call."""

    def __init__(self, before=lambda call: None):
        self.before = before
        self.calls = []

    def run(self, initial):
        self.calls.append(len(initial))
        self.before(len(self.calls))
        return super().run(initial)


class TestExtension:
    def test_only_new_and_shorter_blocks_are_run(self, tmp_path):
        small.sweep(tmp_path, 130)
        watched = Watched()
        folder = small.sweep(tmp_path, 200, lanes=watched)
        assert watched.calls == [64, 8]  # the last block had two of its 64 starts
        assert small.datasets(folder.sweep) == small.datasets(small.sweep(tmp_path / "whole", 200).sweep)

    def test_from_whole_blocks(self, tmp_path):
        small.sweep(tmp_path, 128)
        watched = Watched()
        small.sweep(tmp_path, 200, lanes=watched)
        assert watched.calls == [64, 8]

    def test_within_the_last_block(self, tmp_path):
        small.sweep(tmp_path, 200)
        folder = small.sweep(tmp_path, 201)
        assert small.datasets(folder.sweep) == small.datasets(small.sweep(tmp_path / "whole", 201).sweep)

    def test_says_when_the_run_began(self, tmp_path):
        folder = small.sweep(tmp_path, 64)
        began = "2020-02-02T02:02:02+00:00"
        folder.plan.write_bytes(replace(Header.read(folder.plan), created=began).to_json())
        assert open_samples(small.sweep(tmp_path, 128).sweep).attributes["created"] == began

    def test_cannot_be_shortened(self, tmp_path):
        small.sweep(tmp_path, 200)
        with pytest.raises(UserError, match="can be extended, not shortened to 130"):
            small.sweep(tmp_path, 130)

    def test_grid_cannot_grow(self, tmp_path):
        def grid(samples):
            return small.make(samples, sweep='design = "grid"')

        folder = small.sweep(tmp_path, plan=grid(100))
        assert open_samples(folder.sweep).n == 100
        with pytest.raises(UserError, match="a grid of 100 starts cannot be extended to 144"):
            small.sweep(tmp_path, plan=grid(150))
        small.sweep(tmp_path, plan=grid(100))


class TestAgain:
    def test_finished_run_does_nothing(self, tmp_path, monkeypatch):
        folder = small.sweep(tmp_path)
        before = small.file_identity(folder.sweep)
        monkeypatch.setattr(launching, "compile_lanes", None)  # would fail if it were called
        launching.launch(small.make(), folder)
        assert small.file_identity(folder.sweep) == before

    def test_blocks_left_by_a_merge_that_was_killed_are_removed(self, tmp_path):
        folder = small.sweep(tmp_path)
        folder.blocks.mkdir()
        (folder.blocks / "block-000000001.h5").write_bytes(b"half")
        small.sweep(tmp_path)
        assert not folder.blocks.exists()

    def test_damaged_sweep_is_not_overwritten(self, tmp_path):
        folder = small.sweep(tmp_path)
        folder.sweep.write_bytes(folder.sweep.read_bytes()[:3000])
        with pytest.raises(MachineError, match=r"sweep\.h5: cannot be read"):
            small.sweep(tmp_path)
        assert folder.sweep.stat().st_size == 3000

    def test_sweep_of_another_run(self, tmp_path):
        folder = small.sweep(tmp_path)
        small.sweep(tmp_path / "other", plan=small.make(seed=2)).sweep.rename(folder.sweep)
        with pytest.raises(MachineError, match="belongs to another run"):
            small.sweep(tmp_path)

    def test_damaged_plan(self, tmp_path):
        folder = small.sweep(tmp_path)
        folder.plan.write_text("{")
        with pytest.raises(MachineError, match=r"plan\.json: is damaged"):
            small.sweep(tmp_path)

    def test_two_at_once(self, tmp_path):
        folder = RunFolder(tmp_path)
        with folder.locked(), pytest.raises(UserError, match="is writing to this run"):
            small.sweep(tmp_path)


class TestFailingBlock:
    @pytest.mark.parametrize("jobs", [1, 2])
    def test_is_tried_again_alone(self, tmp_path, jobs):
        def before(call):
            if call == 2:
                raise MemoryError("for a moment")

        folder = small.sweep(tmp_path, jobs=jobs, lanes=Watched(before))
        assert small.datasets(folder.sweep) == small.datasets(small.sweep(tmp_path / "whole").sweep)
        assert "failed and is tried again alone" in folder.log.read_text()

    def test_that_fails_again_is_named_and_nothing_is_lost(self, tmp_path):
        class Failing(Watched):
            def run(self, initial):
                if len(initial) == 8:
                    raise ValueError("no such luck")
                return super().run(initial)

        with pytest.raises(MachineError, match=r"block 3 \(starts 192 to 199\) failed twice .ValueError: no such luck"):
            small.sweep(tmp_path, lanes=Failing())
        watched = Watched()
        small.sweep(tmp_path, lanes=watched)
        assert watched.calls == [8]


class TestStop:
    @pytest.mark.parametrize(("number", "jobs"), [(signal.SIGINT, 1), (signal.SIGTERM, 2), (signal.SIGHUP, 1)])
    def test_ends_with_the_line_that_resumes(self, tmp_path, number, jobs):
        def before(call):
            if call == 3:
                os.kill(os.getpid(), number)

        earlier = signal.getsignal(number)
        first = Watched(before)
        with pytest.raises(Interrupted, match="carry on with `roa resume "):
            small.sweep(tmp_path, 640, jobs=jobs, lanes=first)
        assert signal.getsignal(number) == earlier
        assert 3 <= len(first.calls) <= 3 + jobs
        second = Watched()
        folder = small.sweep(tmp_path, 640, lanes=second)
        assert len(first.calls) + len(second.calls) == 10  # what was running was finished and kept
        assert small.datasets(folder.sweep) == small.datasets(small.sweep(tmp_path / "whole", 640).sweep)

    def test_during_the_merge(self, tmp_path, monkeypatch):
        columns = launching.Finished.columns

        def interrupted(finished, block):
            if block.index == 1:
                os.kill(os.getpid(), signal.SIGTERM)
            return columns(finished, block)

        with monkeypatch.context() as patch:
            patch.setattr(launching.Finished, "columns", interrupted)
            with pytest.raises(Interrupted):
                small.sweep(tmp_path)
        assert sorted(entry.name for entry in tmp_path.iterdir()) == [
            "blocks",
            "config.toml",
            "plan.json",
            "run.log",
            "status.json",
        ]
        watched = Watched()
        small.sweep(tmp_path, lanes=watched)
        assert watched.calls == []

    def test_second_signal_ends_at_once(self, spawner, tmp_path):
        child = spawner.Process(target=interrupt_twice, args=(tmp_path,))
        child.start()
        child.join()
        assert child.exitcode == -signal.SIGINT

    def test_ignored_signal_stays_ignored(self):
        before = signal.signal(signal.SIGHUP, signal.SIG_IGN)
        try:
            with stop_on_signals() as stop:
                os.kill(os.getpid(), signal.SIGHUP)
            assert not stop.made
        finally:
            signal.signal(signal.SIGHUP, before)

    def test_outside_the_main_thread(self, tmp_path):
        thread = threading.Thread(target=small.sweep, args=(tmp_path,))
        thread.start()
        thread.join()
        assert (tmp_path / "sweep.h5").exists()


def interrupt_twice(path):
    def before(call):
        for _ in range(2):
            os.kill(os.getpid(), signal.SIGINT)
            # A signal that Python handles is handled between two of its steps.
            sum(range(1000))

    small.sweep(path, lanes=Watched(before))


class TestFullDisk:
    @pytest.mark.parametrize("limit", [1_000, 9_000, 20_000])
    def test_is_one_sentence_and_resumable(self, spawner, tmp_path, limit):
        # A limit on the size of files stands for the disk: header, block and merged file hit it in turn.
        child = spawner.Process(target=sweep_with_little_room, args=(tmp_path, limit))
        child.start()
        child.join()
        sentence = (tmp_path / "sentence").read_text()
        assert "cannot be written" in sentence
        assert "\n" not in sentence
        assert not list(tmp_path.glob("**/.*.aside"))
        folder = small.sweep(tmp_path / "run", 600)
        assert open_samples(folder.sweep).n == 600

    def test_is_seen_beforehand(self, tmp_path, monkeypatch):
        class Usage:
            free = 10_000

        monkeypatch.setattr("shutil.disk_usage", lambda path: Usage)
        with pytest.raises(MachineError, match=r"needs 0\.00 GB of disk, 0\.00 GB are free.*roa resume"):
            small.sweep(tmp_path)


def sweep_with_little_room(path, limit):
    hard = resource.getrlimit(resource.RLIMIT_FSIZE)[1]
    resource.setrlimit(resource.RLIMIT_FSIZE, (limit, hard))
    try:
        small.sweep(path / "run", 600)
    except MachineError as error:
        resource.setrlimit(resource.RLIMIT_FSIZE, (hard, hard))
        (path / "sentence").write_text("\n".join(error.faults))


def test_means_that_cannot_be_granted():
    with pytest.raises(UserError) as refused:
        Means.granted(jobs=0, hours=0)
    assert [fault.split(":")[0] for fault in refused.value.faults] == ["--jobs 0", "--hours 0"]
    for hours in (-1.0, float("nan"), float("inf")):
        with pytest.raises(UserError, match="must be a number above 0"):
            Means.granted(hours=hours)


def test_what_the_system_refuses_is_one_sentence(tmp_path, monkeypatch):
    def refused(*_):
        raise PermissionError(13, "Permission denied", "blocks")

    monkeypatch.setattr(launching, "_remove_blocks", refused)
    with pytest.raises(MachineError, match=r"Permission denied.*roa resume"):
        small.sweep(tmp_path)


def test_counts_reach_the_progress(tmp_path, monkeypatch):
    class Counting(Progress):
        begun, counted, ended = (), 0, False

        def begin(self, done, total):
            self.begun = (done, total)

        def add(self, outcomes):
            self.counted += len(outcomes)

        def end(self):
            self.ended = True

    small.sweep(tmp_path, 130)
    progress = Counting()
    monkeypatch.setattr(launching, "compile_lanes", lambda *_: small.ClosedForm())
    launching.launch(small.make(200), RunFolder(tmp_path), None, progress)
    assert (progress.begun, progress.counted, progress.ended) == ((128, 200), 72, True)


def test_memory_holds_a_few_blocks(tmp_path, monkeypatch):
    # The merge asks for a block only when the one before is written.
    given, alive = [], []
    columns = launching.Finished.columns

    def tracked(finished, block):
        alive.append(sum(reference() is not None for reference in given))
        found = columns(finished, block)
        given.append(weakref.ref(found["time"]))
        return found

    monkeypatch.setattr(launching.Finished, "columns", tracked)
    small.sweep(tmp_path, 640)
    assert len(given) == 10
    assert max(alive) == 1
