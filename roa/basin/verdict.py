"""The verdict: everything that was concluded, with its strength, as the nested values of `verdict.json`."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np

from roa.basin.cautions import cautions
from roa.basin.certificate import certificate
from roa.basin.claim import Claim, Result
from roa.basin.comparison import Comparison, Ratio, compare
from roa.basin.findings import NOTHING_FOUND, Findings
from roa.basin.goal import goal_of, looks_of
from roa.basin.intervals import Interval
from roa.basin.ladder import bracket, ladder
from roa.basin.levels import Levels, by_level
from roa.basin.sensitivity import Sensitivity
from roa.basin.share import Share
from roa.basin.size import Basin, measure
from roa.bound.bounds import Bounds
from roa.bound.lyapunov_function import Quadratic
from roa.bound.statement import OUTER, Bound, Strength
from roa.bound.volume import volume_of
from roa.kernel.target import Target
from roa.loop.configuration import Configuration
from roa.loop.equilibrium import Equilibrium
from roa.sweep.samples import Samples

EXIT_CODES = {Result.PROVED: 0, Result.REFUTED: 1, Result.NOT_SETTLED: 3}


def exit_code(claim: Claim | None, accept: str) -> int:
    """Exit code of a verdict: 0 where there is no claim, or where it reached what `accept` asks for."""
    if claim is None:
        return 0
    if claim.result is Result.SUPPORTED:
        return 0 if accept == "supported" else 3
    return EXIT_CODES[claim.result]


def conclude(
    configuration: Configuration,
    equilibrium: Equilibrium,
    bounds: Bounds,
    provenance: Mapping[str, Any],
    target: Target | None = None,
    samples: Samples | None = None,
    claim: Claim | None = None,
    integration: Mapping[str, str] | None = None,
    findings: Findings | None = None,
    sensitive: Sensitivity | None = None,
) -> dict[str, Any]:
    """Measure what the samples say, put it beside bounds and claim, and return the verdict.

    Keys are those of `verdict.json`; what a command did not look at is null. Every group of numbers has a
    `strength`. Floats are finite, or null.

    Parameters
    ----------
    configuration, equilibrium, bounds : of the loop
    provenance : as made by `roa.basin.provenance`
    target : what entering meant, where something was simulated
    samples : of the sweep, if there was one
    claim : judged, if one was
    integration : method and why this one, where something was simulated
    findings : what was looked for beside the sweep, if it was
    sensitive : how many outcomes hang on the tolerance, where that was tried
    """
    confidence = configuration.verdict.confidence
    basin = levels = None
    stated = list(bounds.stated)
    comparisons: Sequence[Comparison] = ()
    if samples is not None:
        looks = looks_of(configuration.sweep, samples)
        basin = measure(samples, configuration.loop, confidence, equilibrium.x, looks)
        levels = by_level(samples, bounds.V, confidence)
        unfalsified = levels.bound if findings is None else findings.lower(levels.bound, bounds.V)
        stated += [unfalsified] if unfalsified else []
    stated += bounds.searched
    if samples is not None and basin is not None:
        comparisons = compare([*stated, *([claim.bound] if claim else [])], basin, samples)
    by_name = {comparison.bound.name: comparison for comparison in comparisons}
    loop = configuration.loop
    verdict: dict[str, Any] = {
        "title": loop.title,
        "states": loop.states,
        "units": loop.units,
        "domain": loop.box,
        "limits": {name: [float(low), float(high)] for name, (low, high) in loop.limits.items()},
        "equilibrium": equilibrium.x,
        "eigenvalues": [[value.real, value.imag] for value in equilibrium.eigenvalues],
        "stability": equilibrium.stability,
        "sampled": None if equilibrium.sampled is None else equilibrium.sampled.document,
        "confidence": confidence,
        "claim": None if claim is None else _claim(claim),
        "bounds": [_bound(bound, by_name.get(bound.name)) for bound in stated],
        "bounds_note": bounds.note,
        "basin": None if basin is None else _basin(basin) | {"goal": goal_of(configuration.sweep, basin)},
        "comparison": _comparison(stated, claim, by_name),
        **(NOTHING_FOUND if findings is None else findings.document(configuration)),
        "bracket": None,
        "ladder": None,
        "certificate": certificate(configuration, bounds, claim),
        "levels": [] if levels is None else _levels(levels),
        "target": None if target is None else target.words,
        "integration": integration,
        "sensitivity": None if sensitive is None else _sensitivity(sensitive),
        "cautions": cautions(configuration, equilibrium, target, basin),
        "provenance": provenance,
    }
    verdict["bracket"] = bracket(verdict["bounds"], verdict["basin"], loop.domain_volume)
    verdict["ladder"] = ladder(verdict["bounds"], verdict["basin"])
    plain: dict[str, Any] = _plain(verdict)
    return plain


def _sensitivity(sensitive: Sensitivity) -> dict[str, Any]:
    return {
        "tried": sensitive.tried,
        "changed": sensitive.changed,
        "changes": sensitive.changes,
        "first": sensitive.first,
        "share_upper": sensitive.upper,
        "strength": Strength.SIMULATED,
    }


def _claim(claim: Claim) -> dict[str, Any]:
    found = claim.counterexample
    return {
        "result": claim.result,
        "decrease": claim.decrease,
        "reason": claim.reason,
        "level": claim.level,
        "strength": claim.strength,
        **_function(claim.bound),
        "counterexample": None
        if found is None
        else {
            "initial": found.initial,
            "V": found.V,
            "outcome": found.decision.outcome.word,
            "time": found.decision.time,
            "replay": claim.replay,
            "strength": Strength.SIMULATED,
        },
        "witness": claim.witness,
        "witness_disturbance": claim.witness_disturbance,
        "inner": claim.inner,
        "disturbance": claim.disturbances,
        "largest_level_inside": claim.largest_level_inside,
        "nonconverging_fraction_upper": claim.nonconverging_fraction_upper,
        "confidence": claim.confidence,
        "fraction": claim.fraction,
        "draws": claim.draws,
        "failures": claim.failures,
    }


def _bound(bound: Bound, comparison: Comparison | None) -> dict[str, Any]:
    return {
        "name": bound.name,
        "level": bound.level,
        "level_estimated": bound.level_estimated,
        "inner": bound.inner,
        "strength": bound.strength,
        "note": bound.note,
        **_function(bound),
        "volume": volume_of(bound) if comparison is None else comparison.volume,
        "volume_interval": _ends(None if comparison is None else comparison.volume_interval),
        "volume_strength": Strength.ESTIMATED,
        **_ratios_flat(comparison),
    }


def _function(bound: Bound) -> dict[str, Any]:
    return {"P": bound.V.P} if isinstance(bound.V, Quadratic) else {"V": bound.V.text}


def _ratios_flat(comparison: Comparison | None) -> dict[str, Any]:
    ratios = {
        "volume_ratio": None if comparison is None else comparison.volume_ratio,
        "radius_ratio": None if comparison is None else comparison.radius_ratio,
    }
    flat: dict[str, Any] = {name: None if ratio is None else ratio.value for name, ratio in ratios.items()}
    flat |= {f"{name}_interval": _ends(None if ratio is None else ratio.interval) for name, ratio in ratios.items()}
    return flat | {"ratio_strength": Strength.SIMULATED}


def _basin(basin: Basin) -> dict[str, Any]:
    return {
        "fraction": basin.fraction,
        "interval": None if basin.refusal else _ends(basin.interval),
        "refusal": basin.refusal,
        "interval_method": basin.interval.method,
        "confidence": basin.confidence,
        "volume": basin.volume,
        "volume_interval": None if basin.refusal else _ends(basin.volume_interval),
        "volume_unit": " · ".join(unit or "1" for unit in basin.loop.units),
        "samples": basin.samples,
        "samples_wanted": basin.wanted,
        "partial": basin.partial,
        "counts": basin.counts,
        "count_intervals": {word: _ends(interval) for word, interval in basin.outcome_intervals.items()},
        "reasons": basin.reasons,
        "by_replicate": dict(zip(("converged", "samples"), basin.share.by_replicate, strict=True)),
        "safe": None if basin.safe is None else _safe(basin, basin.safe),
        "strength": Strength.SIMULATED,
    }


def _safe(basin: Basin, safe: Share) -> dict[str, Any]:
    """What converges without crossing a limit."""
    interval = safe.interval(basin.loop.n, basin.confidence)
    return {
        "fraction": safe.fraction,
        "interval": _ends(interval),
        "volume": safe.fraction * basin.loop.domain_volume,
        "volume_interval": _ends(interval.scaled(basin.loop.domain_volume)),
        "by_replicate": dict(zip(("converged", "samples"), safe.by_replicate, strict=True)),
        "strength": Strength.SIMULATED,
    }


def _comparison(stated: Sequence[Bound], claim: Claim | None, by_name: Mapping[str, Comparison]) -> dict[str, Any]:
    """Return the claim beside the basin, or else the proved bound of the largest volume."""
    # An ultimate bound says nothing of convergence, unless the sweep's target is its inner set: then it is the claim.
    proved = [
        by_name[bound.name]
        for bound in stated
        if bound.strength is Strength.PROVED and bound.inner is None and bound.name in by_name and bound.name != OUTER
    ]
    compared = by_name.get("claim") if claim else max(proved, key=lambda one: one.volume, default=None)
    return {
        "bound": None if compared is None else compared.bound.name,
        "volume_ratio": _ratio(None if compared is None else compared.volume_ratio),
        "radius_ratio": _ratio(None if compared is None else compared.radius_ratio),
        "strength": Strength.SIMULATED,
    }


def _ratio(ratio: Ratio | None) -> dict[str, Any]:
    """Value and interval; both null where there is nothing to compare."""
    if ratio is None:
        return {"value": None, "interval": None}
    return {"value": ratio.value, "interval": _ends(ratio.interval)}


def _levels(levels: Levels) -> list[dict[str, Any]]:
    return [
        {
            "low": shell.low,
            "high": shell.high,
            "samples": shell.samples,
            "converged": shell.converged,
            "share": shell.converged / shell.samples if shell.samples else None,
            "interval": _ends(shell.interval),
            "strength": Strength.SIMULATED,
        }
        for shell in levels.shells
    ]


def _ends(interval: Interval | None) -> list[float] | None:
    return None if interval is None else [interval.low, interval.high]


def _plain(value: Any) -> Any:
    """Reduce to what JSON holds: arrays to lists, numbers to Python's own, what is not finite to None."""
    match value:
        case Mapping():
            return {str(key): _plain(item) for key, item in value.items()}
        case np.ndarray() | list() | tuple():
            return [_plain(item) for item in value]
        case bool() | None:
            return value
        case str():
            return str(value)
        case int() | np.integer():
            return int(value)
        case float() | np.floating():
            return float(value) if math.isfinite(value) else None
    raise TypeError(f"{type(value).__name__} has no place in a verdict")
