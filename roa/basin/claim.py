"""Judge a claim, that {V <= level} lies in the basin: prove it, break it, or say how far it is supported."""

from __future__ import annotations

import shlex
from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from decimal import ROUND_CEILING, Context, Decimal
from enum import StrEnum
from functools import cached_property
from math import sqrt
from typing import Any

import numpy as np
from numpy.typing import NDArray

from roa.basin.claimed_limits import LimitsOfSet, limits_of
from roa.basin.claimed_set import ClaimedSet
from roa.basin.counterexample import (
    REFUTING,
    Counterexample,
    Run,
    confirm,
    find_increase,
    find_not_positive,
    search,
    suspects_of,
)
from roa.basin.intervals import clopper_pearson_upper, success_run_samples
from roa.basin.ring_attempt import attempt_ring
from roa.bound.ball import ball_function, holds_ellipsoid
from roa.bound.bounds import Bounds
from roa.bound.invariance_proof import prove_by_invariance
from roa.bound.level_set_proof import LevelSetProver
from roa.bound.lyapunov_function import LyapunovFunction, Quadratic
from roa.bound.point_checks import positive_definite
from roa.bound.proved_contact_level import branch_and_bound, proof_budget, prover_of
from roa.bound.statement import Bound, Strength
from roa.kernel.branch_and_bound import Answer
from roa.kernel.integration import Integration
from roa.kernel.outcomes import Outcome
from roa.kernel.target import Target
from roa.kernel.trajectories import Trajectories
from roa.loop.configuration import Configuration

Array = NDArray[np.float64]

# Streams of random numbers, apart from each other and (by the first number) from those of the designs: points that
# helped to look for a counterexample never count as independent draws.
SEARCH_STREAM, DRAW_STREAM, DECREASE_STREAM, LIMITS_STREAM = (1, 0), (1, 1), (1, 2), (1, 3)


class Result(StrEnum):
    """What became of a claim; the words are a contract of `verdict.json`."""

    PROVED = "proved"
    SUPPORTED = "supported"
    REFUTED = "refuted"
    NOT_SETTLED = "not_settled"


class Decrease(StrEnum):
    """What is known of V̇ < 0 on the claimed set; the words are a contract of `verdict.json`."""

    PROVED = "proved"
    REFUTED = "refuted"
    UNDECIDED = "undecided"


@dataclass(frozen=True)
class Claim:
    """A judged claim.

    Attributes
    ----------
    result, decrease : see the enumerations
    reason : one sentence
    V, level : the set {V <= level}, its connected part that holds the equilibrium
    confidence, fraction : what *supported* asks for
    counterexample : where refuted by a trajectory
    replay : how to see the counterexample again, a command line
    witness : float64 (n,), a point of the set with V̇ > 0, where the decrease is refuted
    largest_level_inside : where the set leaves the domain or crosses a limit
    inner : where the claim is an ultimate bound: every trajectory from the set enters {V <= inner}, for good
    disturbances : name -> (low, high), however which varies the claim is meant
    witness_disturbance : name -> value, under which V̇ > 0 at the witness
    draws, failures : independent draws, and those of them that did not converge; 0 draws where none were needed
    nonconverging_fraction_upper : one-sided exact binomial limit from them
    """

    result: Result
    decrease: Decrease
    reason: str
    V: LyapunovFunction
    level: float
    confidence: float
    fraction: float
    counterexample: Counterexample | None = None
    replay: str | None = None
    witness: Array | None = None
    largest_level_inside: float | None = None
    inner: float | None = None
    disturbances: Mapping[str, tuple[float, float]] = field(default_factory=dict)
    witness_disturbance: Mapping[str, float] | None = None
    draws: int = 0
    failures: int = 0
    nonconverging_fraction_upper: float | None = None

    @property
    def strength(self) -> Strength:
        """Strength of the claim as a bound: one that is not settled or refuted stands on nothing but the paper."""
        by_result = {Result.PROVED: Strength.PROVED, Result.SUPPORTED: Strength.SUPPORTED}
        return by_result.get(self.result, Strength.ESTIMATED)

    @property
    def bound(self) -> Bound:
        """The claim as a bound, to be compared with the basin."""
        return Bound("claim", self.V, self.level, self.strength, self.reason, inner=self.inner)


