"""The text of a loop's generated module: right-hand side, target test and lane loop together.

`LANES` trajectories advance in step, each with its own time, step size, error control and ends. The
body of the loop over lanes is straight-line code on one local buffer `B[lane + row * LANES]`, so
that the compiler packs it into vectors; whatever needs a branch (a lane that has ended, the next
start of the queue) is done outside it, one lane at a time. `lanes.py.jinja` is the loop itself; the
attempted step within it is a part of its own for each kind of method (`tableau.step`).

One file holds everything because a compiled function is found again by another process only when
it neither receives nor closes over another one, and because numba's cache does not see changes in
an imported file.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cache, partial
from pathlib import Path

import jinja2

from roa.kernel import table_source, vector_math
from roa.kernel.elimination import Elimination
from roa.kernel.jacobian_code import JacobianCode
from roa.kernel.outcomes import Outcome, Reason
from roa.kernel.straight_line import StraightLine, commands, right_hand_side
from roa.kernel.tableau import Method, RosenbrockTableau
from roa.kernel.target import Target
from roa.loop.expression import Expression, Name
from roa.loop.model import Loop

# 8 lanes do not vectorise, 16 give 0.89-0.96 of the speed of 32, and 64-128 no more than 1.03 of it.
LANES = 32

SIGNATURE = (
    "void(f8[:,::1], f8[::1], f8[::1], f8[::1], f8[::1], f8[::1], f8[:,::1], f8[:,::1], f8, f8[:,::1], f8, "
    "f8, f8, f8, f8, i8, u1[::1], f8[::1], f8[:,::1], f8[:,::1], i4[::1], u1[::1])"
)


@dataclass(frozen=True)
class LaneSource:
    """The text of the module, and the trees whose values fill its argument `constants`."""

    text: str
    constants: list[Expression]


def lane_source(loop: Loop, tableau: Method, target: Target) -> LaneSource:
    """Write the module for a loop, a method and a kind of target set.

    Numbers that can change without changing the structure (parameters, level, tolerances, boxes)
    are arguments, so that the module that is compiled for one gain serves the next.
    """
    code, derivatives = right_hand_side(loop)
    command, command_values = commands(loop, code)
    jacobian = _Jacobian(loop, code) if isinstance(tableau, RosenbrockTableau) else None
    states = range(loop.n)
    level = target.kind == "level"
    # 1 is the target itself, where it is a ball; 2, 3, … are the other equilibria.
    balls = ([] if level else [1]) + [2 + k for k in range(len(target.elsewhere))]
    hold = _hold(loop, command_values)
    lines = list(code.lines)
    limits = [code.variable(Name(name)) for name in loop.limits]
    numbers = "".join(f", c{i}" for i in range(len(code.constants)))
    rows = _buffer_rows(states, bool(balls), bool(limits), hold)
    text = _template().render(
        outcome=Outcome,
        reason=Reason,
        signature=SIGNATURE,
        tableau=tableau,
        lanes=LANES,
        level=level,
        balls=balls,
        rows=rows,
        n=loop.n,
        states=states,
        lines=lines,
        limits=limits,
        limit_lines=code.lines,
        limit_ends="".join(f", low{i}, high{i}" for i in range(len(limits))),
        hermite=_hermite,
        derivatives=derivatives,
        refusals=_refusals(loop, code),
        n_constants=len(code.constants),
        hold=hold,
        command_lines=command.lines,
        numbers_of_formulas=numbers,
        constants="".join(f", {u}" for u in hold.acting) + numbers,
        form="".join(f", p{i}_{j}" for i in states for j in states if j >= i),
        args=lambda prefix: ", ".join(f"{prefix}{j}" for j in states),
        cell=partial(_cell, rows),
        combination=_combination,
        jacobian=jacobian,
        distance=lambda ball, x: " + ".join(f"(({x}{j} - at{ball}_{j}) * inverse{j}) ** 2" for j in states),
    )
    parts = [vector_math.source(code.functions), table_source.source(code.tables), text]
    return LaneSource("\n\n".join(part for part in parts if part), code.constants)


def _refusals(loop: Loop, code: StraightLine) -> list[str]:
    """Write, for each table that ends with its points, the condition that it is left; of variables of the code."""
    used = [(use.table, code.variable(use.argument)) for use in loop.refusals]
    return [table_source.outside(table, variable) for table, variable in used]


@cache
def _template() -> jinja2.Template:
    """The lane loop, read once: several steps of a run ask for the text of the same module."""
    environment = jinja2.Environment(
        loader=jinja2.FileSystemLoader(Path(__file__).parent),
        undefined=jinja2.StrictUndefined,
        keep_trailing_newline=True,
    )
    return environment.get_template("lanes.py.jinja")


@dataclass(frozen=True)
class _HoldCode:
    """What the template needs to know of a hold; false where there is none.

    Attributes
    ----------
    values : variables of the held signals in the code of the command
    kind : "" no hold, "none", "part" or "full": the delay against the period
    """

    values: list[str]
    kind: str

    def __bool__(self) -> bool:
        return bool(self.kind)

    @property
    def acting(self) -> list[str]:
        """Variables of the commands that act."""
        return [f"u{i}" for i in range(len(self.values))]

    @property
    def rows(self) -> list[str]:
        """Rows of the lanes' buffer: commands that act and that wait, samples taken, whether the newest acts."""
        waiting = [] if self.kind == "none" else [f"w{i}" for i in range(len(self.values))]
        return [*self.acting, *waiting, "samples", *(["switched"] if self.kind == "part" else [])] if self else []


