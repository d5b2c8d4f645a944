"""Rows of the tables that summary and report share, as text."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

from roa.kernel.outcomes import Outcome
from roa.report.answer import Verdict
from roa.report.wording import decimals_for, interval_percent, level_text, number, outcome_word, percent

# Where there is nothing to compare.
NOTHING = "–"

Ends = Sequence[float | None] | None


@dataclass(frozen=True)
class BoundRow:
    """A bound: its level and size against the basin, each as text."""

    name: str
    level: str
    strength: str
    size: str
    volume: str
    volume_interval: str
    radius: str
    radius_interval: str
    note: str


@dataclass(frozen=True)
class OutcomeRow:
    """An outcome with its number of starts, its share of all and what it means."""

    word: str
    count: str
    share: str
    meaning: str


def bound_rows(verdict: Verdict) -> list[BoundRow]:
    """Rows of the bounds, in the order of the verdict."""
    return [_bound_row(bound) for bound in verdict["bounds"]]


def outcome_rows(verdict: Verdict) -> list[OutcomeRow]:
    """Rows of the outcomes that can occur: *absent* and *over limit* only where they did."""
    basin = verdict["basin"]
    if not basin:
        return []
    counts: Mapping[str, int] = basin["counts"]
    total = sum(counts.values())
    evenly = bool(basin["by_replicate"]["samples"])  # else the share of the starts is no share of the domain
    rare = (Outcome.ABSENT, Outcome.CONVERGED_OVER_LIMIT)
    return [
        OutcomeRow(
            outcome_word(outcome), f"{count:,}", percent(count / total, 2) if evenly else NOTHING, outcome.sentence
        )
        for outcome in Outcome
        if (count := counts.get(outcome.word, 0)) or outcome not in rare
    ]


def _bound_row(bound: Mapping[str, Any]) -> BoundRow:
    return BoundRow(
        name=bound["name"],
        level=level_text(bound["level"]),
        strength=bound["strength"],
        size=NOTHING if bound["volume"] is None else number(bound["volume"]),
        volume=_percent(bound["volume_ratio"], bound["volume_ratio_interval"]),
        volume_interval=_interval(bound["volume_ratio_interval"]),
        radius=_percent(bound["radius_ratio"], bound["radius_ratio_interval"]),
        radius_interval=_interval(bound["radius_ratio_interval"]),
        note=bound["note"],
    )


def _percent(ratio: float | None, ends: Ends) -> str:
    """A ratio with as many digits as its interval."""
    if ratio is None:
        return NOTHING
    if ends is None or ends[0] is None or ends[1] is None:
        return percent(ratio)
    return percent(ratio, decimals_for(100 * (ends[1] - ends[0])))


def _interval(ends: Ends) -> str:
    """An interval in per cent; an end that is null has no limit."""
    if ends is None or ends[0] is None:
        return ""
    return f"at least {percent(ends[0])}" if ends[1] is None else interval_percent(ends[0], ends[1])
