"""One sampled period on a tape, in the whitened coordinates of the sample: what branch and bound is given."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from decimal import Decimal
from fractions import Fraction

from roa.bound.sampled_frame import SampledFrame
from roa.bound.sampled_period import Period
from roa.kernel.flow_series import FlowSeries
from roa.kernel.interval_arrays import IntervalArray
from roa.kernel.tape import Program, Tape, enclose_number


@dataclass(frozen=True)
class _Flow:
    """A stretch on a tape: rows of its start, of the coefficients of t, t², …, and its length."""

    start: list[int]
    coefficients: list[list[int]]
    time: Decimal

    def end(self, tape: Tape) -> list[int]:
        """Rows of the polynomial at the end."""
        return [
            tape.total(
                [
                    self.start[i],
                    *(
                        tape.multiply(tape.number(Fraction(self.time) ** (k + 1)), row[i])
                        for k, row in enumerate(self.coefficients)
                    ),
                ]
            )
            for i in range(len(self.start))
        ]

    def at(self, tape: Tape, i: int, t: int) -> int:
        """Row of the polynomial of state i at the time of row t, by Horner."""
        result = self.coefficients[-1][i]
        for row in reversed([self.start, *self.coefficients[:-1]]):
            result = tape.add(row[i], tape.multiply(t, result))
        return result


def bound_of_change(frame: SampledFrame, degree: int, beta: float) -> Program:
    """Tape of the bound of ΔV/T, and of V, in z."""
    tape = Tape(frame.N)
    change, V, squares = _measures(frame, tape, degree)
    b, T = Fraction(beta), Fraction(frame.hold.period)
    bound = tape.total(
        [
            tape.multiply(tape.number(1 + b), change),
            tape.multiply(tape.number(b / T), V),
            tape.multiply(tape.number((b + b * b) / T), squares),
        ]
    )
    return tape.program([bound, V])


def measures(frame: SampledFrame, degree: int) -> Program:
    """Tape of ΔV/T of the polynomial, of V, and of s², in z."""
    tape = Tape(frame.N)
    return tape.program(_measures(frame, tape, degree))


def faces(frame: SampledFrame, period: Period) -> Iterator[tuple[Program, float]]:
    """For each face of the domain and each stretch: tape of (state beyond the face, V) in (z, t), and the length, s."""
    for i in range(frame.n):
        for side in (-1, 1):
            for stretch in range(2 if 0 < frame.hold.delay < frame.hold.period else 1):
                tape = Tape(frame.N + 1)
                x, old, new, _ = _rows(frame, tape)
                flow = list(_flows(frame, tape, x, old, new, period.degree))[stretch]
                state = flow.at(tape, i, tape.variable(frame.N))
                face = frame.allowed.high[i] if side > 0 else frame.allowed.low[i]
                beyond = tape.subtract(state, tape.number(float(face)))
                over = tape.add(beyond if side > 0 else tape.negate(beyond), tape.number(float(period.error[i])))
                V = _form_row(tape, frame.form, list(range(frame.N)))
                yield tape.program([over, V]), enclose_number(flow.time)[1]


def change(frame: SampledFrame, tape: Tape, degree: int) -> tuple[list[int], list[int]]:
    """Rows of q = (ζ+ - ζ)/T of the polynomial, (N,), and of w - u*, (m,)."""
    x, old, new, w = _rows(frame, tape)
    T = Fraction(frame.hold.period)
    flows = list(_flows(frame, tape, x, old, new, degree))
    q = [
        tape.total(
            tape.multiply(tape.number(Fraction(flow.time) ** (k + 1) / T), row[i])
            for flow in flows
            for k, row in enumerate(flow.coefficients)
        )
        for i in range(frame.n)
    ]
    n = frame.n
    if frame.V.joint is not None:
        zeta = [tape.weighted([tape.number(float(e)) for e in frame.T[n + j]], range(frame.N)) for j in range(frame.m)]
        q += [tape.multiply(tape.number(1 / T), tape.subtract(a, b)) for a, b in zip(w, zeta, strict=True)]
    return q, w


def _measures(frame: SampledFrame, tape: Tape, degree: int) -> tuple[int, int, int]:
    """Rows of ΔV/T of the polynomial, of V, and of s²."""
    q, w = change(frame, tape, degree)
    N, P = frame.N, frame.V.enclosed_whole
    PT = P @ frame.T
    across = [tape.weighted([tape.interval(PT.low[i, j], PT.high[i, j]) for j in range(N)], range(N)) for i in range(N)]
    linear = tape.multiply(tape.number(2), tape.weighted(q, across))
    square = tape.multiply(tape.number(frame.hold.period), _form_row(tape, P, q))
    V = _form_row(tape, frame.form, list(range(N)))
    commands = [tape.multiply(tape.number(float(k)), row) for k, row in zip(frame.kappa, w, strict=True)]
    squares = tape.total(tape.multiply(row, row) for row in [*range(N), *commands])
    return tape.add(linear, square), V, squares


def _rows(frame: SampledFrame, tape: Tape) -> tuple[list[int], list[int], list[int], list[int]]:
    """Rows of x, of the command that still acts (none without a delay), of w(x), and of w(x) - u*."""
    held, n = frame.held, frame.n
    zeta = [tape.weighted([tape.number(float(entry)) for entry in frame.T[i]], range(frame.N)) for i in range(frame.N)]
    x = [tape.add(tape.interval(held.x.low[i], held.x.high[i]), zeta[i]) for i in range(n)]
    rest = [tape.interval(low, high) for low, high in zip(held.u.low, held.u.high, strict=True)]
    old = [tape.add(rest[j], zeta[n + j]) for j in range(frame.N - n)]
    names = tape.loop(frame.V.loop, x)
    new = [names[name] for name in frame.hold.signals]
    return x, old, new, [tape.subtract(a, b) for a, b in zip(new, rest, strict=True)]


def _flows(
    frame: SampledFrame, tape: Tape, x: list[int], old: list[int], new: list[int], degree: int
) -> Iterator[_Flow]:
    """The stretches of a period as series on the tape, one after the other."""
    hold = frame.hold
    for commands, time in ((old, hold.delay), (new, hold.period - hold.delay)):
        if time:
            series = FlowSeries(tape, frame.V.loop, x, dict(zip(hold.signals, commands, strict=True)))
            flow = _Flow(x, [series.coefficient(k) for k in range(1, degree + 1)], time)
            yield flow
            x = flow.end(tape)


def _form_row(tape: Tape, form: IntervalArray, rows: list[int]) -> int:
    """Row of r'(form)r for a symmetric form."""
    size = len(rows)
    squares = [
        tape.multiply(tape.interval(form.low[i, i], form.high[i, i]), tape.multiply(rows[i], rows[i]))
        for i in range(size)
    ]
    mixed = [
        tape.multiply(tape.interval(2 * form.low[i, j], 2 * form.high[i, j]), tape.multiply(rows[i], rows[j]))
        for i in range(size)
        for j in range(i)
    ]
    return tape.total([*squares, *mixed])
