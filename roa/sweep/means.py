"""The means that a command may use: workers and time. They decide no result."""

from __future__ import annotations

import math
import time
from dataclasses import dataclass

from roa.errors import UserError

# Of the granted time, what is kept for the statistics of what is done: this share of it, but not more seconds.
KEPT_SHARE, KEPT_MOST = 0.05, 300.0


@dataclass(frozen=True)
class Means:
    """Workers and time.

    Attributes
    ----------
    jobs : workers, >= 1; None for as many as this process may use processors
    executor : name of a file in `roa/sweep/executors/`; None where it follows from the others
    deadline : of the sweep, by the monotonic clock, s; None where time does not matter
    command : as it was given, for the record
    """

    jobs: int | None = None
    executor: str | None = None
    deadline: float | None = None
    command: str = ""

    @classmethod
    def granted(
        cls,
        jobs: int | None = None,
        hours: float | None = None,
        executor: str | None = None,
        command: str = "",
    ) -> Means:
        """Return the means of a command that begins now.

        Raises
        ------
        UserError
            One sentence for each that cannot be granted.
        """
        faults = []
        if jobs is not None and jobs < 1:
            faults.append(f"--jobs {jobs}: must be at least 1")
        if hours is not None and not (math.isfinite(hours) and hours > 0):
            faults.append(f"--hours {hours:g}: must be a number above 0, such as 7.5")
        if faults:
            raise UserError(faults)
        deadline = None if hours is None else time.monotonic() + working_seconds(hours)
        return cls(jobs, executor, deadline, command)


def working_seconds(hours: float) -> float:
    """Return what of the granted time is for the sweep itself, s."""
    seconds = 3600 * hours
    return seconds - min(KEPT_SHARE * seconds, KEPT_MOST)