def _hold(loop: Loop, values: list[str]) -> _HoldCode:
    if loop.hold is None:
        return _HoldCode([], "")
    delay, period = loop.hold.delay, loop.hold.period
    return _HoldCode(values, "none" if delay == 0 else "full" if delay == period else "part")


def _buffer_rows(states: range, balls: bool, limits: bool, hold: _HoldCode) -> dict[str, int]:
    """Name the rows of the lanes' buffer."""
    names = ["t", "h", "steps", *(f"{row}{j}" for row in ("x", "k", "peak") for j in states)]
    if balls:
        names += ["ball", "since", "entry", "entry_steps"]
        names += [f"{row}{j}" for row in ("entry_x", "entry_peak") for j in states]
    if limits:
        names += ["over"]
    return {name: row for row, name in enumerate([*names, *hold.rows])}


def _cell(rows: dict[str, int], name: str, lane: str = "l") -> str:
    return f"B[{lane} + {rows[name] * LANES}]"


class _Jacobian:
    """What the template needs to know of the Jacobian and of the solutions by it."""

    def __init__(self, loop: Loop, code: StraightLine) -> None:
        slopes = JacobianCode(loop, code)
        self.lines, self.entries = slopes.code.lines, slopes.entries
        self.elimination = Elimination(
            [
                [f"e{i}_{j}" if i == j or entry else None for j, entry in enumerate(row)]
                for i, row in enumerate(self.entries)
            ]
        )

    def solution(self, stage: int) -> list[str]:
        """Assignments that replace the right-hand side of a stage by the stage."""
        return self.elimination.solution([f"u{stage}_{j}" for j in range(len(self.entries))])


def _combination(weights: tuple[float, ...], state: int, stages: str = "k") -> str:
    """Write the weighted sum of one state's slopes over the stages."""
    return " + ".join(f"{weight!r} * {stages}{stage}_{state}" for stage, weight in enumerate(weights) if weight != 0.0)


def _hermite(part: float, state: int) -> str:
    """Write a state inside the step, on the cubic through the states and slopes of its ends."""
    rest = 1.0 - part
    old, new = rest * rest * (1.0 + 2.0 * part), part * part * (3.0 - 2.0 * part)
    slope_old, slope_new = rest * rest * part, -part * part * rest
    return f"{old} * x{state} + {new} * y{state} + h * ({slope_old} * k0_{state} + {slope_new} * f{state})"
