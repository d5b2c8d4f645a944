"""The text of `roa check`: what the loop is, where it rests, and what its sweep will cost."""

from __future__ import annotations

from dataclasses import asdict
from textwrap import wrap
from typing import Any

from roa.basin.reach import Reach
from roa.loop.equilibrium import eigenvalue_text
from roa.report.wording import number, percent, point_text
from roa.sweep.cost import Cost
from roa.sweep.plan import Plan


def soundness_document(plan: Plan, cost: Cost, reach: Reach | None, free: int) -> dict[str, Any]:
    """The findings as plain values; `free` is the disk in bytes where runs go by default."""
    loop, equilibrium = plan.configuration.loop, plan.equilibrium
    return {
        "title": loop.title,
        "states": list(loop.states),
        "units": list(loop.units),
        "domain": loop.box.tolist(),
        "equilibrium": equilibrium.x.tolist(),
        "eigenvalues": [[value.real, value.imag] for value in equilibrium.eigenvalues.tolist()],
        "stability": equilibrium.stability,
        "sampled": None if equilibrium.sampled is None else equilibrium.sampled.document,
        "target": plan.target.words,
        "integration": plan.choice.document,
        "elsewhere": plan.target.elsewhere.tolist(),
        "samples": cost.samples,
        "jobs": cost.jobs,
        "seconds": list(cost.seconds),
        "disk": cost.disk,
        "free": free,
        "claim": None if reach is None else asdict(reach),
        "steps": cost.steps,
        "shares": cost.shares,
        "strength": "estimated",
    }


def soundness_text(plan: Plan, cost: Cost, reach: Reach | None, free: int, source: str) -> str:
    """The findings for people."""
    loop, equilibrium = plan.configuration.loop, plan.equilibrium

    def at(x: Any) -> str:
        return point_text(loop.states, x, loop.units)

    box = [
        f"  {name:<12} {low:>10.6g} to {high:<10.6g} {unit}".rstrip()
        for name, (low, high), unit in zip(loop.states, loop.box, loop.units, strict=True)
    ]
    shares = ", ".join(f"{word} {percent(share)}" for word, share in cost.shares.items())
    low, high = cost.seconds
    lines = [
        f"Sound: {loop.title}",
        "",
        f"States {loop.n}, parameters {len(loop.parameters)}, signals {len(loop.signals)}; domain",
        *box,
        "",
        f"Equilibrium  {at(equilibrium.x)} (estimated)",
        *_stability(plan),
        *(f"Elsewhere    {at(x)} is another stable equilibrium (estimated)" for x in plan.target.elsewhere),
        f"Target set   {plan.target.words}",
        *wrap(f"Method       {plan.choice.method}: {plan.choice.why}", 80, subsequent_indent=" " * 13),
        "",
        f"Sweep        {cost.samples:,} starts with {cost.jobs} jobs",
        f"  time       {_seconds(low)} to {_seconds(high)} (estimated)",
        f"  disk       {cost.disk / 1e6:,.1f} MB at most, {free / 1e6:,.0f} MB are free (estimated)",
        f"  a start    {number(cost.steps, 3)} steps; {shares} (simulated)",
        *_claim(plan, reach),
        "",
        f"What next: `roa run {source}`",
    ]
    return "\n".join(lines) + "\n"


def _claim(plan: Plan, reach: Reach | None) -> list[str]:
    """What *supported* takes, and whether the claim seems within reach."""
    if reach is None:
        return []
    verdict = plan.configuration.verdict
    return [
        "",
        f"Claim        supported: {reach.draws:,} independent draws, none of which may fail",
        f"             ([verdict] fraction = {verdict.fraction:.9g}, confidence = {verdict.confidence:g})",
        *(line for obstacle in reach.obstacles for line in _wrapped(f"out of reach: {obstacle}")),
    ]


def _wrapped(sentence: str) -> list[str]:
    return wrap(sentence, 80, initial_indent="  ", subsequent_indent="    ")


def _stability(plan: Plan) -> list[str]:
    """Eigenvalues, or with a hold what decides in their place."""
    equilibrium, hold = plan.equilibrium, plan.configuration.loop.hold
    eigenvalues = f"Eigenvalues  {eigenvalue_text(equilibrium.eigenvalues)} 1/s"
    if equilibrium.sampled is None or hold is None:
        return [f"{eigenvalues} ({equilibrium.stability}, estimated)"]
    return [
        f"Hold         {hold.words}",
        f"One period   spectral radius {equilibrium.sampled.spectral_radius:.6g} ({equilibrium.stability}, estimated)",
        f"{eigenvalues} without the hold (estimated)",
    ]


def _seconds(seconds: float) -> str:
    if seconds < 120:
        return f"{number(seconds, 2)} s"
    return f"{number(seconds / 60, 2)} min" if seconds < 7200 else f"{number(seconds / 3600, 2)} h"
