"""One trajectory at a time by scipy's DOP853 or Radau: nothing in common with the lanes but the formulas.

The rules for outcomes are those of the sweep, written a second time on purpose, so that an error in one of the two
shows as a disagreement. Between accepted steps the interpolant is looked at too: at order 8 a step can leave the
escape box and come back. A loop with a hold is integrated from instant to instant of its controller.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, Protocol

import numpy as np
from numpy.typing import NDArray
from scipy.integrate import DOP853, OdeSolver, Radau

from roa.basin.controller import Controller, Frozen
from roa.kernel.integration import Integration
from roa.kernel.outcomes import Outcome, Reason
from roa.kernel.target import Target
from roa.loop.equilibrium import find_equilibrium
from roa.loop.model import Loop

Array = NDArray[np.float64]

# DOP853 is left for Radau where stability alone, steps of about 6/|λ|, would ask for some thousands of steps.
STIFF = 3e4
# Accepted steps after which DOP853 gives way to Radau, which starts afresh and has the whole step cap.
EXPLICIT_STEP_CAP = 20_000
# scipy accepts no smaller relative tolerance.
SMALLEST_RTOL = 100 * np.finfo(float).eps
# Pictures end where the default escape box does.
PICTURE_ESCAPE = 10.0
# Where inside a step the rules are tried, as parts of the step.
LOOKS = (0.25, 0.5, 0.75, 1.0)


class Flow(Protocol):
    """x' = f(x): a loop, or the plant of one between two instants of its controller."""

    def rhs(self, x: Array) -> Array:
        """f at the point x, float64 (n,)."""
        ...

    def jacobian(self, x: Array) -> Array:
        """Its slopes there, float64 (n, n)."""
        ...


@dataclass(frozen=True)
class Decision:
    """How one trajectory ended.

    Attributes
    ----------
    outcome, reason : as in the store
    time : s to the decision
    final : float64 (n,), state at that time
    peak : float64 (n,), largest |x - equilibrium| per state up to that time
    steps : accepted steps up to that time
    method : "DOP853" or "Radau"
    """

    outcome: Outcome
    reason: Reason
    time: float
    final: Array
    peak: Array
    steps: int
    method: str


@dataclass
class _Moment:
    """A moment of a trajectory, and how far it is from the centre of the ball that it enters."""

    time: float
    final: Array
    peak: Array
    steps: int
    distance: float = 0.0


class _Watch:
    """The rules of the outcomes, fed with one point of a trajectory after the other."""

    def __init__(self, loop: Loop, target: Target, integration: Integration) -> None:
        self.target = target
        self.low, self.high = _escape_box(loop, integration.escape)
        self.peak = np.zeros(loop.n)
        self.loop = loop
        self.held: dict[str, float] | None = None  # commands that act, where there is a hold
        self.over_limit = False
        centres = [] if target.kind == "level" else [(target.centre, Outcome.CONVERGED)]
        centres += [(centre, Outcome.SETTLED_ELSEWHERE) for centre in target.elsewhere]
        self.balls = centres
        self.entries: list[_Moment | None] = [None] * len(centres)

    def look(self, time: float, x: Array, steps: int, entry: bool = True) -> tuple[Outcome, _Moment] | None:
        """Return the outcome with the moment that counts, or None while undecided.

        `entry` says whether sets may be entered now; with a hold they are at sampling instants alone.
        """
        offset = x - self.target.centre
        self.peak = np.maximum(self.peak, np.abs(offset))
        self.over_limit |= not self.loop.within_limits(x, self.held)
        now = _Moment(time, x, self.peak, steps)
        if entry and self.target.P is not None and offset @ self.target.P @ offset <= self.target.level:
            return self._converged, now
        for i, (centre, outcome) in enumerate(self.balls if entry else []):
            distance = float(np.linalg.norm((x - centre) / self.target.half_widths))
            since = self.entries[i]
            if distance > self.target.radius:
                self.entries[i] = None
            elif since is None:
                self.entries[i] = _Moment(time, x, self.peak, steps, distance)
            elif time - since.time >= self.target.dwell:
                if distance <= since.distance / 2:
                    return (self._converged if outcome is Outcome.CONVERGED else outcome), since
                self.entries[i] = _Moment(time, x, self.peak, steps, distance)  # too slow: the dwell starts again
        if np.any(x < self.low) or np.any(x > self.high):
            return Outcome.ESCAPED, now
        return None

    @property
    def _converged(self) -> Outcome:
        return Outcome.CONVERGED_OVER_LIMIT if self.over_limit else Outcome.CONVERGED


