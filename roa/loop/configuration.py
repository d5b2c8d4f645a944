"""A configuration that has been read: the loop, and what is to be done with it."""

from __future__ import annotations

from dataclasses import dataclass, replace
from decimal import Context, Decimal
from typing import Annotated, Any

from pydantic import BaseModel, BeforeValidator, ConfigDict, SkipValidation, model_validator

from roa.loop.expression import Expression
from roa.loop.formula_text import decimal_text, to_text
from roa.loop.hold import Hold
from roa.loop.lookup_table import LookupTable
from roa.loop.model import Loop
from roa.loop.values import Matrix, kind, number, real, symmetric_matrix, whole, word

LONGEST_PER_HORIZON = 16
MOST_SAMPLES = 2**40
# Most states with which each is done unasked: from three states on a polynomial takes minutes to hours.
SEARCHES = {"quadratic": 6, "polynomial": 2, "no_return": 2}
LARGEST_SEED = 2**63 - 1  # the store keeps it as a signed integer of 64 bits


def _weights(value: Any) -> str | Matrix:
    if isinstance(value, str):
        return word("identity", "domain")(value)
    return symmetric_matrix(value)


_Positive = Annotated[float, BeforeValidator(real("greater than 0", lambda x: x > 0))]
_AtLeastOne = Annotated[float, BeforeValidator(real("at least 1", lambda x: x >= 1))]
_Share = Annotated[float, BeforeValidator(real("between 0 and 1", lambda x: 0 < x < 1))]


def _searches(value: Any) -> tuple[str, ...]:
    if not isinstance(value, list):
        raise ValueError(f"must be a list of words, such as {list(SEARCHES)}, or [] for nothing; {kind(value)} found")
    return tuple(dict.fromkeys(word(*SEARCHES)(entry) for entry in value))


def _exact_positive(value: Any) -> Decimal:
    real("greater than 0", lambda x: x > 0)(value)
    return number(value)


def _scale(value: Any) -> tuple[Decimal, ...]:
    if not isinstance(value, list):
        raise ValueError(f"must be a list of numbers greater than 0, one for each state; {kind(value)} found")
    return tuple(_exact_positive(entry) for entry in value)


def _goal_width(value: Any) -> float:
    if not isinstance(value, dict) or set(value) != {"width"}:
        raise ValueError("must be { width = w }, the width of the interval of the share")
    return real("between 0 and 1 in width", lambda x: 0 < x < 1)(value["width"])


class _Table(BaseModel):
    """A table of the file. Unknown keys are refused before, where the nearest known one can be named."""

    model_config = ConfigDict(frozen=True, extra="forbid")


class BoundTable(_Table):
    """Table [bound]: the Lyapunov function that is derived or given, and the level that is claimed.

    Exactly one of Q, P and V is set; Q is "identity" where the file gives none of them.

    Attributes
    ----------
    Q : "identity", "domain" (1/half-width^2 on the diagonal) or a symmetric positive definite matrix
    P : symmetric matrix; whether it is positive definite is for the verdict to say
    V, V_text : tree and text of a formula in states and parameters
    level : the claim {V <= level}, or None where nothing is claimed
    ball, scale : the claim that all starts within the radius `ball` of the equilibrium converge, each state's distance
        counted in units of its `scale` (1 where there is none); None where no ball is claimed
    inner : asks for a residual set: trajectories are to end in {V <= inner}, not at the equilibrium; None where they
        are to converge
    search : what is searched for beyond the configured V; None for what the number of states affords
    degree : of the best polynomial and of the no-return set, even; None where the search chooses
    boxes : most boxes of the proof of one bound; None for what a few seconds can do
    """

    Q: Annotated[str | Matrix, BeforeValidator(_weights)] | None = None
    P: Annotated[Matrix, BeforeValidator(symmetric_matrix)] | None = None
    V: SkipValidation[Any] = None
    V_text: str | None = None
    level: Annotated[Decimal, BeforeValidator(_exact_positive)] | None = None
    ball: Annotated[Decimal, BeforeValidator(_exact_positive)] | None = None
    scale: Annotated[tuple[Decimal, ...], BeforeValidator(_scale)] | None = None
    inner: Annotated[Decimal, BeforeValidator(_exact_positive)] | None = None
    search: Annotated[tuple[str, ...], BeforeValidator(_searches)] | None = None
    degree: (
        Annotated[int, BeforeValidator(whole("an even number from 2 to 12", lambda n: n in (2, 4, 6, 8, 10, 12)))]
        | None
    ) = None
    boxes: (
        Annotated[int, BeforeValidator(whole("a whole number from 1 to 1000000000", lambda n: 1 <= n <= 1_000_000_000))]
        | None
    ) = None

    @model_validator(mode="before")
    @classmethod
    def _default_weights(cls, table: dict[str, Any]) -> dict[str, Any]:
        return table if table.keys() & {"Q", "P", "V"} else {"Q": "identity", **table}

    @property
    def claimed_level(self) -> Decimal | None:
        """Level of the claimed set, exactly: for a ball the square of its radius; None where nothing is claimed."""
        if self.ball is None:
            return self.level
        return Context(prec=2 * len(self.ball.as_tuple().digits)).multiply(self.ball, self.ball)

    @model_validator(mode="after")
    def _one_claim(self) -> BoundTable:
        if self.ball is not None and (self.level is not None or self.inner is not None):
            other = "level" if self.level is not None else "inner"
            raise ValueError(f"ball and {other} are two claims; keep one of them")
        if self.scale is not None and self.ball is None:
            raise ValueError("scale belongs to a claimed ball; write `ball = r` beside it, or remove it")
        return self

    @model_validator(mode="after")
    def _inner_is_below(self) -> BoundTable:
        if self.inner is not None and self.level is not None and not self.inner < self.level:
            raise ValueError(f"inner = {self.inner} must be below level = {self.level}")
        return self