def judge(
    configuration: Configuration,
    bounds: Bounds,
    target: Target,
    integration: Integration,
    run: Run,
    seed: int,
) -> Claim:
    """Judge the claimed level of the configuration; equal arguments give equal answers.

    Parameters
    ----------
    configuration : with a level in its table [bound]
    bounds : those derived for the same V; a proved one of them may settle the claim
    target, integration : rules of the outcomes
    run : the lanes, starts float64 (m, n) -> Trajectories
    seed : of the searches and draws
    """
    level = configuration.bound.claimed_level
    assert level is not None
    ball = configuration.bound.ball is not None
    V = ball_function(bounds.V, configuration.bound.scale) if ball else bounds.V
    case = _Case(configuration, ClaimedSet(V, _at_most(level)), target, integration, run, seed, level)
    if ball and not configuration.loop.disturbances:
        return _leaves_the_domain(case) or _crosses_a_limit(case) or _proved_ball(case, bounds) or _by_simulation(case)
    if configuration.bound.inner is not None or configuration.loop.disturbances:
        return (
            _not_positive_definite(case)
            or _leaves_the_domain(case)
            or _crosses_a_limit(case)
            or _ultimately(case, level)
        )
    return (
        _not_positive_definite(case)
        or _leaves_the_domain(case)
        or _crosses_a_limit(case)
        or _proved(case, level, bounds)
        or _proved_by_invariance(case, level)
        or _by_simulation(case)
    )


@dataclass(frozen=True)
class _Case:
    """What every step of the judgement needs."""

    configuration: Configuration
    claimed: ClaimedSet
    target: Target
    integration: Integration
    run: Run
    seed: int
    level: Decimal

    def stream(self, key: tuple[int, ...]) -> np.random.Generator:
        return np.random.default_rng(np.random.SeedSequence(self.seed, spawn_key=key))

    @cached_property
    def witness(self) -> Array | None:
        """A point of the set with V̇ > 0, if one was found.

        With a hold: a start after which V is greater one period later. Not looked for where a ring is claimed, nor
        for a ball with a hold.
        """
        table = self.configuration.bound
        if table.inner is not None or (table.ball is not None and self.configuration.loop.hold is not None):
            return None
        return find_increase(self.claimed, self.stream(DECREASE_STREAM))

    @cached_property
    def limits(self) -> LimitsOfSet:
        """What is known of the limits on the set."""
        return limits_of(self.claimed, self.level, self.stream(LIMITS_STREAM))

    @property
    def decrease(self) -> Decrease:
        return Decrease.UNDECIDED if self.witness is None else Decrease.REFUTED

    def judged(self, result: Result, decrease: Decrease, reason: str, **more: Any) -> Claim:
        verdict, table, loop = self.configuration.verdict, self.configuration.bound, self.configuration.loop
        return Claim(
            result, decrease, reason, self.claimed.V, float(self.level), verdict.confidence, verdict.fraction,
            inner=None if table.inner is None else float(table.inner),
            disturbances={name: (float(low), float(high)) for name, (low, high) in loop.disturbances.items()},
            **more,
        )  # fmt: skip

    def refuted(self, found: Counterexample) -> Claim:
        ending = "came to rest at another equilibrium"
        if found.decision.outcome is Outcome.ESCAPED:
            size = self.integration.escape
            ending = f"left the escape box (the domain {size:g} times as large, `escape` in [sweep]), or blew up"
        reason = (
            f"A start inside the claimed set, with V = {found.V:.6g}, {ending}, and so it does when it is integrated "
            f"by {found.decision.method} at ten times tighter tolerance."
        )
        replay = replay_command(self.configuration, found.initial)
        witness = self.witness
        return self.judged(Result.REFUTED, self.decrease, reason, counterexample=found, replay=replay, witness=witness)


def _at_most(level: Decimal) -> float:
    """The largest float that does not exceed the level: what lies in its set lies in the claimed one."""
    nearest = float(level)
    return nearest if Decimal(nearest) <= level else float(np.nextafter(nearest, 0.0))


def replay_command(configuration: Configuration, start: Array) -> str:
    """The command line that integrates a start, float64 (n,), again: every digit of it, since it is stored nowhere."""
    text = ",".join(f"{name}={float(x)!r}" for name, x in zip(configuration.loop.states, start, strict=True))
    return f"roa replay {shlex.quote(configuration.source)} --from {shlex.quote(text)}"


def _not_positive_definite(case: _Case) -> Claim | None:
    V = case.claimed.V
    if isinstance(V, Quadratic):
        definite = positive_definite(V.enclosed_P)
        if definite == "proved":
            return None
        smallest = float(np.linalg.eigvalsh(V.P).min())
        if definite == "refuted":
            reason = f"P is not positive definite: its smallest eigenvalue is {smallest:.6g}."
            return case.judged(Result.REFUTED, Decrease.UNDECIDED, reason)
        reason = f"Rounding leaves open whether P is positive definite: its smallest eigenvalue is near {smallest:.3g}."
        return case.judged(Result.NOT_SETTLED, Decrease.UNDECIDED, reason)
    lowest = find_not_positive(case.claimed, case.stream(DECREASE_STREAM))
    if lowest is None:
        return None
    point = ", ".join(f"{name} = {x:.6g}" for name, x in zip(case.configuration.loop.states, lowest, strict=True))
    reason = f"V is not positive definite: it is not above zero at {point}, inside the claimed set."
    return case.judged(Result.REFUTED, Decrease.UNDECIDED, reason)


