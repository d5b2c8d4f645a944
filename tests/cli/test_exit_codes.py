"""Exit codes and what is printed where, command by command."""

import json
import os
import shutil
import signal
import subprocess
import sys
import time
from dataclasses import replace
from pathlib import Path

import pytest

import gallery
import roa.basin.replay
from roa.cli import main
from roa.kernel.outcomes import Outcome


@pytest.fixture
def write(tmp_path):
    def to_file(configuration, name="loop.toml"):
        path = tmp_path / name
        path.write_text(configuration if isinstance(configuration, str) else configuration.text, encoding="utf-8")
        return str(path)

    return to_file


def small_run(write, tmp_path, **keywords):
    config = write(gallery.van_der_pol(**keywords))
    return config, str(tmp_path / "run")


def test_run_without_a_claim_is_done(write, tmp_path, capsys):
    config, out = small_run(write, tmp_path)
    assert main(["run", config, "--out", out, "--samples", "4096", "--jobs", "1", "--quick", "--quiet"]) == 0
    printed = capsys.readouterr()
    assert printed.err == ""
    assert printed.out.startswith("The simulated basin fills 32.")
    # A path is one word, however long.
    assert max(len(line) for line in printed.out.splitlines() if str(tmp_path) not in line) <= 80
    files = {path.name for path in (tmp_path / "run").iterdir()}
    assert files >= {"config.toml", "sweep.h5", "verdict.json", "report.html", "figures", "run.log"}
    assert "blocks" not in files
    figures = {path.name for path in (tmp_path / "run" / "figures").iterdir()}
    assert figures >= {"overlay.png", "overlay.svg", "share_by_level.png", "share_by_level.svg"}
    # The same folder again is refused, with the way on; resuming a finished run concludes it again.
    assert main(["run", config, "--out", out, "--quiet"]) == 2
    assert "roa resume" in capsys.readouterr().err
    verdict = (tmp_path / "run" / "verdict.json").read_text(encoding="utf-8")
    assert main(["resume", out, "--quiet", "--json"]) == 0
    printed = capsys.readouterr()
    assert printed.err == (
        "roa: the sweep was done already and is left as it is; concluded again from what is stored\n"
    )
    again = json.loads(printed.out)
    for key in ("basin", "bounds", "comparison", "levels"):
        assert again[key] == json.loads(verdict)[key]
    assert main(["resume", out, "--samples", "8192", "--quiet", "--json"]) == 0
    printed = capsys.readouterr()
    assert (json.loads(printed.out)["basin"]["samples"], printed.err) == (8192, "")
    assert main(["overlay", out, "--quiet"]) == 0
    assert main(["report", out]) == 0
    assert main(["replay", out, "17", "--quiet"]) == 0
    assert "agree" in capsys.readouterr().out
    assert main(["replay", out, "8192", "--quiet"]) == 2
    assert "0 to 8191" in capsys.readouterr().err


def test_sweep_writes_data_and_no_report(write, tmp_path, capsys):
    config, out = small_run(write, tmp_path)
    assert main(["sweep", config, "--out", out, "--samples", "1024", "--quiet", "--json"]) == 0
    document = json.loads(capsys.readouterr().out)
    assert sum(document["basin"]["counts"].values()) == 1024
    assert not (tmp_path / "run" / "report.html").exists()


def test_bound_and_check(write, tmp_path, capsys):
    config, out = small_run(write, tmp_path)
    assert main(["bound", config, "--out", out, "--quiet", "--json"]) == 0
    names = {one["name"]: one["strength"] for one in json.loads(capsys.readouterr().out)["bounds"]}
    assert names == {"norm bound": "proved", "contact level": "proved"}
    assert main(["check", config, "--quiet", "--json"]) == 0
    document = json.loads(capsys.readouterr().out)
    assert document["stability"] == "stable"
    assert document["seconds"][0] <= document["seconds"][1]
    assert main(["check", config, "--quiet"]) == 0
    assert "Eigenvalues" in capsys.readouterr().out


def test_check_foresees_a_claim(write, tmp_path, capsys):
    # 2.2 lies below the contact level 2.304478 (computed independently); 7.0 is refuted, see below.
    for level, code in (("2.2", 0), ("7.0", 3)):
        config = write(gallery.van_der_pol(bound=f"level = {level}", verdict='accept = "supported"'))
        assert main(["check", config, "--quiet", "--json"]) == code
        claim = json.loads(capsys.readouterr().out)["claim"]
        assert claim["draws"] == 4603  # ln 0.01 / ln 0.999
        assert len(claim["obstacles"]) == bool(code)
    assert main(["check", config, "--quiet"]) == 3
    printed = capsys.readouterr()
    assert "out of reach" in printed.out
    assert max(len(line) for line in printed.out.splitlines() if config not in line) <= 100
    assert printed.err == ""


