"""The text of `roa check`: what the loop is, where it rests, and what its sweep will cost."""

from __future__ import annotations

from typing import Any

from roa.loop.equilibrium import eigenvalue_text
from roa.report.wording import number, percent
from roa.sweep.cost import Cost
from roa.sweep.plan import Plan


def soundness_document(plan: Plan, cost: Cost) -> dict[str, Any]:
    """The findings as plain values."""
    loop, equilibrium = plan.configuration.loop, plan.equilibrium
    return {
        "title": loop.title,
        "states": list(loop.states),
        "units": list(loop.units),
        "domain": loop.box.tolist(),
        "equilibrium": equilibrium.x.tolist(),
        "eigenvalues": [[value.real, value.imag] for value in equilibrium.eigenvalues.tolist()],
        "stability": equilibrium.stability,
        "target": plan.target.words,
        "elsewhere": plan.target.elsewhere.tolist(),
        "samples": cost.samples,
        "jobs": cost.jobs,
        "seconds": list(cost.seconds),
        "disk": cost.disk,
        "steps": cost.steps,
        "shares": cost.shares,
        "strength": "estimated",
    }


def soundness_text(plan: Plan, cost: Cost, source: str) -> str:
    """The findings for people."""
    loop, equilibrium = plan.configuration.loop, plan.equilibrium
    rest = ", ".join(
        f"{name} = {value:.6g} {unit}".rstrip()
        for name, value, unit in zip(loop.states, equilibrium.x, loop.units, strict=True)
    )
    box = [
        f"  {name:<12} {low:>10.6g} to {high:<10.6g} {unit}".rstrip()
        for name, (low, high), unit in zip(loop.states, loop.box, loop.units, strict=True)
    ]
    shares = ", ".join(f"{word} {percent(share)}" for word, share in cost.shares.items())
    low, high = cost.seconds
    lines = [
        f"Sound: {loop.title}",
        "",
        f"{loop.n} states, {len(loop.parameters)} parameters, {len(loop.signals)} signals; domain",
        *box,
        "",
        f"Equilibrium  {rest}",
        f"Eigenvalues  {eigenvalue_text(equilibrium.eigenvalues)} 1/s ({equilibrium.stability})",
        *(f"Elsewhere    {_point(point)} is another stable equilibrium" for point in plan.target.elsewhere),
        f"Target set   {plan.target.words}",
        "",
        f"Sweep        {cost.samples:,} starts with {cost.jobs} jobs",
        f"  time       {_seconds(low)} to {_seconds(high)} (estimated)",
        f"  disk       {cost.disk / 1e6:,.1f} MB at most (estimated)",
        f"  a start    {number(cost.steps, 3)} steps; {shares} (simulated, pilot)",
        "",
        f"What next: `roa run {source}`",
    ]
    return "\n".join(lines) + "\n"


def _point(point: Any) -> str:
    return "(" + ", ".join(f"{value:.6g}" for value in point) + ")"


def _seconds(seconds: float) -> str:
    if seconds < 120:
        return f"{number(seconds, 2)} s"
    return f"{number(seconds / 60, 2)} min" if seconds < 7200 else f"{number(seconds / 3600, 2)} h"