def _leaves_the_domain(case: _Case) -> Claim | None:
    claimed = case.claimed
    if claimed.is_inside:
        return None
    largest = claimed.largest_level_inside
    what = f"level of this V that stays inside is {largest:.6g}"
    if case.configuration.bound.ball is not None:
        what = f"radius that stays inside is {sqrt(largest):.6g}"
    reason = f"The claimed set leaves the domain; the largest {what}."
    if case.limits.largest_level is not None and case.limits.largest_level < largest:
        largest = case.limits.largest_level
        reason = f"The claimed set leaves the domain and the limits; up to level {largest:.6g} it stays within both."
    return case.judged(Result.NOT_SETTLED, case.decrease, reason, witness=case.witness, largest_level_inside=largest)


def _crosses_a_limit(case: _Case) -> Claim | None:
    limits = case.limits
    if not limits.crossed:
        return None
    reason = f"The claimed set crosses the limit on {' and '.join(limits.crossed)}"
    if limits.largest_level is not None:
        shown = "proved to stay" if limits.is_proved else "estimated to stay"
        reason += f"; the largest level of this V that is {shown} within the limits is {limits.largest_level:.6g}"
    return case.judged(
        Result.NOT_SETTLED,
        case.decrease,
        f"{reason}.",
        witness=case.witness,
        largest_level_inside=limits.largest_level,
    )


def _proved(case: _Case, level: Decimal, bounds: Bounds) -> Claim | None:
    """Prove the claim by a bound that is proved already, or by branch and bound at the very level."""
    if not case.limits.kept:
        return None
    for bound in bounds.stated:
        same = bound.V is case.claimed.V and bound.inner is None
        if same and bound.strength is Strength.PROVED and level <= Decimal(bound.level):
            reason = f"The level is at most that of the {bound.name}, {bound.level:.6g}: {bound.note or 'V̇ < 0 there'}."
            return case.judged(Result.PROVED, _proved_decrease(case.claimed.V), reason)
    V, contact = case.claimed.V, bounds.named("contact level")
    # Above the estimate, which errs upwards only, there are points with V̇ >= 0 and no proof to be had.
    if contact is None or level > Decimal(contact.level_estimated or contact.level):
        return None
    prover = prover_of(V)
    if not prover.is_ready:
        return None
    proof = prover.prove(level, proof_budget(prover))
    if proof.answer is not Answer.PROVED:
        return None
    reason = f"{branch_and_bound(V, proof)} on the whole claimed set, which lies inside the domain."
    return case.judged(Result.PROVED, Decrease.PROVED, reason)


def _proved_ball(case: _Case, bounds: Bounds) -> Claim | None:
    """Prove a claimed ball by a proved set that holds it, or by V = the squared distance itself."""
    V = case.claimed.V
    assert isinstance(V, Quadratic)
    loop = case.configuration.loop
    for bound in bounds.stated if not loop.limits else ():  # the set may cross a limit that the ball does not
        proved = bound.strength is Strength.PROVED and bound.inner is None
        if proved and isinstance(bound.V, Quadratic) and holds_ellipsoid(bound.V, bound.level, V, case.level):
            reason = f"The ball lies in the set of the {bound.name}, V <= {bound.level:.6g}, whose proof holds for it: "
            return case.judged(Result.PROVED, Decrease.PROVED, f"{reason}{bound.note or 'V̇ < 0 there'}.")
    if loop.hold is not None or case.witness is not None or not case.limits.kept:
        return None
    prover = prover_of(V)
    proof = prover.prove(case.level, proof_budget(prover)) if prover.is_ready else None
    if proof is None or proof.answer is not Answer.PROVED:
        return None
    reason = f"With the squared distance from the equilibrium as V, {branch_and_bound(V, proof)} on the whole ball."
    return case.judged(Result.PROVED, _proved_decrease(V), reason)


def _proved_decrease(V: LyapunovFunction) -> Decrease:
    """What the proof of a level says of V̇ < 0: of a formula it may leave out an ellipsoid that another V proves."""
    prover = prover_of(V)
    return Decrease.UNDECIDED if isinstance(prover, LevelSetProver) and not prover.is_exact else Decrease.PROVED


def _proved_by_invariance(case: _Case, level: Decimal) -> Claim | None:
    """Prove a claim of which only V̇ <= 0 is true; the decrease stays undecided, since V̇ < 0 is not what is proved."""
    if case.witness is not None or not case.limits.kept:
        return None
    proof = prove_by_invariance(case.claimed.V, level)
    return case.judged(Result.PROVED, Decrease.UNDECIDED, f"{proof.reason}.") if proof.is_proved else None