def test_check_looks_at_the_disk(write, capsys, monkeypatch):
    usage = shutil.disk_usage("/")._replace(free=10_000)
    monkeypatch.setattr("shutil.disk_usage", lambda path: usage)
    assert main(["check", write(gallery.van_der_pol()), "--quiet", "--json"]) == 4
    printed = capsys.readouterr()
    document = json.loads(printed.out)
    assert document["disk"] > document["free"] == 10_000
    (line,) = printed.err.splitlines()
    assert "GB of disk, 0.00 GB are free here; make room" in line


def judge(write, tmp_path, capsys, bound, verdict=""):
    config = write(gallery.van_der_pol(bound=bound, verdict=verdict))
    code = main(["validate", config, "--out", str(tmp_path / "judged"), "--quiet", "--json"])
    printed = capsys.readouterr()
    assert printed.err == ""
    document = json.loads(printed.out)
    assert document == json.loads((tmp_path / "judged" / "verdict.json").read_text(encoding="utf-8"))
    return code, document["claim"]


def test_proved_claim(write, tmp_path, capsys):
    code, claim = judge(write, tmp_path, capsys, "level = 0.79")
    assert (code, claim["result"], claim["decrease"]) == (0, "proved", "proved")


# Khalil draws level 2.25 (from memory), below the level that is stated as proved; the contact level is 2.304478
# (computed independently), and 2.304476 is proved for this claim alone.
@pytest.mark.parametrize(("level", "argument"), [(2.25, "contact level"), (2.304476, "whole claimed set")])
def test_claim_proved_by_branch_and_bound(write, tmp_path, capsys, level, argument):
    code, claim = judge(write, tmp_path, capsys, f"level = {level}")
    assert (code, claim["result"], claim["decrease"]) == (0, "proved", "proved")
    assert argument in claim["reason"]
    assert "boxes" in claim["reason"]


@pytest.mark.parametrize(("accept", "code"), [("proved", 3), ("supported", 0)])
def test_supported_claim(write, tmp_path, capsys, accept, code):
    # A formula with a kink as it stands, though in truth it is smooth: nothing is proved of it.
    bound = 'V = "abs(1.5*x**2 - x*y + y**2)"\nlevel = 2.2'
    found, claim = judge(write, tmp_path, capsys, bound, f'accept = "{accept}"')
    assert (found, claim["result"], claim["decrease"]) == (code, "supported", "undecided")
    assert claim["nonconverging_fraction_upper"] <= 1e-3


def test_supported_claim_whose_argument_is_wrong(write, tmp_path, capsys):
    # Above the contact level 2.304478 but below where the limit cycle begins: safe set, wrong argument.
    code, claim = judge(write, tmp_path, capsys, "level = 2.4", 'accept = "supported"')
    assert (code, claim["result"], claim["decrease"]) == (0, "supported", "refuted")
    assert claim["witness"] is not None


def test_refuted_claim(write, tmp_path, capsys):
    code, claim = judge(write, tmp_path, capsys, "level = 7.0")
    assert (code, claim["result"]) == (1, "refuted")
    assert claim["counterexample"]["outcome"] == "escaped"
    # The line that is printed beside the counterexample shows it.
    command = claim["counterexample"]["replay"].split()
    assert command[:2] == ["roa", "replay"]
    assert main([*command[1:], "--quiet", "--json"]) == 0
    assert json.loads(capsys.readouterr().out)["again"]["outcome"] == "escaped"


def test_matrix_that_is_not_positive_definite(write, tmp_path, capsys):
    code, claim = judge(write, tmp_path, capsys, "P = [[1.5, 2.0], [2.0, 1.0]]\nlevel = 0.1")
    assert (code, claim["result"]) == (1, "refuted")
    assert claim["counterexample"] is None


def test_claim_that_leaves_the_domain(write, tmp_path, capsys):
    code, claim = judge(write, tmp_path, capsys, "level = 20.0")
    assert (code, claim["result"]) == (3, "not_settled")
    # min of 9/P⁻¹_xx = 9/0.8 and 12.25/P⁻¹_yy = 12.25/1.2
    assert claim["largest_level_inside"] == pytest.approx(12.25 / 1.2)


def test_run_with_a_refuted_claim(write, tmp_path, capsys):
    config, out = small_run(write, tmp_path, bound="level = 7.0")
    assert main(["run", config, "--out", out, "--samples", "1024", "--quiet"]) == 1
    assert capsys.readouterr().out.startswith("Refuted: ")


def test_validate_without_a_claim(write, tmp_path, capsys):
    config, out = small_run(write, tmp_path)
    assert main(["validate", config, "--out", out, "--quiet"]) == 2
    assert "no claim" in capsys.readouterr().err
    assert not Path(out).exists()


def test_replay_that_disagrees(write, tmp_path, capsys, monkeypatch):
    config, out = small_run(write, tmp_path)
    assert main(["sweep", config, "--out", out, "--samples", "64", "--quiet"]) == 0
    decide = roa.basin.replay.decide
    monkeypatch.setattr(
        roa.basin.replay, "decide", lambda *arguments: replace(decide(*arguments), outcome=Outcome.UNRESOLVED)
    )
    assert main(["replay", out, "3", "--quiet"]) == 1
    assert "DIFFER" in capsys.readouterr().out


