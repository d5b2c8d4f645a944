"""A run folder: its files, its rules, and the one way in which files come into being there."""

from __future__ import annotations

import os
import shlex
import uuid
from collections.abc import Iterator
from contextlib import ExitStack, contextmanager, suppress
from datetime import datetime
from pathlib import Path

from roa.errors import MachineError, UserError
from roa.sweep import lock

# Ending of a file that is being written; a file under its own name is complete.
ASIDE = ".aside"
# What a run that has begun nothing yet may have left behind.
BEFORE_A_SWEEP = {"config.toml", "run.log", "lock"}


@contextmanager
def written_aside(path: Path) -> Iterator[Path]:
    """Give a new path in the same folder to write to; after the block, sync it and rename it to `path`.

    Whatever ends the block otherwise, `path` is as it was before.

    Raises
    ------
    MachineError
        The disk is full, the folder cannot be written.
    """
    aside = path.with_name(f".{path.name}.{uuid.uuid4().hex}{ASIDE}")
    try:
        path.parent.mkdir(parents=True, exist_ok=True)
        yield aside
        _sync(aside)
        os.replace(aside, path)
        _sync(path.parent)
    except OSError as error:
        raise MachineError(
            f"{path}: cannot be written ({error.strerror or error}); what is stored already stays whole"
        ) from error
    finally:
        with suppress(OSError):
            aside.unlink(missing_ok=True)


def write_atomically(path: Path, content: bytes) -> None:
    """Write a file so that it appears complete or not at all, even if the power fails."""
    with written_aside(path) as aside:
        aside.write_bytes(content)


def _sync(path: Path) -> None:
    handle = os.open(path, os.O_RDONLY)
    try:
        os.fsync(handle)
    finally:
        os.close(handle)


class RunFolder:
    """The folder of one run; nothing is written before `locked` is entered.

    Attributes
    ----------
    config : the configuration as it was read
    plan : what is swept, in the words of `roa.sweep.header`
    blocks : folder of finished blocks, while the sweep is under way
    sweep : the merged data
    verdict, report, figures, log : what the later rooms write
    status, lock : how far the sweep is, and who writes here
    """

    def __init__(self, path: Path) -> None:
        self.path = path
        self.config = path / "config.toml"
        self.plan = path / "plan.json"
        self.blocks = path / "blocks"
        self.sweep = path / "sweep.h5"
        self.verdict = path / "verdict.json"
        self.report = path / "report.html"
        self.figures = path / "figures"
        self.log = path / "run.log"
        self.status = path / "status.json"
        self.lock = path / "lock"
        self._locked = False

    @classmethod
    def new(cls, path: Path | None, source: str) -> RunFolder:
        """Return the folder for a new run: `path`, or one under results/ named by `source` and the time.

        Raises
        ------
        UserError
            The path holds a run, or anything else.
        """
        if path is None:
            return cls(_unused(Path("results") / f"{Path(source).stem}-{datetime.now():%Y-%m-%d-%H%M%S}"))
        folder = cls(path)
        if path.exists() and not path.is_dir():
            raise UserError(f"{path}: is a file; --out takes a folder, new or empty")
        present = {entry.name for entry in path.iterdir()} if path.exists() else set()
        if folder.config.name in present and {folder.plan.name, folder.sweep.name} & present:
            raise UserError(f"{path}: holds a run already; carry it on with `{folder.resume_command}`")
        foreign = sorted(present - BEFORE_A_SWEEP)
        if foreign:
            shown = ", ".join(foreign[:3]) + (", …" if len(foreign) > 3 else "")
            raise UserError(f"{path}: holds other things ({shown}); --out takes a folder, new or empty")
        return folder

    @classmethod
    def existing(cls, path: Path) -> RunFolder:
        """Return the folder of a run whose sweep has begun.

        Raises
        ------
        UserError
            There is no such run.
        """
        folder = cls(path)
        missing = [file.name for file in (folder.config, folder.plan) if not file.is_file()]
        if missing:
            raise UserError(
                f"{path}: is no folder with a sweep in it, {' and '.join(missing)} missing; "
                "start one with `roa run CONFIG --out DIR`"
            )
        return folder

    @property
    def resume_command(self) -> str:
        """The line that carries this run on."""
        return f"roa resume {shlex.quote(str(self.path))}"

    @contextmanager
    def locked(self) -> Iterator[None]:
        """Make the folder, be its only writer, and clear away what a killed writer left; may be nested.

        Raises
        ------
        UserError
            Another process writes here.
        MachineError
            The folder cannot be made or written.
        """
        if self._locked:
            yield
            return
        with ExitStack() as holding:
            try:
                self.path.mkdir(parents=True, exist_ok=True)
                holding.enter_context(lock.locked(self.lock))
                self._clear()
            except OSError as error:
                raise MachineError(f"{self.path}: cannot be written ({error.strerror or error})") from error
            self._locked = True
            try:
                yield
            finally:
                self._locked = False

    def require_there(self) -> None:
        """See that the folder still is what was begun: where its disk is gone, blocks would go to the one below.

        Raises
        ------
        MachineError
            The folder has vanished.
        """
        if not self.plan.exists():
            raise MachineError(
                f"{self.path}: has vanished while it was written to; bring its disk back, then `{self.resume_command}`"
            )

    def _clear(self) -> None:
        """Remove files that a killed process was writing: we hold the lock, so nobody is."""
        for folder in (self.path, self.blocks, self.figures):
            for aside in folder.glob(f".*{ASIDE}"):
                aside.unlink(missing_ok=True)


def _unused(path: Path) -> Path:
    """Return the path, with a number behind it where a run has that name already."""
    candidate, number = path, 2
    while candidate.exists():
        candidate, number = path.with_name(f"{path.name}-{number}"), number + 1
    return candidate
