"""Coordinates for proofs about a level set of any V: x = centre + Tz, and a box of z that holds the set.

For a quadratic V they are whitened, V nearly c |z|^2 and V̇ nearly diagonal, about the enclosed equilibrium. For a
formula z is x in parts of a box inside the domain on whose faces V > c is proved: the connected part of {V <= c}
that holds the box's centre cannot leave it. T is a float matrix taken as exact, so nothing of its making is trusted.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from roa.bound.definite import smallest_eigenvalue
from roa.bound.equilibrium_enclosure import EquilibriumEnclosure, enclose_equilibrium
from roa.bound.lyapunov_function import FormulaV, LyapunovFunction, Quadratic
from roa.kernel.branch_and_bound import Answer, negative_on_levels
from roa.kernel.interval_arrays import IntervalArray
from roa.kernel.tape import Tape
from roa.loop.derivative import derivative
from roa.loop.model import Loop

Array = NDArray[np.float64]

RAYS, MARCH = 2048, 128  # rays from the equilibrium, and points on each, that size up the set of a formula
MARGINS = (1.0005, 1.02, 1.1, 1.3, 1.7)  # sizes of the boxes that are tried about it
INSET = 1e-9  # half-widths; how far inside the domain a box ends that would reach its faces
FACE_BOXES = 20_000  # most boxes for V > c on one face


@dataclass(frozen=True)
class LevelChart:
    """Coordinates z about a level set.

    Attributes
    ----------
    V : LyapunovFunction
    centre : IntervalArray (n,), state units
    T : float64 (n, n), state units
    low, high : float64 (n,): for every z outside, x = centre + Tz is outside the connected part of {V <= level}
    exact_centre : whether V is about a float point that is not proved to be an equilibrium
    """

    V: LyapunovFunction
    centre: IntervalArray
    T: Array
    low: Array
    high: Array
    exact_centre: bool

    @property
    def loop(self) -> Loop:
        """The loop whose states x are."""
        return self.V.loop

    def state(self, z: Array) -> Array:
        """The state at z, in floats: for display alone."""
        return np.asarray(self.centre.middle + self.T @ z)

    def states(self, tape: Tape) -> list[int]:
        """Rows of x, with z as the first n variables of the tape."""
        rows = []
        for i, row in enumerate(self.T):
            y = tape.weighted([tape.number(entry) for entry in row], range(len(row)))
            rows.append(tape.add(tape.interval(self.centre.low[i], self.centre.high[i]), y))
        return rows

    def value_and_decrease(self, tape: Tape, names: dict[str, int]) -> tuple[int, int]:
        """Rows of V and V̇, with the rows of the loop's names.

        Raises
        ------
        NotSmooth
            V is a formula with kinks.
        """
        dynamics = [tape.expression(tree, names) for tree in self.loop.dynamics]
        if isinstance(self.V, FormulaV):
            slopes = [tape.expression(derivative(self.V.tree, state), names) for state in self.loop.states]
            return tape.expression(self.V.tree, names), tape.weighted(slopes, dynamics)
        form, PT = self._form, self.V.enclosed_P @ self.T
        half = [tape.weighted(_rows(tape, PT[i]), range(self.loop.n)) for i in range(self.loop.n)]
        # One row of the form stands for each pair, since a symmetric matrix has one number there.
        terms = [
            tape.multiply(_rows(tape, IntervalArray(k * form.low[i, j], k * form.high[i, j]).reshape(1))[0], zz)
            for i in range(self.loop.n)
            for j in range(i + 1)
            for k, zz in [(1 if i == j else 2, tape.multiply(i, j))]
        ]
        return tape.total(terms), tape.multiply(tape.number(2), tape.weighted(half, dynamics))

    @property
    def _form(self) -> IntervalArray:
        assert isinstance(self.V, Quadratic)
        return IntervalArray.exact(self.T.T) @ (self.V.enclosed_P @ self.T)


def level_chart(V: LyapunovFunction, level: float) -> LevelChart | str:
    """Coordinates for {V <= level}, a float, or the reason why there are none."""
    if isinstance(V, FormulaV) and V.from_equilibrium:
        return "V is a formula in distances from the equilibrium"
    root = enclose_equilibrium(V.loop, V.centre)
    centre = IntervalArray.exact(V.centre) if root is None else root.x
    if isinstance(V, Quadratic):
        return _whitened(V, level, centre, root is None)
    return _boxed(V, level, root)


def _whitened(V: Quadratic, level: float, centre: IntervalArray, exact_centre: bool) -> LevelChart | str:
    try:
        inverse = np.linalg.inv(np.linalg.cholesky(V.P)).T
    except np.linalg.LinAlgError:
        return "P is not positive definite"
    PA = V.P @ V.loop.jacobian(V.centre)
    Q = inverse.T @ (PA + PA.T) @ inverse
    if np.all(np.isfinite(Q)):
        inverse = inverse @ np.linalg.eigh((Q + Q.T) / 2)[1]
    T = np.asarray(inverse * np.sqrt(level))
    form = IntervalArray.exact(T.T) @ (V.enclosed_P @ T)
    if not np.all(np.isfinite(T)) or not smallest_eigenvalue(form)[0] > 0:
        return "V could not be proved to be positive definite"
    # V >= shape |z|^2, so that |z| <= reach on the set.
    reach = _up(np.sqrt(_up(level / smallest_eigenvalue(form)[0])))
    squares = (IntervalArray.exact(T).squared() @ np.ones((V.loop.n, 1)))[:, 0]
    extent = _up(_up(np.sqrt(squares.high)) * reach)
    if not _inside(V.loop, centre + IntervalArray(-extent, extent)):
        return "the level set is not proved to lie inside the domain"
    cube = np.full(V.loop.n, float(reach))
    return LevelChart(V, centre, T, -cube, cube, exact_centre)


def _boxed(V: FormulaV, level: float, root: EquilibriumEnclosure | None) -> LevelChart | str:
    rays = _extent(V, level)
    inset = INSET * V.loop.half_widths
    domain = V.loop.box[:, 0] + inset, V.loop.box[:, 1] - inset
    for margin in MARGINS:
        low = np.maximum(V.centre + margin * (rays[0] - V.centre), domain[0])
        high = np.minimum(V.centre + margin * (rays[1] - V.centre), domain[1])
        scale = np.maximum(high - V.centre, V.centre - low)
        if not np.all((low < V.centre) & (V.centre < high)):
            break
        # Not the enclosed equilibrium: V is a formula in x, whose zero is no coordinate here.
        centre = IntervalArray.exact(V.centre)
        found = LevelChart(V, centre, np.diag(scale), (low - V.centre) / scale, (high - V.centre) / scale, root is None)
        if _holds_equilibrium(found, root) and _is_closed(found, level):
            return found
    return "the level set is not proved to be closed inside the domain"


def _extent(V: FormulaV, level: float) -> tuple[Array, Array]:
    """Ends of the smallest box about the part of the set that rays from the centre see, each float64 (n,)."""
    n, box = V.loop.n, V.loop.box
    direction = np.random.default_rng(5).standard_normal((RAYS, n))
    direction = np.concatenate([direction, np.eye(n), -np.eye(n)]) * V.loop.half_widths
    with np.errstate(divide="ignore", invalid="ignore"):
        to_face = np.where(direction > 0, box[:, 1] - V.centre, box[:, 0] - V.centre) / direction
    ends = np.where(direction != 0, to_face, np.inf).min(axis=1)
    parts = np.arange(1, MARCH + 1) / MARCH
    points = V.centre + (ends[:, None] * parts)[:, :, None] * direction[:, None]
    with np.errstate(all="ignore"):
        above = ~(V.value(points) <= level)
    last = np.where(above.any(axis=1), above.argmax(axis=1), MARCH - 1)
    reached = points[np.arange(len(points)), last]
    return reached.min(axis=0), reached.max(axis=0)


def _holds_equilibrium(found: LevelChart, root: EquilibriumEnclosure | None) -> bool:
    """Whether the box lies inside the domain, and the equilibrium, where it is known, inside the box."""
    scale = np.diag(found.T)
    low, high = (found.centre + IntervalArray.exact(end) * scale for end in (found.low, found.high))
    if not _inside(found.loop, IntervalArray(low.low, high.high)):
        return False
    return root is None or bool(np.all((low.high < root.x.low) & (root.x.high < high.low)))


def _is_closed(found: LevelChart, level: float) -> bool:
    """Whether V > level all over the faces of the box."""
    n = found.loop.n
    assert isinstance(found.V, FormulaV)
    tape = Tape(n)
    value = tape.expression(found.V.tree, tape.loop(found.loop, found.states(tape)))
    program = tape.program([tape.number(1.0), value])  # 1 < 0 never holds: what is dropped has V > level
    for i in range(n):
        for end in (found.low[i], found.high[i]):
            low, high = found.low.copy(), found.high.copy()
            low[i] = high[i] = end
            search = negative_on_levels(program, low, high, (-np.inf, level), np.full(n, -1.0), FACE_BOXES)
            if search.answer is not Answer.PROVED:
                return False
    return True


def _inside(loop: Loop, box: IntervalArray) -> bool:
    """Whether a box (n,) lies strictly inside the domain."""
    domain = IntervalArray.numbers(end for pair in loop.domain for end in pair)
    return bool(np.all((box.low > domain.high[::2]) & (box.high < domain.low[1::2])))


def _rows(tape: Tape, numbers: IntervalArray) -> list[int]:
    return [tape.interval(low, high) for low, high in zip(numbers.low, numbers.high, strict=True)]


def _up(value: Array | float) -> Array:
    return np.asarray(np.nextafter(value, np.inf))