WRONG = {
    "misspelt key": ("[sweep]", "[sweep]\nsamplse = 100", 'did you mean "samples"'),
    "unknown name": ('x = "-y"', 'x = "-yy"', 'did you mean "y"'),
    "caret": ("x**2", "x^2", "**"),
    "missing state": ('x = "-y"\n', "", "x"),
    "equilibrium outside": ("[equilibrium]", "[equilibrium]\nx = 5.0", "domain"),
    "unstable": ('x = "-y"', 'x = "y"', "eigenvalue"),
    "code": ('x = "-y"', "x = \"__import__('os').system('true')\"", "__import__"),
    "unknown method": ("[sweep]", '[sweep]\nmethod = "tsitoras5"', 'did you mean "tsitouras5"'),
    "unknown design": ("[sweep]", '[sweep]\ndesign = "sobl"', 'did you mean "sobol"'),
    "hold of no signal": ("[sweep]", '[hold]\nsignals = ["u"]\nperiod = 0.1\n[sweep]', "no such signal"),
}


@pytest.mark.parametrize("case", WRONG)
def test_wrong_input_is_one_sentence(write, tmp_path, capsys, case):
    old, new, words = WRONG[case]
    text = gallery.van_der_pol().text
    assert old in text
    config = write(text.replace(old, new, 1))
    out = tmp_path / "run"
    assert main(["run", config, "--out", str(out), "--quiet"]) == 2
    printed = capsys.readouterr()
    assert printed.out == ""
    (line,) = printed.err.splitlines()
    assert "loop.toml" in line
    assert words in line
    assert not out.exists()


WRONG_COMMANDS = [
    "status x",
    "resume x",
    "report x",
    "overlay x",
    "sweep x.toml --hours 0",
    "sweep x.toml --executor cluster",
    "run x.toml --cluster=a",
    "run",
    "fly",
    "run x.toml --samples 0",
    "run x.toml --seed -1",
    "run x.toml --samples 2000000000000",
    "replay x",
]


@pytest.mark.parametrize("line", WRONG_COMMANDS)
def test_wrong_command_is_one_sentence(capsys, line):
    try:
        code = main(line.split())
    except SystemExit as ended:
        code = ended.code
    assert code == 2
    assert len(capsys.readouterr().err.splitlines()) == 1


def test_folder_that_cannot_be_made_is_a_failure_of_the_machine(write, tmp_path, capsys):
    config = write(gallery.van_der_pol())
    (tmp_path / "file").write_text("in the way", encoding="utf-8")
    assert main(["sweep", config, "--out", str(tmp_path / "file" / "run"), "--samples", "64", "--quiet"]) == 4
    assert len(capsys.readouterr().err.splitlines()) == 1


def test_folder_is_looked_at_before_the_work(write, tmp_path, capsys, monkeypatch):
    monkeypatch.setattr("roa.preparation.Preparation.__init__", lambda *_: pytest.fail("worked in vain"))
    config = write(gallery.van_der_pol(bound="level = 1.0"))
    for verb in ("run", "sweep", "bound", "validate"):
        assert main([verb, config, "--out", str(tmp_path), "--quiet"]) == 2
        assert "holds other things" in capsys.readouterr().err


@pytest.mark.parametrize(("raised", "code"), [(OSError("gone"), 4), (ValueError("odd"), 4), (KeyboardInterrupt(), 130)])
def test_whatever_is_raised_is_one_sentence(monkeypatch, capsys, raised, code):
    def fail(*_, **__):
        raise raised

    monkeypatch.setattr("roa.verbs.report", fail)
    monkeypatch.delenv("ROA_TRACEBACK", raising=False)
    assert main(["report", "anywhere"]) == code
    printed = capsys.readouterr()
    assert printed.out == ""
    assert len(printed.err.splitlines()) == 1


def test_init_writes_what_check_accepts(tmp_path, capsys):
    file = str(tmp_path / "new.toml")
    assert main(["init", file]) == 0
    assert main(["check", file, "--samples", "2048", "--quiet"]) == 0
    assert main(["init", file]) == 2
    assert "left as it is" in capsys.readouterr().err


def test_interrupted_sweep_resumes(write, tmp_path):
    config, out = small_run(write, tmp_path)
    command = [sys.executable, "-m", "roa.cli"]
    # So many samples that the sweep is still under way when the first block is stored.
    child = subprocess.Popen(
        [*command, "sweep", config, "--out", out, "--samples", str(2**25), "--jobs", "1"],
        stderr=subprocess.PIPE,
        text=True,
        env=os.environ | {"PYTHONUNBUFFERED": "1"},
    )
    blocks = Path(out) / "blocks"
    deadline = time.monotonic() + 120
    while not (blocks.is_dir() and any(blocks.glob("*.h5"))) and time.monotonic() < deadline:
        time.sleep(0.02)
    child.send_signal(signal.SIGINT)
    _, errors = child.communicate(timeout=60)
    assert child.returncode == 130
    assert f"roa resume {out}" in errors
    assert "Traceback" not in errors
    assert any(blocks.glob("*.h5"))