class SweepTable(_Table):
    """Table [sweep]: which trajectories are simulated, and how each is decided.

    Attributes
    ----------
    design : name of a sampling design
    samples : number of initial conditions
    accuracy : of the share, at which a design that refines stops before it has had all of them
    goal : width of the interval of the share, which picks the number of samples instead
    seed : of the scrambling
    horizon, longest : s; a trajectory unresolved at the horizon is followed further, up to `longest`
    escape : size of the escape box in domain sizes
    store : "all", or "outcomes" for outcome and time alone
    method : name of an integration method, or "auto"
    rtol, atol : tolerances of one step, relative and in state units
    ball_radius : of a target ball, in half-widths of the domain
    dwell : s in a target ball; None where it follows from the linearisation
    """

    design: Annotated[str, BeforeValidator(word())] = "sobol"
    samples: Annotated[
        int, BeforeValidator(whole("a whole number from 1 to 2**40", lambda n: 1 <= n <= MOST_SAMPLES))
    ] = 262144
    seed: Annotated[
        int, BeforeValidator(whole("a whole number from 0 to 2**63 - 1", lambda n: 0 <= n <= LARGEST_SEED))
    ] = 1
    accuracy: _Share | None = None
    goal: Annotated[float, BeforeValidator(_goal_width)] | None = None
    horizon: _Positive = 60.0
    longest: _Positive = 60.0 * LONGEST_PER_HORIZON
    escape: _AtLeastOne = 10.0
    store: Annotated[str, BeforeValidator(word("all", "outcomes"))] = "all"
    method: Annotated[str, BeforeValidator(word())] = "auto"
    rtol: Annotated[
        float,
        BeforeValidator(real("greater than 1e-13 and at most 0.1", lambda x: Decimal("1e-13") < x <= Decimal("0.1"))),
    ] = 1e-6
    atol: _Positive = 1e-9
    ball_radius: Annotated[
        float, BeforeValidator(real("greater than 0 and at most 0.5", lambda x: 0 < x <= Decimal("0.5")))
    ] = 1e-3
    dwell: _Positive | None = None

    @model_validator(mode="before")
    @classmethod
    def _longest_follows_horizon(cls, table: dict[str, Any]) -> dict[str, Any]:
        try:
            return {"longest": LONGEST_PER_HORIZON * _exact_positive(table["horizon"]), **table}
        except (KeyError, ValueError):  # no horizon is given, or its own check will refuse it
            return table

    @model_validator(mode="before")
    @classmethod
    def _goal_or_samples(cls, table: dict[str, Any]) -> dict[str, Any]:
        if table.get("goal") is not None and "samples" in table:
            raise ValueError("goal and samples contradict each other: a goal picks the number of samples; give one")
        return table

    @model_validator(mode="after")
    def _ends_fit_the_design(self) -> SweepTable:
        refining = self.design in ("rays", "boundary")
        if self.accuracy is not None and not refining:
            raise ValueError(f'accuracy is for the designs "rays" and "boundary"; for "{self.design}" give a goal')
        if self.goal is not None and self.design != "sobol":
            raise ValueError('goal is for the design "sobol"; for "rays" and "boundary" give an accuracy')
        return self

    @model_validator(mode="after")
    def _longest_is_not_shorter(self) -> SweepTable:
        if self.longest < self.horizon:
            raise ValueError(
                f"longest = {self.longest:g} must not be less than horizon = {self.horizon:g}; "
                f"by default it is {LONGEST_PER_HORIZON} times the horizon"
            )
        return self


