"""The set-up of a clone, on fake interpreters: nothing is installed."""

from __future__ import annotations

import importlib.util
import os
import re
import shutil
import subprocess
import sys
import time
from pathlib import Path
from types import ModuleType

import pytest

PROJECT = Path(__file__).parents[2]

REPORTER = """#!/bin/sh
printf '%s|' "$PWD" "${PYTHONPATH-unset}" "$@"
"""
"""Stands for .venv/bin/python: says where and how it was called."""

CHECKER = """#!/bin/sh
echo "$3"
case " $FAILING " in *" $3 "*) exit 1 ;; esac
"""
"""Stands for .venv/bin/python under scripts/test: says which module it ran, and fails for those in FAILING."""


def write_program(path: Path, text: str) -> Path:
    path.parent.mkdir(parents=True, exist_ok=True)
    path.write_text(text)
    path.chmod(0o755)
    return path


def interpreter(version: str) -> str:
    """A program that answers like a Python of this version when scripts/set_up asks, and else says its version."""
    old = "1" if tuple(map(int, version.split("."))) < (3, 11) else "0"
    return f'#!/bin/sh\nif [ "$1" = -c ]; then echo {version}; exit {old}; fi\necho {version} "$@" >&2\nexit 7\n'


@pytest.fixture
def clone(tmp_path: Path) -> Path:
    """An empty clone with a space in its name: the scripts and a pyproject.toml."""
    root = tmp_path / "a clone"
    (root / "scripts").mkdir(parents=True)
    (root / ".ci").mkdir()
    for name in ("scripts/roa", "scripts/test", "scripts/set_up", "scripts/make_environment.py", ".ci/run"):
        shutil.copy(PROJECT / name, root / name)
    (root / "pyproject.toml").write_text('[project]\nname = "roa"\nversion = "1"\n')
    return root


@pytest.fixture
def bare(tmp_path: Path) -> Path:
    """A folder for the PATH that holds what every system has, and no Python."""
    folder = tmp_path / "bin"
    folder.mkdir()
    for name in ("sh", "cat", "dirname", "readlink"):
        program = shutil.which(name)
        assert program
        (folder / name).symlink_to(program)
    return folder


def call(program: Path, *arguments: str, path: Path, cwd: Path, **extra: str) -> subprocess.CompletedProcess[str]:
    return subprocess.run(
        [program, *arguments], env={"PATH": str(path), **extra}, cwd=cwd, capture_output=True, text=True, timeout=60
    )


