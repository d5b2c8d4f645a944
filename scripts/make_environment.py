"""Make .venv of this clone and install roa into it, once for all calls that ask at the same time.

Run by scripts/set_up with a Python that is new enough; uses the standard library alone. What it leaves in
.venv/set_up: `lock` (held while it works), `place` (where .venv was made, written last, so that an empty one means
half-made), `log` (what pip said) and a stamp for each purpose that is installed.
"""

from __future__ import annotations

import fcntl
import importlib.util
import os
import re
import shutil
import subprocess
import sys
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

ROOT = Path(__file__).resolve().parent.parent
VENV = ROOT / ".venv"
PYTHON = VENV / "bin" / "python"
STATE = VENV / "set_up"
LOG = STATE / "log"
PLACE = STATE / "place"

REQUIREMENTS = {"run": ".", "test": ".[test]"}
INCLUDED = {"run": ["run"], "test": ["run", "test"]}
"""The purposes that are served as well once a purpose is installed."""

LINES_SHOWN = 20
"""Lines of the log shown when the installation fails for a reason that is not recognised."""

VENV_MODULE = (
    "this Python has no complete venv module; install it (Debian and Ubuntu: apt install python3-venv), "
    "or name another Python, 3.11 or newer: PYTHON=/path/to/python3.12"
)

CURES = {
    r"No space left on device|Disk quota exceeded": "the disk is full; free about 1 GB and call again",
    r"ensurepip": VENV_MODULE,
    r"after connection broken by|Read timed out|Could not fetch URL|\(from versions: none\)": (
        "no package index with what is needed was reached; connect to the network, or set PIP_INDEX_URL to one in reach"
    ),
}
"""What the log says when the machine is at fault, and the sentence for the user; the first match counts."""


class SetUpError(Exception):
    """The machine cannot carry out the set-up; the text is one sentence that names the cure."""


def main(purpose: str) -> int:
    """Bring .venv up to date for a purpose, run or test; the exit code is 0, 4 (machine) or 130 (interrupted)."""
    try:
        with lock():
            if read(STATE / purpose) != stamp():
                set_up(purpose)
    except KeyboardInterrupt:
        say("set-up interrupted; the next call carries on")
        return 130
    except SetUpError as error:
        say(str(error))
        return 4
    except OSError as error:
        say(f"{error.filename or VENV}: {error.strerror}; {VENV} must be writable, with about 1 GB free on its disk")
        return 4
    return 0


def set_up(purpose: str) -> None:
    """Make .venv if there is no sound one, then install what the purpose needs."""
    if is_sound():
        say("installing what is missing or has changed")
    else:
        say("setting up (once), about a minute")
        make_venv()
    wanted = stamp()
    for other in REQUIREMENTS:
        if read(STATE / other) != wanted:
            (STATE / other).unlink(missing_ok=True)
    install(REQUIREMENTS[purpose])
    for included in INCLUDED[purpose]:
        (STATE / included).write_bytes(wanted)


@contextmanager
def lock() -> Iterator[None]:
    """Let one process at a time change .venv; the kernel frees the lock of a process that dies."""
    STATE.mkdir(parents=True, exist_ok=True)
    with (STATE / "lock").open("w") as file:
        try:
            fcntl.flock(file, fcntl.LOCK_EX | fcntl.LOCK_NB)
        except BlockingIOError:
            say("waiting for another call that is setting up .venv")
            fcntl.flock(file, fcntl.LOCK_EX)
        yield


def interpreter() -> str:
    """The file behind the interpreter that .venv shall stand on: the one that PYTHON names, else the one it has."""
    return os.path.realpath(sys.executable if os.environ.get("PYTHON") else PYTHON)


def place() -> bytes:
    """Where .venv shall be and which interpreter it shall stand on; scripts/set_up writes the same two lines."""
    return os.fsencode(f"{ROOT}\n{interpreter()}\n")


def stamp() -> bytes:
    """All that the installation depends on; scripts/set_up compares this very text."""
    return place() + (ROOT / "pyproject.toml").read_bytes()


def is_sound() -> bool:
    """Whether .venv is whole and was made in this place, or was made by hand and can be used."""
    if not os.access(PYTHON, os.X_OK):
        return False
    if PLACE.exists():
        return read(PLACE) == place()
    check = [str(PYTHON), "-I", "-c", "import sys, pip; sys.exit(sys.version_info < (3, 11))"]
    unfit = subprocess.run(check, stderr=subprocess.DEVNULL).returncode != 0
    if unfit or os.path.realpath(PYTHON) != interpreter():
        raise SetUpError(
            f"{VENV} was made by other means and is no use here (no pip, a Python before 3.11, or not the one that "
            "PYTHON names); remove it first"
        )
    PLACE.write_bytes(place())
    return True


def make_venv() -> None:
    """Make .venv anew, without what an earlier one left."""
    if any(importlib.util.find_spec(module) is None for module in ("venv", "ensurepip")):
        raise SetUpError(f"{sys.executable}: {VENV_MODULE}")
    base = os.path.realpath(sys.executable)  # not a link in .venv, which goes now
    PLACE.write_bytes(b"")
    for left in VENV.iterdir():
        if left == STATE:
            continue
        if left.is_dir() and not left.is_symlink():
            shutil.rmtree(left)
        else:
            left.unlink()
    run(base, "-I", "-m", "venv", str(VENV))
    PLACE.write_bytes(place())


def install(requirement: str) -> None:
    """Install the project in editable form, with what it depends on."""
    pip = [str(PYTHON), "-I", "-m", "pip", "install", "--no-user", "--no-input"]
    run(*pip, "--disable-pip-version-check", "--progress-bar", "off", "--editable", requirement)


def run(*command: str) -> None:
    """Run a command in the clone, its output in the log; if it fails, name the cure or show the end of the log."""
    with LOG.open("wb") as log:
        code = subprocess.run(command, cwd=ROOT, stdin=subprocess.DEVNULL, stdout=log, stderr=log).returncode
    if code == 0:
        return
    said = LOG.read_text(errors="replace")
    for sign, cure in CURES.items():
        if re.search(sign, said):
            raise SetUpError(f"{cure} (log: {LOG})")
    print(*said.splitlines()[-LINES_SHOWN:], sep="\n", file=sys.stderr)
    raise SetUpError(f"failed as shown above (log: {LOG}); another Python can be named: PYTHON=/path/to/python3.12")


def read(path: Path) -> bytes:
    """What a file holds, nothing if there is none."""
    return path.read_bytes() if path.exists() else b""


def say(sentence: str) -> None:
    """Tell the user; standard output belongs to the program that is being set up."""
    print(f"roa set-up: {sentence}", file=sys.stderr, flush=True)


if __name__ == "__main__":
    sys.exit(main(sys.argv[1]))
