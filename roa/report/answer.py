"""The answer in two sentences, for the head of the summary and of the report."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from roa.report.wording import (
    confidence_text,
    in_a_row,
    level_text,
    percent,
    percent_upper,
    point_text,
    share_with_interval,
)

Verdict = Mapping[str, Any]


def answer(verdict: Verdict) -> tuple[str, ...]:
    """At most two sentences: what became of the claim, or how large the basin is and what the bounds cover of it.

    Before them stands one that says so where the sweep is partial.
    """
    if verdict["claim"]:
        sentences = (_claim_sentence(verdict), _claim_standing(verdict))
    else:
        sentences = (_basin_sentence(verdict), _bounds_sentence(verdict))
    return tuple(sentence for sentence in (partial_sentence(verdict), *sentences) if sentence)


def partial_sentence(verdict: Verdict) -> str:
    """What a partial sweep rests on; nothing for one that is done."""
    basin = verdict["basin"]
    if not basin or not basin["partial"]:
        return ""
    return f"Partial sweep: the first {basin['samples']:,} of {basin['samples_wanted']:,} starts (simulated)."


def next_steps(verdict: Verdict) -> tuple[str, ...]:
    """What can be done with this result, the most pressing first."""
    steps = [_AFTER_CLAIM[verdict["claim"]["result"]]] if verdict["claim"] else []
    counts = verdict["basin"]["counts"] if verdict["basin"] else {}
    if counts.get("unresolved"):
        steps.append("Some starts are unresolved: raise `longest` in [sweep], or follow one with `roa replay`.")
    if counts.get("failed"):
        steps.append("Some starts failed: follow one with `roa replay`; a pole or a stiff passage is likely.")
    if not verdict["claim"]:
        steps.append("To have a level judged, write `level` into [bound] and call `roa validate CONFIG`.")
    if verdict["basin"] and verdict["basin"]["partial"]:
        steps.append("The sweep is not complete: carry it on with `roa resume RUN`.")
    elif verdict["basin"] and len(verdict["basin"]["by_replicate"]["samples"]) > 1:  # a grid cannot be extended
        steps.append("For a narrower interval, extend the sweep: `roa resume RUN --samples N`.")
    return tuple(steps)


_AFTER_CLAIM = {
    "proved": "The claim may go into the operating envelope, within the cautions below.",
    "supported": "The claim is supported by samples alone: a proof would need another V or a smaller level.",
    "refuted": "Do not use the claim: lower the level, change V, or change the loop.",
    "not_settled": "Do not use the claim as it stands: the reason above says what is missing.",
}


def _basin_sentence(verdict: Verdict) -> str:
    basin = verdict["basin"]
    if not basin:
        return ""
    if basin.get("refusal"):
        return str(basin["refusal"])
    share = share_with_interval(basin["fraction"], tuple(basin["interval"]), basin["confidence"], "simulated")
    safe = basin.get("safe")
    within = "" if not safe else f", {percent(safe['fraction'], 2)} without crossing a limit on the way (simulated)"
    return f"The simulated basin fills {share} of the domain{within}."


def _bounds_sentence(verdict: Verdict) -> str:
    # The unfalsified level is no bound to rely on, but what the samples leave of V.
    bounds = [bound for bound in verdict["bounds"] if bound["name"] not in ("unfalsified level", "no-return set")]
    found = [bound for bound in bounds if bound["level"] > 0]
    if not found:
        return f"No bound above level zero was found for this V (estimated). {verdict['bounds_note']}".rstrip()
    if not verdict["basin"]:
        reached = [f"the {one['name']} ({one['strength']}) reaches level {level_text(one['level'])}" for one in found]
        return _capital(f"{in_a_row(reached)}.")
    measured = [one for one in found if one["volume_ratio"] is not None]
    if not measured:
        return "There is no simulated basin to compare the bounds with."
    covered = [
        f"the {one['name']} ({one['strength']}) covers {percent(one['volume_ratio'])}"
        f" by volume ({percent(one['radius_ratio'])} by radius)"
        for one in measured
    ]
    return f"Of this basin, as simulated, {in_a_row(covered)}."


def _claim_sentence(verdict: Verdict) -> str:
    claim = verdict["claim"]
    named = f"the claimed set V ≤ {claim['level']:.12g}"
    match claim["result"]:
        case "proved" if claim.get("inner"):
            return f"Proved: every start in {named} enters V ≤ {claim['inner']:.12g} and stays there{_varying(claim)}."
        case "proved":
            return f"Proved: every start in {named} converges."
        case "supported":
            upper = percent_upper(claim["nonconverging_fraction_upper"])
            confidence = confidence_text(claim["confidence"])
            return f"Supported, not proved: at {confidence} confidence at most {upper} of {named} does not converge."
        case "refuted" if claim["counterexample"]:
            found = claim["counterexample"]
            start = point_text(verdict["states"], found["initial"], verdict["units"])
            return f"Refuted: the start {start} lies in {named} and {_ENDED[found['outcome']]} (simulated)."
        case "refuted":
            return f"Refuted: {named} is no bound."
    if claim.get("inner"):
        return f"Not settled: whether {named} leads into V ≤ {claim['inner']:.12g}{_varying(claim)} is not proved."
    return f"Not settled: whether {named} lies in the basin is neither proved, supported nor refuted."


def _varying(claim: Mapping[str, Any]) -> str:
    """Under which disturbances the claim is meant."""
    each = [f"{name} in [{low:g}, {high:g}]" for name, (low, high) in claim["disturbance"].items()]
    return f", whatever {in_a_row(each)} does" if each else ""


_ENDED = {"escaped": "escapes", "settled_elsewhere": "comes to rest at another equilibrium"}


def _claim_standing(verdict: Verdict) -> str:
    claim = verdict["claim"]
    if claim["result"] == "proved" and claim.get("inner"):
        return str(claim["reason"])
    if claim["result"] == "proved":
        return _compared(verdict) or str(claim["reason"])
    if claim["result"] == "supported" and claim["decrease"] != "refuted":
        return _compared(verdict)
    if claim["counterexample"]:
        return "An independent integration at ten times tighter tolerance ends in the same way (simulated)."
    return str(claim["reason"])


def _compared(verdict: Verdict) -> str:
    volume, radius = (verdict["comparison"][key]["value"] for key in ("volume_ratio", "radius_ratio"))
    if volume is None:
        return ""
    return f"It covers {percent(volume)} of the simulated basin by volume, {percent(radius)} by radius (simulated)."


def _capital(text: str) -> str:
    return text[:1].upper() + text[1:]