def decide(loop: Loop, target: Target, integration: Integration, start: Array, rtol: float, atol: float) -> Decision:
    """Integrate one start until its outcome is decided; numerical trouble is an outcome, never an exception.

    Parameters
    ----------
    start : float64 (n,), state units
    rtol, atol : tolerances of the local error, in place of those of `integration`
    """
    decision = None
    for method in _methods(loop, target.centre, integration.horizon):
        # With a hold every period takes a step of its own, which says nothing about stiffness.
        explicit_cap = integration.step_cap if loop.hold else min(EXPLICIT_STEP_CAP, integration.step_cap)
        cap = integration.step_cap if method is Radau else explicit_cap
        decision = _integrate(method, loop, target, integration, start, (rtol, atol), cap)
        if decision.outcome is not Outcome.FAILED:
            break
    assert decision is not None
    return decision


def path(loop: Loop, start: Array, duration: float, points: int, escape: float = PICTURE_ESCAPE) -> tuple[Array, Array]:
    """Follow one start for a picture.

    Parameters
    ----------
    start : float64 (n,), state units
    duration : s
    points : evenly spaced in time over what could be integrated
    escape : the path ends outside a box of so many domain sizes

    Returns
    -------
    times : float64 (points,), s; ends before `duration` where the trajectory leaves the box or blows up
    states : float64 (points, n), state units
    """
    start = np.array(start, dtype=float)
    low, high = _escape_box(loop, escape)
    pieces: list[Any] = []
    for method in _methods(loop, start, duration):
        pieces, complete = _pieces(method, loop, start, duration, low, high)
        if complete:
            break
    if not pieces:
        return np.zeros(1), start[None]
    times = np.linspace(0.0, pieces[-1].t, points)
    which = np.searchsorted([piece.t for piece in pieces], times)
    return times, np.array([pieces[i](time) for i, time in zip(which, times, strict=True)])


def _pieces(
    method: type[OdeSolver], loop: Loop, start: Array, duration: float, low: Array, high: Array
) -> tuple[list[Any], bool]:
    """Step to the end, or out of the box; say whether it got there."""
    pieces: list[Any] = []
    controller = Controller(loop, _rest(loop), start) if loop.hold else None
    time, x = 0.0, start
    while time < duration:
        end = min(controller.next_instant, duration) if controller else duration
        solver = _solver(method, controller.flow if controller else loop, (time, end), x, rtol=1e-8, atol=1e-10)
        if solver is None:
            return pieces, False
        while solver.status == "running":
            if len(pieces) >= EXPLICIT_STEP_CAP or not _advance(solver):
                return pieces, False
            pieces.append(solver.dense_output())
            if np.any(solver.y < low) or np.any(solver.y > high):
                return pieces, True
        time, x = end, solver.y
        if controller and time < duration:
            controller.meet(time, x)
    return pieces, True


def _rest(loop: Loop) -> Array:
    """The equilibrium of a loop that has been read and found sound, float64 (n,)."""
    return find_equilibrium(loop, "loop").x


def _escape_box(loop: Loop, escape: float) -> tuple[Array, Array]:
    return loop.centre - escape * loop.half_widths, loop.centre + escape * loop.half_widths


def _methods(loop: Loop, point: Array, duration: float) -> tuple[type[OdeSolver], ...]:
    J = loop.jacobian(point)
    fastest = float(np.abs(np.linalg.eigvals(J)).max()) if np.isfinite(J).all() else 0.0
    return (Radau,) if fastest * duration > STIFF else (DOP853, Radau)


def _solver(
    method: type[OdeSolver], flow: Flow, span: tuple[float, float], start: Array, rtol: float, atol: float
) -> OdeSolver | None:
    """Return the solver at its start, or None where the dynamics have no finite value there."""
    if not np.isfinite(flow.rhs(start)).all():  # scipy would never find a first step
        return None
    begin, end = span
    options: dict[str, Any] = {"first_step": _first_step(flow, start, end - begin, rtol, atol)}
    if method is Radau:
        options["jac"] = lambda _, x: flow.jacobian(x)
    try:
        with np.errstate(all="ignore"):
            return method(
                lambda _, x: flow.rhs(x), begin, start, end, rtol=max(rtol, SMALLEST_RTOL), atol=atol, **options
            )
    except (ValueError, np.linalg.LinAlgError):  # no finite Jacobian
        return None


