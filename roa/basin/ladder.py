"""The bracket of the basin, proved from both sides, and the slack ladder: which rung costs most, what would help."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from itertools import pairwise
from typing import Any

from roa.bound.statement import OUTER, Strength

STEPS = {
    "contact level": ("the norm inequality", "use the contact level of the same V"),
    "best quadratic": ("the choice of P", "use the P of the best quadratic"),
    "best polynomial": ("the ellipse", "use the polynomial V"),
}
LAST = ("what is left to the simulated basin", "try a higher `degree` or more `boxes` in [bound]")


def bracket(
    bounds: Sequence[Mapping[str, Any]], basin: Mapping[str, Any] | None, domain: float
) -> dict[str, Any] | None:
    """Shares of the domain: proved to converge, proved not to, simulated; the gap split into its two sides.

    That the sets are what they are called is proved; their volumes are measured by samples or in floats, estimated.

    Parameters
    ----------
    bounds, basin : as in `verdict.json`
    domain : volume of the domain
    """
    inner = [
        one for one in bounds if one["strength"] == Strength.PROVED and one["name"] != OUTER and not one.get("inner")
    ]
    best = max(inner, key=lambda one: one["volume"] or 0.0, default=None)
    outer = next((one for one in bounds if one["name"] == OUTER and one["strength"] == Strength.PROVED), None)
    if best is None and outer is None:
        return None
    inside = 0.0 if best is None else best["volume"] / domain
    outside = 0.0 if outer is None else 1 - outer["volume"] / domain
    simulated = None if basin is None else basin["fraction"]
    return {
        "inside": {"bound": None if best is None else best["name"], "share": inside, "strength": Strength.PROVED},
        "outside": {"bound": None if outer is None else OUTER, "share": outside, "strength": Strength.PROVED},
        "share_strength": Strength.ESTIMATED,
        "simulated": simulated,
        "simulated_interval": None if basin is None else basin["interval"],
        "gap": 1 - inside - outside,
        "gap_inside": None if simulated is None else simulated - inside,
        "gap_outside": None if simulated is None else 1 - outside - simulated,
    }


def ladder(bounds: Sequence[Mapping[str, Any]], basin: Mapping[str, Any] | None) -> dict[str, Any] | None:
    """Each rung with level, volume, share of the basin and strength, and the sentence that says what costs most."""
    if basin is None:
        return None
    order = ("norm bound", "contact level", "unfalsified level", "best quadratic", "best polynomial")
    by_name = {one["name"]: one for one in bounds if one["volume_ratio"] is not None and not one.get("inner")}
    rungs = [_rung(by_name[name]) for name in order if name in by_name]
    rungs.append({"name": "simulated basin", "level": None, "volume": basin["volume"], "share": 1.0, "interval": None,
                  "strength": Strength.SIMULATED})  # fmt: skip
    if OUTER in by_name:
        rungs.append(_rung(by_name[OUTER]))
    return {"rungs": rungs, "costs_most": _costs_most(rungs)}


def _rung(one: Mapping[str, Any]) -> dict[str, Any]:
    return {
        "name": one["name"],
        "level": one["level"],
        "volume": one["volume"],
        "share": one["volume_ratio"],
        "interval": one["volume_ratio_interval"],
        "strength": one["strength"],
    }


def _costs_most(rungs: Sequence[Mapping[str, Any]]) -> str:
    """The largest step between neighbouring rungs from the norm bound to the simulated basin, and its remedy."""
    climbed = [rung for rung in rungs if rung["name"] in {"norm bound", *STEPS, "simulated basin"}]
    if len(climbed) < 2:
        return ""
    steps = [(above["share"] - below["share"], below, above) for below, above in pairwise(climbed)]
    _, below, above = max(steps, key=lambda step: step[0])
    cause, cure = STEPS.get(above["name"], LAST)
    return (
        f"The largest step, from the {below['name']} ({100 * below['share']:.1f} %) to the {above['name']} "
        f"({100 * above['share']:.1f} %), is {cause}: {cure}."
    )
