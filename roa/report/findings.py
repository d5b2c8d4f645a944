"""What a run found beside bounds and counts, in sentences that summary and report share; "" where there is nothing."""

from __future__ import annotations

from dataclasses import dataclass

from roa.report.answer import Verdict
from roa.report.wording import interval_percent, number, percent, percent_upper, point_text, share_with_interval


def bracket_sentence(verdict: Verdict) -> str:
    """The true basin between what is proved inside and what is proved outside."""
    found = verdict.get("bracket")
    if not found:
        return ""
    words = (
        f"Bracket: proved to converge {percent(found['inside']['share'], 2)}, proved not to converge without leaving "
        f"the domain {percent(found['outside']['share'], 2)} (volumes estimated)"
    )
    if found["simulated"] is not None:
        words += (
            f", simulated basin {percent(found['simulated'], 2)} of the domain; the gap is "
            f"{percent(max(found['gap_inside'], 0.0), 2)} inside the simulated edge and "
            f"{percent(max(found['gap_outside'], 0.0), 2)} outside"
        )
    return f"{words}."


def slack_sentence(verdict: Verdict) -> str:
    """Which step of the ladder costs most, and what would help."""
    found = verdict.get("ladder")
    return f"{found['costs_most']} (simulated)" if found and found["costs_most"] else ""


def sensitivity_sentence(verdict: Verdict) -> str:
    """How many outcomes hang on the tolerance."""
    tried = verdict.get("sensitivity")
    if not tried:
        return ""
    return (
        f"Step-sensitive: of the first {tried['tried']:,} starts a tolerance ten times tighter changes the outcome "
        f"of {tried['changed']:,} (simulated)."
    )


def safe_sentence(verdict: Verdict) -> str:
    """The part that converges without crossing a limit, where there are limits."""
    basin = verdict["basin"]
    safe = basin.get("safe") if basin else None
    if not safe:
        return ""
    share = share_with_interval(safe["fraction"], tuple(safe["interval"]), basin["confidence"], "simulated")
    return (
        f"Safe, converged within the limits: {share} of the domain, volume {number(safe['volume'])} "
        f"{basin['volume_unit']} (simulated)."
    )


def audit_sentence(verdict: Verdict) -> str:
    """What came of integrating some stored starts again."""
    found = verdict.get("audit")
    if not found:
        return ""
    differ, starts = len(found["disagreements"]), found["at_random"] + found["near_the_edge"]
    return (
        f"Audit: {differ or 'none'} of {starts} stored starts ended otherwise when integrated again, independently "
        "and at tight tolerance (simulated)."
    )


@dataclass(frozen=True)
class AttractorRow:
    """An attractor or another equilibrium, where it is, and what ends there, each as text."""

    name: str
    place: str
    share: str
    interval: str


def attractor_rows(verdict: Verdict) -> list[AttractorRow]:
    """What trajectories end at; nothing where that is the equilibrium alone."""
    found = verdict.get("attractors") or []
    if len(found) < 2:
        return []
    return [
        AttractorRow(
            one["name"],
            "" if one["at"] is None else point_text(verdict["states"], one["at"], verdict["units"]),
            percent(one["share"], 2) if one["interval"] else "–",
            interval_percent(*one["interval"]) if one["interval"] else "",
        )
        for one in found
    ]


@dataclass(frozen=True)
class FoundStart:
    """A start that a search found, and the command that shows it again."""

    what: str
    where: str
    replay: str


def found_starts(verdict: Verdict) -> list[FoundStart]:
    """The starts that the directed searches found: the weakest, the nearest, and the lowest over a limit."""
    titles = {
        "weakest": "The start of lowest V that was found not to converge",
        "nearest": "The nearest start that was found not to converge",
        "over_limit": "The start of lowest V that was found to cross a limit",
    }
    rows = []
    for key, title in titles.items():
        if one := verdict.get(key):
            where = point_text(verdict["states"], one["initial"], verdict["units"])
            if "distance" in one:
                where += f"; {number(one['distance'])} away in {one['norm']}"
            rows.append(FoundStart(title, where, one["replay"]))
    return rows


def audit_limit(verdict: Verdict) -> str:
    """What the audit says of all stored starts."""
    found = verdict.get("audit")
    if not found or found["share_upper"] is None:
        return ""
    limit = percent_upper(found["share_upper"])
    return f"At most {limit} of the stored starts would end otherwise ({found['strength']})."
