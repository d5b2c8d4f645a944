"""The contact level by proof: the largest level, close below the estimated one, that branch and bound can carry.

V̇ = 0 at the contact point itself, so the level there is never provable; how close a proof comes depends on
the loop. The first attempt is at 0.999999 of the estimate, which most loops reach at once; then a list of
shares is searched by halves, with a budget of boxes that is the same on every machine.
"""

from __future__ import annotations

from dataclasses import replace

from roa.bound.level_proof import LevelProof, LevelProver
from roa.bound.level_set_proof import LevelSetProver
from roa.bound.lyapunov_function import LyapunovFunction, Quadratic
from roa.bound.sampled_function import SampledQuadratic
from roa.bound.sampled_proof import SampledProver
from roa.bound.statement import Bound, Strength
from roa.kernel.branch_and_bound import Answer

FIRST = 0.999999
SHARES = (0.9999, 0.999, 0.99, 0.97, 0.9, 0.8, 0.6, 0.4, 0.2)  # of the estimate
WORK, BOXES = 1.2e9, 200_000  # most elementary interval operations, and most boxes, of all attempts together
FIRST_PART, PART = 0.15, 0.4  # of the budget for the first attempt; of what is left, for each later one
LEAST = 100  # boxes without which no attempt is worth while

Prover = LevelProver | LevelSetProver | SampledProver


def prove_contact_level(estimate: Bound, known: float, boxes: int | None = None) -> Bound:
    """Return the contact level with what could be proved of it, or the estimate where that is no more than `known`.

    Parameters
    ----------
    estimate : Bound of strength *estimated*
    known : a level of the same V that is proved already
    boxes : most boxes of all attempts together; by default what a few seconds can do
    """
    V, highest = estimate.V, estimate.level
    if not highest > 0:
        return estimate
    prover = prover_of(V)
    if not prover.is_ready:
        return estimate
    budget = proof_budget(prover) if boxes is None else boxes
    level = FIRST * highest
    first = prover.prove(level, int(FIRST_PART * budget))
    proof: LevelProof | None = first
    if first.answer is not Answer.PROVED:
        level, proof = _search(prover, highest, budget - first.boxes)
    if proof is None or level <= known:
        return replace(estimate, note=f"{estimate.note}; no higher level could be proved within {budget} boxes")
    note = f"{branch_and_bound(V, proof)}; by floating-point search {estimate.note} at level {highest:.6g}"
    return replace(estimate, level=level, strength=Strength.PROVED, note=note, level_estimated=highest)


def prover_of(V: LyapunovFunction) -> Prover:
    """The prover for a kind of V: that for quadratics is the quicker one, and a sampled loop has one of its own."""
    if isinstance(V, SampledQuadratic):
        return SampledProver(V)
    return LevelProver(V) if isinstance(V, Quadratic) else LevelSetProver(V)


def proof_budget(prover: Prover) -> int:
    """Most boxes for all attempts at a proof together."""
    return min(BOXES, int(WORK / prover.box_work))


def branch_and_bound(V: LyapunovFunction, proof: LevelProof) -> str:
    """The argument of a proof, for notes and reasons."""
    shown = f"that V decreases over every period of {V.hold.T:g} s" if isinstance(V, SampledQuadratic) else "V̇ < 0"
    return f"{shown} is proved by interval branch and bound ({proof.boxes} boxes)"


def _search(prover: Prover, highest: float, left: int) -> tuple[float, LevelProof | None]:
    """Find the largest of the shares that can be proved, and its proof; None where there is none."""
    level, best = 0.0, None
    first, last = 0, len(SHARES) - 1
    while first <= last and left >= LEAST:
        middle = (first + last) // 2
        proof = prover.prove(SHARES[middle] * highest, int(PART * left))
        left -= proof.boxes
        if proof.answer is Answer.PROVED:
            level, best, last = SHARES[middle] * highest, proof, middle - 1
        else:
            first = middle + 1
    return level, best
