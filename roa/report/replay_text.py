"""The text of `roa replay`: one start, two integrations, and whether they agree."""

from __future__ import annotations

from typing import Any

from roa.basin.replay import Replay
from roa.loop.model import Loop
from roa.report.wording import number, outcome_word


def replay_document(found: Replay, loop: Loop) -> dict[str, Any]:
    """The comparison as plain values."""
    decision = found.decision
    return {
        "states": list(loop.states),
        "index": found.index,
        "initial": found.initial.tolist(),
        "stored": {"outcome": found.stored.word, "time": found.stored_time},
        "again": {
            "method": decision.method,
            "rtol": found.rtol,
            "atol": found.atol,
            "outcome": decision.outcome.word,
            "time": decision.time,
            "final": decision.final.tolist(),
            "peak": decision.peak.tolist(),
            "steps": decision.steps,
        },
        "agrees": found.agrees,
        "strength": "simulated",
    }


def replay_text(found: Replay, loop: Loop) -> str:
    """The comparison for people, answer first."""
    decision = found.decision
    answer = "The outcomes agree"
    if not found.agrees:
        answer = "The outcomes DIFFER: the start lies close to the edge of the basin, or the tolerance is too loose"
    before = "in the sweep" if found.index is not None else "as in a sweep"
    start = "" if found.index is None else f" {found.index}"
    lines = [
        f"{answer} (simulated, twice).",
        "",
        f"Start{start}",
        *(
            f"  {name:<12} {value:>22.15g} {unit}".rstrip()
            for name, value, unit in zip(loop.states, found.initial, loop.units, strict=True)
        ),
        f"{before:<22} {outcome_word(found.stored)} after {number(found.stored_time, 6)} s",
        f"{f'{decision.method}, rtol {found.rtol:g}':<22} {outcome_word(decision.outcome)} after"
        f" {number(decision.time, 6)} s in {decision.steps:,} steps",
        "",
        f"{'':<14} {'final state':>16} {'peak excursion':>16}",
        *(
            f"  {name:<12} {final:>16.6g} {peak:>16.6g} {unit}".rstrip()
            for name, final, peak, unit in zip(loop.states, decision.final, decision.peak, loop.units, strict=True)
        ),
    ]
    return "\n".join(lines) + "\n"
