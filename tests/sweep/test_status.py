"""How far a sweep is: what is said in each state, and that asking changes nothing."""

import json
import os
import signal
import time

import numpy as np
import pytest
from sweep import small

from roa.errors import Interrupted, MachineError
from roa.kernel.outcomes import Outcome
from roa.report.status_text import status_document, status_text
from roa.sweep.run_folder import RunFolder
from roa.sweep.status import read_status
from roa.sweep.tally import Tally


def text_of(folder):
    return status_text(read_status(folder), 0.99, str(folder.path), folder.resume_command)


def slowly(path):
    class Slow(small.ClosedForm):
        def run(self, initial):
            time.sleep(0.2)
            return super().run(initial)

    small.sweep(path, 6400, lanes=Slow())


def test_done(tmp_path, plan):
    folder = small.sweep(tmp_path)
    status = read_status(folder)
    assert (status.state, status.done, status.samples, status.owner, status.left) == ("done", 200, 200, None, None)
    inside = int((np.linalg.norm(plan.design.points(0, 200), axis=1) < 1).sum())
    document = json.loads(json.dumps(status_document(status, 0.99)))
    assert document["outcomes"]["converged"]["count"] == inside
    assert document["outcomes"]["escaped"]["count"] == 200 - inside
    low, high = document["outcomes"]["converged"]["interval"]
    assert low < np.pi / 2.4**2 < high or low < inside / 200 < high
    assert "done" in text_of(folder)


def test_running_then_dead(tmp_path, spawner):
    child = spawner.Process(target=slowly, args=(tmp_path,))
    child.start()
    folder = RunFolder(tmp_path)
    for _ in range(600):
        if len(list(folder.blocks.glob("block-*"))) >= 2:
            break
        time.sleep(0.05)
    before = sorted(path.name for path in tmp_path.iterdir())
    status = read_status(RunFolder.existing(tmp_path))
    assert status.state == "running"
    assert status.owner["pid"] == child.pid
    assert 128 <= status.done < 6400
    assert status.memory["peak"] > 1e7
    assert sorted(path.name for path in tmp_path.iterdir()) == before
    assert f"running (process {child.pid} on " in text_of(folder)
    child.kill()
    child.join()
    assert read_status(folder).state == "dead"
    text = text_of(folder)
    assert "its process vanished" in text
    assert folder.resume_command in text
    small.sweep(tmp_path, 6400)
    assert read_status(folder).state == "done"


def test_stopped_by_time_and_by_a_signal(tmp_path):
    folder = small.sweep(tmp_path, deadline=time.monotonic() - 1)
    status = read_status(folder)
    assert (status.state, status.done) == ("stopped", 0)
    assert status_document(status, 0.99)["outcomes"]["converged"]["count"] == 0

    class Interrupting(small.ClosedForm):
        def run(self, initial):
            os.kill(os.getpid(), signal.SIGTERM)
            return super().run(initial)

    with pytest.raises(Interrupted):
        small.sweep(tmp_path, lanes=Interrupting())
    status = read_status(folder)
    assert (status.state, status.done) == ("stopped", 64)
    assert folder.resume_command in status.last
    assert status.last in text_of(folder)


def test_failed(tmp_path):
    class Failing(small.ClosedForm):
        def run(self, initial):
            raise ValueError("no such luck")

    with pytest.raises(MachineError):
        small.sweep(tmp_path, lanes=Failing())
    assert read_status(RunFolder(tmp_path)).state == "failed"


def test_extension_counts_what_is_merged_already(tmp_path):
    folder = small.sweep(tmp_path, 130)
    small.sweep(tmp_path, 200, deadline=time.monotonic() - 1)
    status = read_status(folder)
    assert (status.done, status.samples, status.state) == (130, 200, "stopped")
    assert sum(sum(row) for row in status.counts.values()) == 130


def test_without_what_the_writer_said(tmp_path):
    folder = small.sweep(tmp_path)
    folder.status.write_text("{")
    assert read_status(folder).state == "done"
    folder.status.unlink()
    assert "done" in text_of(folder)


def test_tally_counts_by_replicate():
    tally = Tally(4)
    tally.add(6, np.array([Outcome.CONVERGED, Outcome.ESCAPED, Outcome.CONVERGED, Outcome.CONVERGED], np.uint8))
    assert tally.by_word()["converged"] == [1, 1, 1, 0]
    assert tally.by_word()["escaped"] == [0, 0, 0, 1]
    assert tally.total == 4
    assert "absent" not in tally.by_word()