def _ultimately(case: _Case, level: Decimal) -> Claim:
    """Judge a claim that is meant for every disturbance, or only promises a residual set."""
    loop, inner = case.configuration.loop, case.configuration.bound.inner
    attempt = attempt_ring(case.claimed.V, inner, level)
    decrease, reason = Decrease(attempt.decrease), attempt.reason
    if decrease is Decrease.PROVED and case.limits.kept:
        return case.judged(Result.PROVED, decrease, reason)
    if not case.limits.kept:
        reason += " That the set stays within the limits is not proved."
    found_by_proof: dict[str, Any] = {"witness": attempt.witness, "witness_disturbance": attempt.disturbance}
    if not loop.disturbances and case.target.residual:
        claim = _by_simulation(case)
        return replace(claim, decrease=decrease, **found_by_proof, reason=f"{claim.reason} {reason}")
    # The nominal trajectory is one of those that the claim is about: if it escapes, the claim is wrong. Where the
    # residual set is no target, rest inside it is no failure.
    refuting = REFUTING if inner is None else (Outcome.ESCAPED,)
    suspects = search(case.claimed, case.run, case.stream(SEARCH_STREAM), refuting)
    found = confirm(case.claimed, suspects, case.target, case.integration, refuting)
    if found is not None:
        return replace(case.refuted(found), decrease=decrease, **found_by_proof)
    if loop.disturbances:
        reason += " A disturbance is not simulated, so that nothing but a proof could support the claim."
    return case.judged(Result.NOT_SETTLED, decrease, reason, **found_by_proof)


def _by_simulation(case: _Case) -> Claim:
    suspects = search(case.claimed, case.run, case.stream(SEARCH_STREAM))
    found = confirm(case.claimed, suspects, case.target, case.integration)
    if found is not None:
        return case.refuted(found)
    verdict = case.configuration.verdict
    starts = case.claimed.draw(success_run_samples(verdict.fraction, verdict.confidence), case.stream(DRAW_STREAM))
    if starts is None:
        reason = "No counterexample was found, and the set is too small a part of the domain to be drawn from."
        return case.judged(Result.NOT_SETTLED, case.decrease, reason, witness=case.witness)
    if not case.claimed.are_joined(starts):
        reason = (
            "No counterexample was found, but parts of {V <= level} cannot be joined to the equilibrium by straight "
            "lines inside it, so that no uniform draws from its connected part can be had."
        )
        return case.judged(Result.NOT_SETTLED, case.decrease, reason, witness=case.witness)
    trajectories = case.run(starts)
    found = confirm(case.claimed, suspects_of(case.claimed, trajectories), case.target, case.integration)
    return case.refuted(found) if found is not None else _by_draws(case, trajectories)


def _by_draws(case: _Case, trajectories: Trajectories) -> Claim:
    """Supported or not settled, by independent draws of which none is a confirmed counterexample."""
    verdict = case.configuration.verdict
    draws = len(trajectories)
    failures = int(np.sum(trajectories.outcome != Outcome.CONVERGED))
    upper = clopper_pearson_upper(failures, draws, verdict.confidence)
    supported = upper <= 1 - verdict.fraction
    against = "all converged" if not failures else f"{failures} did not converge ({_by_outcome(trajectories)})"
    reason = (
        f"Of {draws} independent draws from the claimed set {against}, so at most {_percent_up(upper)} of it does not, "
        f"at {100 * verdict.confidence:g} % confidence"
    )
    if not supported:
        reason += f", where {_percent_up(1 - verdict.fraction)} is allowed"
    if not case.limits.kept:
        reason += "; that the set stays within the limits is not proved"
    if case.decrease is Decrease.REFUTED:
        grows = "V̇ > 0" if case.configuration.loop.hold is None else "V grows over a period"
        reason += f"; {grows} at a point of the set, so the set may be safe but the argument for it is wrong"
    return case.judged(
        Result.SUPPORTED if supported else Result.NOT_SETTLED,
        case.decrease,
        f"{reason}.",
        witness=case.witness,
        draws=draws,
        failures=failures,
        nonconverging_fraction_upper=upper,
    )


def _percent_up(share: float) -> str:
    """A share in per cent to three digits, rounded up; twelve digits first, so that 1 - 0.999 is 0.1 %."""
    exact = Context(prec=12).create_decimal(Decimal(100 * share))
    return f"{float(Context(prec=3, rounding=ROUND_CEILING).plus(exact)):g} %"


def _by_outcome(trajectories: Trajectories) -> str:
    counts = np.bincount(trajectories.outcome, minlength=len(Outcome))
    others = [f"{counts[outcome]} {outcome.word}" for outcome in Outcome if outcome is not Outcome.CONVERGED]
    return ", ".join(text for text in others if not text.startswith("0 "))
