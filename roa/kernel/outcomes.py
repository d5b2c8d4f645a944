"""How a trajectory can end, and why an integration can fail: the two enumerations of the store."""

from __future__ import annotations

from enum import IntEnum


class Outcome(IntEnum):
    """Outcome of a trajectory; the values are a contract of the run folder and never change."""

    ABSENT = 0
    CONVERGED = 1
    CONVERGED_OVER_LIMIT = 2
    ESCAPED = 3
    SETTLED_ELSEWHERE = 4
    UNRESOLVED = 5
    FAILED = 6

    @property
    def word(self) -> str:
        """The name in files and on screens."""
        return self.name.lower()

    @property
    def sentence(self) -> str:
        """What the outcome means, for a reader of the report."""
        return _SENTENCES[self]


# The basin is all starts that converge without leaving the escape box; limits are a question of their own.
IN_BASIN = (Outcome.CONVERGED, Outcome.CONVERGED_OVER_LIMIT)

_SENTENCES = {
    Outcome.ABSENT: "no result stored",
    Outcome.CONVERGED: "entered the target set",
    Outcome.CONVERGED_OVER_LIMIT: "entered the target set, but a limit was crossed on the way",
    Outcome.ESCAPED: "left the escape box, or blew up",
    Outcome.SETTLED_ELSEWHERE: "came to rest at another equilibrium",
    Outcome.UNRESOLVED: "still moving inside the escape box at the longest horizon",
    Outcome.FAILED: "the integrator could not meet its tolerance or ran into its step cap",
}


class Reason(IntEnum):
    """Why a trajectory *failed* (or, for blow_up, how it escaped); `none` for all others."""

    NONE = 0
    STEP_CAP = 1
    STEP_UNDERFLOW = 2
    NOT_FINITE = 3
    BLOW_UP = 4
    OUTSIDE_TABLE = 5

    @property
    def word(self) -> str:
        """The name in files and on screens."""
        return self.name.lower()

    @property
    def sentence(self) -> str:
        """What the reason means, for a reader of the report."""
        return _REASONS[self]


_REASONS = {
    Reason.NONE: "",
    Reason.STEP_CAP: "200,000 accepted steps did not reach a decision",
    Reason.STEP_UNDERFLOW: "the step size fell below what the clock can resolve",
    Reason.NOT_FINITE: "the dynamics gave no finite number at the state reached",
    Reason.BLOW_UP: "left the domain at a speed that no step size can follow",
    Reason.OUTSIDE_TABLE: "left a look-up table that is refused beyond its ends",
}
