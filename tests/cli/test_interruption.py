"""Signals outside a sweep, and the time that is granted to one: how a command ends, as a process of its own."""

import itertools
import json
import signal
import subprocess
import sys
import time

import pytest

import gallery
from roa.cli import main
from roa.sweep.stop import StopRequest

PROGRAM = """
import sys, time, numpy
import roa.verbs
def long(*arguments, **keywords):
    print("at it", flush=True)
    {body}
roa.verbs.check = long
from roa.cli import main
sys.exit(main(["check", "nothing.toml"]))
"""
IN_PYTHON = "time.sleep(60)"
# One call that lasts for minutes and lets no line of Python run on this thread, as a proof does.
COMPILED = "import hashlib, roa.interruption as i; i.PATIENCE = {}; hashlib.pbkdf2_hmac('md5', b'', b'', 10**9)"


def interrupted(body, *numbers):
    child = subprocess.Popen(
        [sys.executable, "-c", PROGRAM.format(body=body)], stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True
    )
    assert child.stdout.readline() == "at it\n"
    time.sleep(0.2)
    begun = time.monotonic()
    for number in numbers:
        child.send_signal(number)
        time.sleep(0.1)
    _, error = child.communicate(timeout=50)
    return child.returncode, error, time.monotonic() - begun


@pytest.mark.parametrize("number", [signal.SIGINT, signal.SIGTERM, signal.SIGHUP])
def test_ends_with_130_and_one_sentence(number):
    code, error, _ = interrupted(IN_PYTHON, number)
    assert (code, error) == (130, "roa: interrupted\n")


def test_compiled_code_that_takes_no_notice_is_ended_after_a_while():
    code, error, seconds = interrupted(COMPILED.format(0.5), signal.SIGTERM)
    assert (code, error) == (130, "roa: interrupted\n")
    assert seconds < 10


def test_second_signal_ends_at_once():
    code, error, seconds = interrupted(COMPILED.format(1000), signal.SIGINT, signal.SIGINT)
    assert (code, error) == (130, "roa: interrupted\n")
    assert seconds < 10


def test_time_that_runs_out(tmp_path, capsys, monkeypatch):
    config = tmp_path / "loop.toml"
    config.write_text(gallery.van_der_pol().text)
    out = str(tmp_path / "run")
    asked = itertools.count()
    monkeypatch.setattr(StopRequest, "made", property(lambda _: next(asked) > 8))  # in place of a clock
    arguments = ["run", str(config), "--out", out, "--samples", "1000000", "--hours", "100", "--jobs", "1"]
    assert main([*arguments, "--quiet", "--json"]) == 130
    printed = capsys.readouterr()
    assert f"`roa resume {out}`" in printed.err
    basin = json.loads(printed.out)["basin"]
    assert basin["partial"]
    assert 0 < basin["samples"] < basin["samples_wanted"] == 1_000_000
    assert sum(basin["counts"].values()) == basin["samples"]
    # the basin's area, computed independently, over that of the domain
    low, high = basin["interval"]
    assert low < 13.722219668 / (6 * 7) < high
    assert "artial sweep" in (tmp_path / "run" / "report.html").read_text(encoding="utf-8")
    assert "granted time is over" in (tmp_path / "run" / "run.log").read_text(encoding="utf-8")
    assert main(["report", out]) == 0


@pytest.mark.parametrize("hours", ["0", "-1", "nan", "inf", "soon"])
def test_hours_that_make_no_sense(hours, capsys):
    with pytest.raises(SystemExit) as ended:
        main(["run", "loop.toml", "--hours", hours])
    assert ended.value.code == 2
    assert "must be a number above 0" in capsys.readouterr().err
