"""How a trajectory is integrated: everything about accuracy and ends that decides its result."""

from __future__ import annotations

from dataclasses import dataclass

# Accepted steps after which a trajectory is *failed*: a million or more only looks like hanging.
STEP_CAP = 200_000


@dataclass(frozen=True)
class Integration:
    """Method, tolerances and ends of every trajectory of a sweep.

    Attributes
    ----------
    method : str, the name of a file in `roa/kernel/methods/`
    rtol, atol : relative and absolute tolerance of the local error; atol in state units
    horizon, longest : s; when a trajectory is expected to be decided, and when it is given up
    escape : size of the escape box in domain sizes, about the domain's centre
    step_cap : accepted steps
    """

    method: str
    rtol: float
    atol: float
    horizon: float
    longest: float
    escape: float
    step_cap: int = STEP_CAP
