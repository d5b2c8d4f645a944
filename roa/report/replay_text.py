"""The text of `roa replay`: one start, two integrations, and whether they agree."""

from __future__ import annotations

from typing import Any

from roa.basin.audit import Audit
from roa.basin.replay import Replay
from roa.loop.model import Loop
from roa.report.wording import confidence_text, number, outcome_word, percent_upper


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


def audit_document(found: Audit) -> dict[str, Any]:
    """What an audit found, as plain values."""
    return {key: str(value) if key == "strength" else value for key, value in found.document.items()}


def audit_text(found: Audit) -> str:
    """What an audit found for people, answer first."""
    differ, all_of_them = len(found.disagreements), len(found.at_random) + len(found.near)
    lines = [
        f"{differ or 'None'} of {all_of_them} stored starts end{'s' if differ == 1 else ''} otherwise when "
        "integrated again, independently and a hundred times tighter (simulated).",
        "",
        f"At random       {len(found.at_random):>8,} starts",
        f"Near the edge   {len(found.near):>8,} starts",
    ]
    if found.at_random:
        upper = percent_upper(found.share_upper)
        lines.append(
            f"Of all stored starts at most {upper} would end otherwise, at {confidence_text(found.confidence)} "
            "confidence (supported, by those drawn at random)."
        )
    lines += [
        f"  start {one.index}: {outcome_word(one.stored)} in the sweep, {outcome_word(one.decision.outcome)} again"
        for one in found.disagreements
    ]
    return "\n".join(lines) + "\n"