def _first_step(flow: Flow, start: Array, duration: float, rtol: float, atol: float) -> float:
    """A timid first step, s: scipy's own guess never returns where f is undefined next to the start."""
    weight = atol + rtol * np.abs(start)
    size, speed = np.linalg.norm(start / weight), np.linalg.norm(flow.rhs(start) / weight)
    step = 0.01 * size / speed if size > 1e-5 and speed > 1e-5 else 1e-6 * duration
    return float(np.clip(step, 1e-12 * duration, duration))


def _advance(solver: OdeSolver) -> bool:
    """Take one accepted step; say whether it succeeded with a finite state."""
    try:
        with np.errstate(all="ignore"):
            solver.step()
    except (ValueError, np.linalg.LinAlgError):  # Radau, at a Jacobian that is not finite or not regular
        return False
    return solver.status != "failed" and bool(np.isfinite(solver.y).all())


def _integrate(
    method: type[OdeSolver],
    loop: Loop,
    target: Target,
    integration: Integration,
    start: Array,
    tolerances: tuple[float, float],
    cap: int,
) -> Decision:
    watch = _Watch(loop, target, integration)
    start = np.array(start, dtype=float)
    controller = Controller(loop, target.centre, start) if loop.hold else None
    flow: Flow = loop
    end = integration.longest

    def ended(outcome: Outcome, reason: Reason, at: _Moment) -> Decision:
        return Decision(outcome, reason, float(at.time), at.final, at.peak, at.steps, method.__name__)

    def acting(flow: Flow) -> dict[str, float] | None:
        return dict(zip(loop.hold.signals, flow.u, strict=True)) if loop.hold and isinstance(flow, Frozen) else None

    watch.held = acting(controller.flow) if controller else None
    decided = watch.look(0.0, start, 0)
    if decided:
        return ended(decided[0], Reason.NONE, decided[1])
    at = _Moment(0.0, start, watch.peak, 0)
    while at.time < integration.longest:
        if controller is not None:
            flow, end = controller.flow, min(controller.next_instant, integration.longest)
            watch.held = acting(flow)
        solver = _solver(method, flow, (at.time, end), at.final, *tolerances)
        if solver is None:
            left = loop.leaves_tables(at.final)
            return ended(Outcome.FAILED, Reason.OUTSIDE_TABLE if left else Reason.NOT_FINITE, at)
        while solver.status == "running":
            if at.steps >= cap:
                return ended(Outcome.FAILED, Reason.STEP_CAP, at)
            if not _advance(solver):
                return ended(*_trouble(loop, flow, at.final), at)
            inside = solver.dense_output()
            for part in LOOKS:
                time = solver.t_old + part * (solver.t - solver.t_old)
                x = solver.y.copy() if part == 1 else inside(time)
                decided = watch.look(time, x, at.steps + 1, entry=controller is None)
                if decided:
                    return ended(decided[0], Reason.NONE, decided[1])
            at = _Moment(solver.t, solver.y.copy(), watch.peak, at.steps + 1)
        if controller is not None and controller.meet(at.time, at.final):
            decided = watch.look(at.time, at.final, at.steps)
            if decided:
                return ended(decided[0], Reason.NONE, decided[1])
    return ended(Outcome.UNRESOLVED, Reason.NONE, at)


def _trouble(loop: Loop, flow: Flow, x: Array) -> tuple[Outcome, Reason]:
    """Name why no step leads on from the last accepted state x, float64 (n,)."""
    slope = flow.rhs(x)
    with np.errstate(all="ignore"):  # a little further on: a millionth of the domain along the slope
        beyond = x + 1e-6 * np.min(loop.half_widths / np.abs(slope)) * slope
    if loop.leaves_tables(x) or loop.leaves_tables(beyond):
        return Outcome.FAILED, Reason.OUTSIDE_TABLE
    if np.any(np.abs(x - loop.centre) > loop.half_widths):
        return Outcome.ESCAPED, Reason.BLOW_UP
    finite = np.isfinite(slope).all() and np.isfinite(flow.rhs(beyond)).all()
    return Outcome.FAILED, Reason.STEP_UNDERFLOW if finite else Reason.NOT_FINITE
