"""Branch and bound over boxes: W < 0 wherever c_low <= V <= c_high, by outward-rounded intervals.

What lies outside the region of interest, where one of some further functions is below zero, is dropped too.

Each box is dropped as soon as one of these holds all over it: V > c_high or V < c_low; W < 0. The forms are
tried in the order of their price: the natural interval; the mean-value form, whose slopes over the box are
Clarke's and so serve at kinks; Taylor's form of second order, which is the sharpest where the loop is smooth.
The last two are applied to W + λ(c_high - V), λ >= 0, as well, which is no less than W where it matters, or to
W + |λ|(V - c_low). λ takes the slope along that of V away, so that boxes do not cluster where the level set
touches W = 0. Where a minimum, maximum or absolute value switches within the box, the forms are tried on both
of its sides as well, each taken as it is beyond the kink: one of them is W. What cannot be dropped is halved.

Every comparison that drops a box is false for NaN, so that a pole in the set is never proved away.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from enum import StrEnum

import numpy as np
from numpy.typing import NDArray

from roa.kernel import enclosure, interval_functions, intervals, table_rules, tape, tape_rules
from roa.kernel.enclosure import Flags, Integers, interpret, switches
from roa.kernel.intervals import add, down, multiply, undefined, up
from roa.kernel.machine_code import compiled, inner
from roa.kernel.tape import Program

Array = NDArray[np.float64]

LOPSIDED = 8.0  # a side so many times longer than the one chosen for its slopes is halved instead
KINKS = 3  # most kinks in one box that are taken apart: each doubles the work
STACK = 4096  # boxes that wait at most; depth first, a split adds one
_PROVED, _REFUTED, _UNDECIDED = 0, 1, 2


class Answer(StrEnum):
    """What became of a statement about all points of a box."""

    PROVED = "proved"
    REFUTED = "refuted"
    UNDECIDED = "undecided"


@dataclass(frozen=True)
class Search:
    """The end of a search.

    Attributes
    ----------
    answer : Answer
    boxes : number of boxes that were looked at
    witness : float64 (n,), a point at which c_low <= V <= c_high and W >= 0 for certain; where refuted
    left : share of the starting box's volume that was not decided; 0.0 where proved
    """

    answer: Answer
    boxes: int
    witness: Array | None
    left: float


def negative_on_levels(
    program: Program, low: Array, high: Array, levels: tuple[float, float], cell: Array, budget: int
) -> Search:
    """Prove W < 0 at every point of the box with c_low <= V <= c_high outside the cell, or find a point that is not.

    Parameters
    ----------
    program : Program with the outputs W and V, in n variables; of points where any further output is below zero
        nothing is asked
    low, high : float64 (n,), ends of the box
    levels : c_low <= c_high; infinite ends are allowed
    cell : float64 (n,), half-widths of a box about zero, of which nothing is asked; negative for none
    budget : most boxes to look at
    """
    p, n = program, len(low)
    waiting = np.zeros((2, STACK, n))
    waiting[0, 0], waiting[1, 0] = low, high
    witness = np.zeros(n)
    tape_arrays = (p.ops, p.constants, p.support, p.slots, p.counts, p.outputs)
    c_low, c_high = (float(level) for level in levels)
    cell = np.ascontiguousarray(cell, dtype=np.float64)
    code, boxes, left = _search(*tape_arrays, waiting, c_low, c_high, cell, budget, witness)
    if code == _PROVED:
        return Search(Answer.PROVED, boxes, None, 0.0)
    sizes = np.prod((waiting[1, :left] - waiting[0, :left]) / np.where(high > low, high - low, 1.0), axis=1)
    share = float(min(sizes.sum(), 1.0))
    if code == _REFUTED:
        return Search(Answer.REFUTED, boxes, witness, share)
    return Search(Answer.UNDECIDED, boxes, None, share)


def _search_boxes(
    ops: Integers,
    constants: Array,
    support: Flags,
    slots: Integers,
    counts: Integers,
    outputs: Integers,
    waiting: Array,
    c_low: float,
    c_high: float,
    cell: Array,
    budget: int,
    witness: Array,
) -> tuple[int, int, int]:
    """Answer, boxes looked at and boxes left in `waiting` (2, STACK, n), a stack whose first box is the start."""
    n, rows = support.shape[1], ops.shape[0]
    size = 1 + n + n * (n + 1) // 2
    d, sides = np.zeros((rows, size, 2)), np.zeros(rows, dtype=np.int64)
    kinks, switching = np.zeros(KINKS, dtype=np.int64), 0
    W, V = outputs[0], outputs[1]
    at, sum_at, sum_over = np.zeros((2, 1 + n, 2)), np.zeros((1 + n, 2)), np.zeros((size, 2))
    low, high, centre, radius = np.zeros(n), np.zeros(n), np.zeros(n), np.zeros(n)
    boxes, left = 0, 1
    while left > 0:
        if boxes >= budget:
            return _UNDECIDED, boxes, left
        boxes += 1
        low[:], high[:] = waiting[0, left - 1], waiting[1, left - 1]
        for i in range(n):
            centre[i] = low[i] + 0.5 * (high[i] - low[i])
            radius[i] = up(max(high[i] - centre[i], centre[i] - low[i])) if low[i] < high[i] else 0.0
        dropped = _in_cell(low, high, cell)
        # Step 0: values over the box. Then in pairs, at the centre and over the box: once with every kink as it is,
        # and if that does not do, for each choice of sides at the kinks, whose functions are smooth. At any point
        # V and W are those of one of the choices. One loop, since the interpreter is long to compile.
        step, last, side = 0, 2, 0
        while step <= last and not dropped:
            odd = step % 2 == 1
            order = 0 if step == 0 else 2 - step % 2
            start, end = (centre, centre) if odd else (low, high)
            interpret(ops, constants, support, slots, counts, sides, start, end, order, d)
            if step == 0:
                dropped = d[V, 0, 0] > c_high or d[V, 0, 1] < c_low or d[W, 0, 1] < 0.0
                for row in outputs[2:]:
                    dropped = dropped or d[row, 0, 1] < 0.0
            elif odd:
                at[0], at[1] = d[W, : 1 + n], d[V, : 1 + n]
                asked = not _in_cell(centre, centre, cell)
                for row in outputs[2:]:
                    asked = asked and d[row, 0, 0] >= 0.0
                if step == 1 and asked and _refutes(at, c_low, c_high):
                    witness[:] = centre
                    return _REFUTED, boxes, left
            else:
                weight = _multiplier(at, c_low, c_high)
                defined = not undefined(d[W, 0, 0], d[W, 0, 1])
                holds = False
                for form in range(4 if step == 2 else 2):
                    of_w, of_v, of_level, level = 1.0, -weight, weight, c_high if weight >= 0.0 else c_low
                    if form == 1:
                        of_v, of_level = 0.0, 0.0
                    elif form == 2:
                        of_w, of_v, of_level, level = 0.0, -1.0, 1.0, c_high
                    elif form == 3:
                        of_w, of_v, of_level, level = 0.0, 1.0, -1.0, c_low
                    if holds or (form == 1 and weight == 0.0) or (of_level != 0.0 and not math.isfinite(level)):
                        continue
                    _combine(of_w, at[0], of_v, at[1], of_level, level, sum_at)
                    _combine(of_w, d[W], of_v, d[V], of_level, level, sum_over)
                    holds = (defined or form >= 2) and _below_zero(sum_at, sum_over, radius)
                    if step == 2 and form == 0:
                        side = _side(sum_over, radius)
                if step == 2 and not holds and defined:
                    switching = _find_kinks(ops, d, kinks)
                    if switching > 0:
                        last = 2 + 2 * 2**switching
                elif step == 2 or not holds or step == last:
                    dropped = holds
                    break
                for k in range(switching):
                    sides[kinks[k]] = 1 + ((step - 2) // 2 >> k) % 2
            step += 1
        for k in range(switching):
            sides[kinks[k]] = 0
        switching = 0
        if dropped:
            left -= 1
            continue
        if left == waiting.shape[1] or not low[side] < centre[side] < high[side]:
            return _UNDECIDED, boxes, left
        waiting[0, left], waiting[1, left] = low, high
        waiting[1, left - 1, side] = waiting[0, left, side] = centre[side]
        left += 1
    return _PROVED, boxes, 0


@inner
def _refutes(at: Array, c_low: float, c_high: float) -> bool:
    return bool(at[0, 0, 0] >= 0.0 and at[1, 0, 0] >= c_low and at[1, 0, 1] <= c_high)


@inner
def _find_kinks(ops: Integers, d: Array, kinks: Integers) -> int:
    """List the rows that switch within the box; 0 where there are too many to try both sides of each."""
    found = 0
    for t in range(ops.shape[0]):
        if switches(d, t, ops[t]):
            if found == kinks.shape[0]:
                return 0
            kinks[found] = t
            found += 1
    return found


@inner
def _in_cell(low: Array, high: Array, cell: Array) -> bool:
    inside = True
    for i in range(cell.shape[0]):
        inside = inside and -cell[i] <= low[i] and high[i] <= cell[i]
    return inside


@inner
def _multiplier(at: Array, c_low: float, c_high: float) -> float:
    """The λ that takes from the slope of W at the centre its part along that of V; any number would be sound."""
    along, square = 0.0, 0.0
    for i in range(1, at.shape[1]):
        slope = 0.5 * (at[1, i, 0] + at[1, i, 1])
        along += 0.5 * (at[0, i, 0] + at[0, i, 1]) * slope
        square += slope * slope
    weight = along / square if square > 0.0 else 0.0
    if not math.isfinite(weight) or math.isinf(c_high if weight >= 0.0 else c_low):
        return 0.0
    return weight


@inner
def _combine(of_w: float, w: Array, of_v: float, v: Array, of_level: float, level: float, result: Array) -> None:
    """The jet of of_w W + of_v V + of_level c, with the numbers that stand before them exact."""
    for s in range(result.shape[0]):
        low, high = 0.0, 0.0
        if of_w != 0.0:
            low, high = multiply(of_w, of_w, w[s, 0], w[s, 1])
        if of_v != 0.0:
            low, high = add(low, high, *multiply(of_v, of_v, v[s, 0], v[s, 1]))
        result[s, 0], result[s, 1] = low, high
    if of_level != 0.0:
        constant = multiply(of_level, of_level, level, level)
        result[0, 0], result[0, 1] = add(result[0, 0], result[0, 1], constant[0], constant[1])


@inner
def _below_zero(at: Array, over: Array, radius: Array) -> bool:
    """Whether a function is below zero over a box, by its jets at the centre and over the box."""
    n = radius.shape[0]
    total: float = at[0, 1]
    for i in range(n):
        total = up(total + up(_magnitude(over[1 + i, 0], over[1 + i, 1]) * radius[i]))
    if total < 0.0:
        return True
    total = at[0, 1]
    s = n
    for i in range(n):
        for j in range(i):
            s += 1
            total = up(total + up(up(_magnitude(over[s, 0], over[s, 1]) * radius[i]) * radius[j]))
        s += 1
        total = up(total + _along(_magnitude(at[1 + i, 0], at[1 + i, 1]), over[s, 1], radius[i]))
    return total < 0.0


@inner
def _magnitude(low: float, high: float) -> float:
    """Largest absolute value; infinite where undefined, so that nothing is proved."""
    return math.inf if undefined(low, high) else max(abs(low), abs(high))


@inner
def _along(slope: float, curvature: float, radius: float) -> float:
    """Upper bound of slope |t| + curvature t^2 / 2 for |t| <= radius; a concave one may have its top inside."""
    if not math.isfinite(curvature) or not math.isfinite(slope):
        return math.inf
    if curvature >= 0.0:
        return up(up(slope * radius) + up(up(curvature * radius) * (0.5 * radius)))
    bend = down(down(-curvature * radius) * (0.5 * radius))
    if slope >= up(-curvature * radius):
        return up(up(slope * radius) - max(bend, 0.0))
    return up(up(slope * slope) / (-2.0 * curvature))


@inner
def _side(over: Array, radius: Array) -> int:
    """Side to halve: where the slope varies most over the box, unless another has become too long."""
    widest, steepest, most = 0, 0, -1.0
    for i in range(radius.shape[0]):
        spread = (over[1 + i, 1] - over[1 + i, 0]) * radius[i]
        if not spread < math.inf:
            spread = math.inf
        if spread > most and radius[i] > 0.0:
            steepest, most = i, spread
        if radius[i] > radius[widest]:
            widest = i
    if most == math.inf or radius[steepest] * LOPSIDED < radius[widest]:
        return widest
    return steepest


_search = compiled(_search_boxes, uses=(intervals, interval_functions, table_rules, tape, tape_rules, enclosure))
