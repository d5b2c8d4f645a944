"""Progress: what a line says, when it is written, and that nothing of it can stop a sweep."""

import io
import re

import numpy as np
import pytest

from roa.kernel.outcomes import Outcome
from roa.sweep.progress import Bar, Both, Lines, Log, Pace, Progress, on_standard_error


class Clock:
    def __init__(self):
        self.now = 100.0

    def __call__(self):
        return self.now


def outcomes(converged, escaped=0):
    return np.array([Outcome.CONVERGED] * converged + [Outcome.ESCAPED] * escaped, np.uint8)


def test_sentence_counts_new_work_alone():
    clock = Clock()
    pace = Pace(600_000, 1_000_000, clock)
    assert pace.sentence().startswith("600,000 of 1,000,000 starts (60.0%); peak memory ")
    clock.now += 10
    pace.add(outcomes(60_000, 40_000))
    assert pace.sentence().startswith(
        "700,000 of 1,000,000 starts (70.0%); 10,000 a second, 0:00:30 left; new: converged 60,000, escaped 40,000; "
    )


def test_a_line_a_minute():
    clock, stream = Clock(), io.StringIO()
    lines = Lines(stream, clock)
    lines.begin(0, 1000)
    for _ in range(10):
        clock.now += 25
        lines.add(outcomes(100))
    lines.end()
    written = stream.getvalue().splitlines()
    assert [re.search(r"([\d,]+) of", line)[1] for line in written] == ["300", "600", "900", "1,000"]
    assert all(re.match(r"\d{4}-\d\d-\d\d \d\d:\d\d:\d\d ", line) for line in written)


def test_log_appends_plain_lines(tmp_path):
    path = tmp_path / "run.log"
    for sentence in ("one", "two"):
        Log(path).say(sentence)
    assert [line[20:] for line in path.read_text().splitlines()] == ["one", "two"]


def test_lost_stream_does_not_stop_a_sweep(tmp_path):
    class Lost(io.StringIO):
        def write(self, text):
            raise OSError(5, "Input/output error")

    Lines(Lost()).say("nobody hears")
    Log(tmp_path / "nowhere" / "run.log").say("nor here")


@pytest.mark.parametrize("progress", [Progress(), Both(Progress(), Progress()), Lines(io.StringIO()), Bar()])
def test_every_kind_takes_every_call(progress, capsys):
    progress.add(outcomes(1))  # before the beginning
    progress.say("before")
    progress.begin(10, 20)
    progress.add(outcomes(3, 2))
    progress.say("within")
    progress.end()
    progress.end()
    progress.say("after")
    assert capsys.readouterr().out == ""


def test_bar_keeps_to_standard_error(capsys):
    bar = Bar()
    bar.begin(0, 10)
    bar.add(outcomes(5))
    bar.end()
    assert "5 of 10 starts (50.0%)" in capsys.readouterr().err


def test_both_tell_each(tmp_path):
    streams = io.StringIO(), io.StringIO()
    both = Both(*(Lines(stream) for stream in streams))
    both.begin(0, 5)
    both.add(outcomes(5))
    both.end()
    assert all("5 of 5 starts" in stream.getvalue() for stream in streams)


def test_choice(monkeypatch):
    assert type(on_standard_error(quiet=True)) is Progress
    assert type(on_standard_error(quiet=False)) is Lines
    monkeypatch.setattr("sys.stderr.isatty", lambda: True, raising=False)
    assert type(on_standard_error(quiet=False)) is Bar