@pytest.fixture(autouse=True)
def no_python_variable(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.delenv("PYTHON", raising=False)


def load(root: Path) -> ModuleType:
    """scripts/make_environment.py of this clone as a module."""
    spec = importlib.util.spec_from_file_location("make_environment", root / "scripts" / "make_environment.py")
    assert spec
    assert spec.loader
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return module


def finish(root: Path, python: str, *purposes: str) -> ModuleType:
    """Leave .venv as a finished set-up leaves it, with a fake interpreter."""
    module = load(root)
    write_program(module.PYTHON, python)
    module.STATE.mkdir()
    module.PLACE.write_bytes(module.place())
    for purpose in purposes:
        (module.STATE / purpose).write_bytes(module.stamp())
    return module


# The shell's part.


def test_a_call_that_finds_all_made_starts_nothing_else(clone: Path, bare: Path, tmp_path: Path) -> None:
    finish(clone, REPORTER, "run")
    done = call(clone / "scripts/roa", "run", "a b.toml", path=bare, cwd=tmp_path, PYTHONPATH="/x", PYTHONHOME="/x")
    assert done.stdout == f"{tmp_path}|unset|-P|-m|roa.cli|run|a b.toml|"
    assert (done.returncode, done.stderr) == (0, "")


def test_a_link_to_the_script_finds_its_clone(clone: Path, bare: Path, tmp_path: Path) -> None:
    finish(clone, REPORTER, "run")
    (tmp_path / "roa").symlink_to(clone / "scripts" / "roa")
    assert "roa.cli" in call(tmp_path / "roa", path=bare, cwd=tmp_path).stdout


@pytest.mark.parametrize("change", ["pyproject", "moved", "vanished", "half-made", "other purpose"])
def test_what_has_changed_is_set_up_again(clone: Path, bare: Path, change: str) -> None:
    module = finish(clone, REPORTER, "test" if change == "other purpose" else "run")
    match change:
        case "pyproject":
            (clone / "pyproject.toml").write_text("[project]\n")
        case "moved":
            clone = clone.rename(clone.with_name("moved"))
        case "vanished":
            module.PYTHON.unlink()
            module.PYTHON.symlink_to("/nonexistent/python3")
        case "half-made":
            (module.STATE / "run").unlink()
    write_program(bare / "python3", interpreter("3.13.0"))
    done = call(clone / "scripts/roa", path=bare, cwd=clone)
    assert done.stderr == f"3.13.0 -I {clone}/scripts/make_environment.py run\n"
    assert (done.returncode, done.stdout) == (7, "")


def test_a_newer_python_is_searched_for(clone: Path, bare: Path) -> None:
    write_program(bare / "python3", interpreter("3.9.2"))
    write_program(bare / "python3.13", "#!/bin/sh\nexit 127\n")
    write_program(bare / "python3.12", interpreter("3.12.1"))
    assert call(clone / "scripts/roa", path=bare, cwd=clone).stderr.startswith("3.12.1 -I")


def test_an_old_python_is_one_sentence(clone: Path, bare: Path) -> None:
    write_program(bare / "python3", interpreter("3.9.2"))
    done = call(clone / "scripts/roa", path=bare, cwd=clone)
    assert (done.returncode, done.stdout) == (4, "")
    assert re.fullmatch(r"roa set-up: Python 3\.11 .* python3 is 3\.9\.2; install one, .*PYTHON=.*\n", done.stderr)


def test_no_python_is_one_sentence(clone: Path, bare: Path) -> None:
    done = call(clone / "scripts/roa", path=bare, cwd=clone)
    assert done.returncode == 4
    assert re.fullmatch(r"roa set-up: .* none of these was found: python3 .* python3\.11; .*\n", done.stderr)


def test_the_python_that_is_named_is_taken(clone: Path, bare: Path, tmp_path: Path) -> None:
    finish(clone, REPORTER, "run")
    named = write_program(tmp_path / "my python" / "python", interpreter("3.14.0"))
    write_program(bare / "python3", interpreter("3.12.1"))
    done = call(clone / "scripts/roa", path=bare, cwd=clone, PYTHON=str(named))
    assert done.stderr.startswith("3.14.0 -I"), "PYTHON is not the interpreter of .venv, so .venv is made again"
    named.write_text(interpreter("3.8.0"))
    assert call(clone / "scripts/roa", path=bare, cwd=clone, PYTHON=str(named)).returncode == 4


def test_naming_the_python_of_the_venv_changes_nothing(clone: Path, bare: Path, tmp_path: Path) -> None:
    module = finish(clone, REPORTER)
    answers = '#!/bin/sh\nif [ "$2" = -c ]; then readlink -f "$0"; else echo started "$@"; fi\n'
    named = write_program(tmp_path / "my python" / "python3.12", answers)
    module.PYTHON.unlink()
    module.PYTHON.symlink_to(named)
    (module.STATE / "run").write_bytes(module.stamp())
    assert call(clone / "scripts/roa", path=bare, cwd=clone, PYTHON=str(named)).stdout == "started -P -m roa.cli\n"


@pytest.mark.parametrize("script", ["scripts/test", ".ci/run"])
@pytest.mark.parametrize(("failing", "code"), [("", 0), ("ruff", 1), ("mypy", 1), ("pytest", 1), ("ruff pytest", 1)])
def test_every_check_runs_and_pytest_is_last(
    clone: Path, bare: Path, tmp_path: Path, script: str, failing: str, code: int
) -> None:
    finish(clone, CHECKER, "test")
    done = call(clone / script, path=bare, cwd=tmp_path, FAILING=failing)
    assert done.stdout.split() == ["ruff", "ruff", "mypy", "pytest"]
    assert done.returncode == code
    assert bool(done.stderr) == (failing not in ("", "pytest"))


def test_a_path_for_pytest_is_relative_to_the_caller(clone: Path, bare: Path, tmp_path: Path) -> None:
    finish(clone, REPORTER, "test")
    (tmp_path / "test_x.py").touch()
    pytest_call = f"|unset|-P|-m|pytest|--rootdir|{clone}|--config-file|{clone}/pyproject.toml|"
    done = call(clone / "scripts/test", "test_x.py::test_y", path=bare, cwd=tmp_path)
    assert done.stdout.endswith(f"{tmp_path}{pytest_call}test_x.py::test_y|")
    done = call(clone / "scripts/test", "-k", "x or y", path=bare, cwd=tmp_path)
    assert done.stdout.endswith(f"{clone}{pytest_call}-k|x or y|")


# Python's part.


class Commands(list[str]):
    """Stands for `run` of make_environment.py: notes "venv" or what is installed, and makes a fake interpreter."""

    interrupted: str | None = None
    """The entry at which the user interrupts."""

    def __init__(self, root: Path) -> None:
        super().__init__()
        self.module = load(root)
        self.module.run = self.run

    def run(self, *command: str) -> None:
        self.append("venv" if "venv" in command else command[-1])
        if self[-1] == "venv":
            write_program(self.module.PYTHON, "#!/bin/sh\n")
        if self[-1] == self.interrupted:
            raise KeyboardInterrupt

    def of(self, purpose: str) -> list[str]:
        """The commands that one call for a purpose runs; it must succeed."""
        self.clear()
        assert self.module.main(purpose) == 0
        return list(self)


def test_each_purpose_is_installed_once(clone: Path) -> None:
    commands = Commands(clone)
    assert commands.of("run") == ["venv", "."]
    assert commands.of("run") == []
    assert commands.of("test") == [".[test]"]
    assert commands.of("run") == commands.of("test") == []
    (clone / "pyproject.toml").write_text("[project]\n")
    assert commands.of("test") == [".[test]"]
    assert commands.of("run") == []


def test_both_parts_agree_on_the_stamp(clone: Path, bare: Path) -> None:
    commands = Commands(clone)
    commands.of("run")
    assert call(clone / "scripts/roa", path=bare, cwd=clone).returncode == 0, "no Python on this PATH to set up with"


def test_a_half_made_venv_is_made_again(clone: Path, capsys: pytest.CaptureFixture[str]) -> None:
    commands = Commands(clone)
    commands.interrupted = "venv"
    assert commands.module.main("run") == 130
    (clone / ".venv/lib").mkdir()
    commands.interrupted = None
    assert commands.of("run") == ["venv", "."]
    assert not (clone / ".venv/lib").exists()
    assert capsys.readouterr().out == ""


def test_an_interrupted_installation_is_done_again(clone: Path) -> None:
    commands = Commands(clone)
    commands.of("run")
    before = (clone / "pyproject.toml").read_text()
    (clone / "pyproject.toml").write_text("[project]\n")
    commands.interrupted = "."
    assert commands.module.main("run") == 130
    commands.interrupted = None
    (clone / "pyproject.toml").write_text(before)
    assert commands.of("run") == ["."], "who knows how far the interrupted one came"


def test_a_moved_clone_gets_another_venv(clone: Path) -> None:
    Commands(clone).of("test")
    moved = clone.rename(clone.with_name("moved"))
    commands = Commands(moved)
    assert commands.of("run") == ["venv", "."]
    assert commands.of("test") == [".[test]"], "the stamp of the old place does not count"


@pytest.mark.parametrize("fault", ["none", "unfit", "not the one named"])
def test_a_venv_made_by_hand_is_used_if_it_can_be(
    clone: Path, fault: str, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    unfit = write_program(clone / ".venv/bin/python", f"#!/bin/sh\nexit {int(fault == 'unfit')}\n")
    if fault == "none":
        assert Commands(clone).of("run") == ["."]
        return
    if fault == "not the one named":
        monkeypatch.setenv("PYTHON", sys.executable)
    assert Commands(clone).module.main("run") == 4
    assert unfit.exists(), "what others made is not deleted"
    assert "remove it first" in capsys.readouterr().err


def test_a_second_call_waits_for_the_first(clone: Path) -> None:
    module = finish(clone, REPORTER)
    with module.lock():
        second = subprocess.Popen(
            [sys.executable, "-I", clone / "scripts/make_environment.py", "run"], stderr=subprocess.PIPE, text=True
        )
        assert second.stderr
        assert second.stderr.readline() == "roa set-up: waiting for another call that is setting up .venv\n"
        time.sleep(0.3)  # were it not to wait, it would be installing now
        (module.STATE / "run").write_bytes(module.stamp())
    with second:
        assert second.stderr.read() == "", "the first call has done all there was to do"
    assert second.returncode == 0


@pytest.mark.parametrize(
    ("said", "cure"),
    [
        ("ERROR: Could not install packages due to an OSError: [Errno 28] No space left on device", "free about 1 GB"),
        ("The virtual environment was not created successfully because ensurepip is not available.", "python3-venv"),
        (
            "WARNING: Retrying (Retry(total=4, ...)) after connection broken by 'NewConnectionError(...)'",
            "PIP_INDEX_URL",
        ),
    ],
)
def test_the_cure_is_read_from_the_log(clone: Path, said: str, cure: str, capfd: pytest.CaptureFixture[str]) -> None:
    module = finish(clone, REPORTER)
    with pytest.raises(module.SetUpError, match=cure):
        module.run("sh", "-c", 'echo "$0" >&2; exit 1', said)
    assert capfd.readouterr() == ("", ""), "the sentence is enough"


def test_the_end_of_the_log_is_shown_for_other_failures(clone: Path, capfd: pytest.CaptureFixture[str]) -> None:
    module = finish(clone, REPORTER)
    with pytest.raises(module.SetUpError, match=re.escape(str(module.LOG))):
        module.run("sh", "-c", 'for i in 1 2 3 4 5 6 7 8 9; do echo "a$i"; echo "b$i"; echo "c$i"; done; exit 1')
    shown = capfd.readouterr()
    assert shown.err.split()[-1] == "c9"
    assert len(shown.err.split()) == module.LINES_SHOWN
    assert shown.out == ""


def test_a_python_without_venv_is_one_sentence(
    clone: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    commands = Commands(clone)
    monkeypatch.setattr(importlib.util, "find_spec", lambda name: None if name == "ensurepip" else object())
    assert commands.module.main("run") == 4
    assert commands == []
    assert "apt install python3-venv" in capsys.readouterr().err.splitlines()[-1]


def test_a_venv_that_cannot_be_written_is_one_sentence(clone: Path, capsys: pytest.CaptureFixture[str]) -> None:
    (clone / ".venv").touch()
    assert load(clone).main("run") == 4
    assert re.fullmatch(r"roa set-up: .*Not a directory; .* must be writable.*\n", capsys.readouterr().err)


@pytest.mark.skipif(importlib.util.find_spec("pip") is None, reason="asks the pip of this environment")
def test_no_network_is_one_sentence(clone: Path, bare: Path) -> None:
    real = f'#!/bin/sh\nexec "{sys.executable}" "$@"\n'
    write_program(bare / "python3", real)
    finish(clone, real)
    unreachable = {"PIP_INDEX_URL": "http://127.0.0.1:9/simple", "PIP_RETRIES": "0", "PIP_CONFIG_FILE": os.devnull}
    done = call(clone / "scripts/roa", path=bare, cwd=clone, PIP_DRY_RUN="1", **unreachable)
    assert (done.returncode, done.stdout) == (4, "")
    assert done.stderr.count("\n") == 2
    assert "connect to the network, or set PIP_INDEX_URL" in done.stderr
