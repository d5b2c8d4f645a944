"""What can go wrong, each with the exit code of the command line.

Failure of numerics is never an exception here: it is an outcome or a strength. An exception is a
mistake of the user (`UserError`), a failure of the machine (`MachineError`) or an interruption.
"""

from __future__ import annotations

from collections.abc import Iterable


class RoaError(Exception):
    """Base of every error that the command line turns into plain sentences.

    Parameters
    ----------
    faults : str or iterable of str
        One sentence a fault: where, what was found, what is accepted, what to do.
    """

    exit_code = 4

    def __init__(self, faults: str | Iterable[str]) -> None:
        self.faults: tuple[str, ...] = (faults,) if isinstance(faults, str) else tuple(faults)
        super().__init__("\n".join(self.faults))


class UserError(RoaError):
    """A configuration or a command that cannot be carried out; nothing has been written."""

    exit_code = 2


class MachineError(RoaError):
    """The machine failed: disk full, folder unwritable, store damaged."""

    exit_code = 4


class Interrupted(RoaError):
    """The work was stopped and can be resumed; what is stored stays whole."""

    exit_code = 130
