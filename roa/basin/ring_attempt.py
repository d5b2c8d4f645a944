"""What a proof makes of a claimed ultimate bound, in words."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from decimal import Decimal

import numpy as np
from numpy.typing import NDArray

from roa.bound.lyapunov_function import LyapunovFunction
from roa.bound.ring_proof import RingProver
from roa.bound.ultimate_bound import BOXES, WORK, disturbance_words, ring_argument
from roa.kernel.branch_and_bound import Answer


@dataclass(frozen=True)
class RingAttempt:
    """An attempt at V̇ < 0 on the ring inner <= V <= level.

    Attributes
    ----------
    decrease : "proved", "refuted" or "undecided"
    reason : one sentence
    witness : float64 (n,), a point of the ring with V̇ >= 0, where refuted
    disturbance : name -> value, under which that is
    """

    decrease: str
    reason: str
    witness: NDArray[np.float64] | None = None
    disturbance: Mapping[str, float] | None = None


def attempt_ring(V: LyapunovFunction, inner: Decimal | None, level: Decimal) -> RingAttempt:
    """Try to prove the claim; without an inner level there is no ring, and the attempt says what is missing."""
    if inner is None:
        reason = (
            f"The claim is meant for {disturbance_words(V)}, under which the loop need not settle at a point: give the "
            "inner level of an ultimate bound as `inner` in [bound]."
        )
        return RingAttempt("undecided", reason)
    prover = RingProver(V)
    proof = prover.prove(inner, level, prover.budget(float(level), WORK, BOXES))
    ring = f"the ring {inner} <= V <= {level}"
    if proof.answer is Answer.PROVED:
        argument = ring_argument(proof, V)
        return RingAttempt("proved", f"{argument}, which is {ring}: what enters V <= {inner} stays there.")
    if proof.answer is Answer.REFUTED and proof.witness is not None and proof.disturbance is not None:
        values = dict(zip(V.loop.disturbances, proof.disturbance.tolist(), strict=True))
        under = "".join(f" with {name} = {value:.6g}" for name, value in values.items())
        return RingAttempt("refuted", f"V̇ >= 0 at a point of {ring}{under}.", proof.witness, values)
    return RingAttempt("undecided", f"V̇ < 0 is not proved on {ring}: {proof.reason}.")