class VerdictTable(_Table):
    """Table [verdict]: what the release gate asks for.

    Attributes
    ----------
    accept : "proved" or "supported"
    confidence : of every stated interval
    fraction : of the claimed set that must converge for "supported"
    """

    accept: Annotated[str, BeforeValidator(word("proved", "supported"))] = "proved"
    confidence: Annotated[float, BeforeValidator(real("between 0.5 and 1", lambda x: Decimal("0.5") < x < 1))] = 0.99
    fraction: _Share = 0.999


@dataclass(frozen=True)
class Configuration:
    """Everything that a configuration file says.

    Attributes
    ----------
    source : name of the file, for messages
    text : as read, with the texts of the files that it names
    loop, bound, sweep, verdict : its tables, checked, with defaults filled in
    """

    source: str
    text: str
    loop: Loop
    bound: BoundTable
    sweep: SweepTable
    verdict: VerdictTable

    @property
    def searches(self) -> tuple[str, ...]:
        """What is searched for: as the file says, or else what the number of states affords."""
        if self.bound.search is not None:
            return self.bound.search
        return tuple(name for name, states in SEARCHES.items() if self.loop.n <= states)

    def quick(self) -> Configuration:
        """The same without any search for better bounds."""
        return replace(self, bound=self.bound.model_copy(update={"search": ()}))

    def resolved(self) -> dict[str, Any]:
        """Return all that changes results as plain values, the same for every spelling of one study.

        Numbers of the loop and of the bound are decimal strings, formulas are written back from their
        trees. Title, comments, spaces and the order of keys other than states and signals leave no trace.
        """
        loop, bound = self.loop, self.bound
        return {
            "states": [[name, unit] for name, unit in zip(loop.states, loop.units, strict=True)],
            "parameters": {name: decimal_text(loop.parameters[name].value) for name in sorted(loop.parameters)},
            "signals": [[name, to_text(tree)] for name, tree in loop.signals.items()],
            "tables": {name: _table(loop.tables[name]) for name in sorted(loop.tables)},
            "dynamics": [to_text(tree) for tree in loop.dynamics],
            "equilibrium": [decimal_text(value) for value in loop.guess],
            **_resolved_hold(loop.hold),
            "domain": [[decimal_text(low), decimal_text(high)] for low, high in loop.domain],
            "limits": {
                name: [decimal_text(low), decimal_text(high)] for name, (low, high) in sorted(loop.limits.items())
            },
            "disturbance": {
                name: [decimal_text(low), decimal_text(high)] for name, (low, high) in sorted(loop.disturbances.items())
            },
            "bound": {
                "Q": _plain(bound.Q),
                "P": _plain(bound.P),
                "V": _plain(bound.V),
                "level": _plain(bound.level),
                "ball": _plain(bound.ball),
                "scale": None if bound.scale is None else [decimal_text(entry) for entry in bound.scale],
                "inner": _plain(bound.inner),
                "search": list(self.searches),
                "degree": bound.degree,
                "boxes": bound.boxes,
            },
            "sweep": self.sweep.model_dump(),
            "verdict": self.verdict.model_dump(),
        }


def _table(table: LookupTable) -> dict[str, Any]:
    points = {"x": [decimal_text(value) for value in table.x], "y": [decimal_text(value) for value in table.y]}
    return {**points, "kind": table.kind, "beyond": table.beyond}


def _resolved_hold(hold: Hold | None) -> dict[str, Any]:
    """The table [hold], where there is one; without it nothing, as before there were holds."""
    if hold is None:
        return {}
    return {
        "hold": {
            "signals": list(hold.signals),
            "period": decimal_text(hold.period),
            "delay": decimal_text(hold.delay),
        }
    }


def _plain(value: str | Matrix | Decimal | Expression | None) -> Any:
    match value:
        case None | str():
            return value
        case Decimal():
            return decimal_text(value)
        case tuple():
            return [[decimal_text(entry) for entry in row] for row in value]
    return to_text(value)
