"""Proof by the invariance principle, for energies: V̇ <= 0 on {V <= c} is enough if no trajectory can stay where V̇ = 0.

1. The connected part Ω of {V <= c} that holds the equilibrium is closed inside a box in the domain (`level_chart`);
   dynamics and slopes of V are defined and bounded on it.
2. V̇ = -(w_1 s_1² + … + w_k s_k²) as an identity of formulas (`weighted_squares`), and all w_i > 0 on Ω. So Ω is compact
   and positively invariant, and each of its trajectories approaches a set M, made of whole trajectories on which V̇ = 0,
   that is all s_i = 0, and therefore all their derivatives along the trajectory vanish as well.
3. Some small set {U <= a} about the equilibrium lies in the basin, by a strict proof for another V, called U here.
4. At every point of Ω outside of that, some s_i or Lie derivative of one does not vanish. So M lies in {U <= a}, whose
   interior every trajectory of Ω then enters, and converges.

Nothing is asked of the sign of V: where all trajectories fall towards the equilibrium, V is above zero by itself.
Source: LaSalle 1960; Khalil, Nonlinear Systems, 3rd ed. 2002, theorem 4.4 (from memory).
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from decimal import Decimal
from fractions import Fraction

import numpy as np
from numpy.typing import NDArray

from roa.bound.contact_level import contact_level
from roa.bound.equilibrium_enclosure import EquilibriumEnclosure, enclose_equilibrium
from roa.bound.level_chart import LevelChart, level_chart
from roa.bound.level_proof import LevelProver
from roa.bound.lyapunov_equation import solve_lyapunov, weight_matrix
from roa.bound.lyapunov_function import FormulaV, LyapunovFunction, Quadratic
from roa.bound.statement import Bound, Strength
from roa.kernel.branch_and_bound import Answer, Search, negative_on_levels
from roa.kernel.interval_arrays import IntervalArray
from roa.kernel.tape import Program, Tape, enclose_number
from roa.loop.derivative import NotSmooth, derivative, product, total
from roa.loop.expression import Binary, Expression, Name, Number
from roa.loop.formula_text import to_text
from roa.loop.model import Loop
from roa.loop.weighted_squares import WeightedSquare, decrease_as_squares, written_out

Array = NDArray[np.float64]

WORK, BOXES = 4e9, 1_000_000  # most elementary interval operations, and most boxes, of each search
BOUNDED = 1e100  # what the squares of the dynamics and of the slopes of V must stay below
SHARES = (0.9, 0.6, 0.3, 0.1, 0.03, 0.01, 1e-3, 1e-4)  # of the contact level, for the small set that is proved first
STRICT_BOXES = 5000  # for each of them
MOST_DERIVATIVES = 3  # Lie derivatives of each s_i that are looked at
LONGEST = 60  # characters of a root in the argument


@dataclass(frozen=True)
class InvarianceProof:
    """What came of an attempt.

    Attributes
    ----------
    is_proved : whether every start in the connected part of {V <= c} converges to the equilibrium
    boxes : int, that were looked at in all searches
    reason : the argument, or why there is none; one sentence
    """

    is_proved: bool
    boxes: int
    reason: str


def prove_by_invariance(V: LyapunovFunction, level: Decimal | Fraction | float) -> InvarianceProof:
    """Try to prove that the connected part of {V <= level} that holds the equilibrium lies in the basin."""
    loop, c = V.loop, enclose_number(level)[1]
    if loop.hold is not None or loop.disturbances:
        return _open(0, "V̇ along the loop is not all that moves it")
    if loop.limits:
        return _open(0, "that the set keeps within the limits is not looked at by this argument")
    root = enclose_equilibrium(loop, V.centre)
    formula = _as_formula(V, root)
    dynamics = written_out(loop)
    if root is None or formula is None or dynamics is None or not 0 < c < np.inf:
        return _open(0, "the equilibrium could not be enclosed, or V not be written as a formula")
    terms = decrease_as_squares(loop, formula.tree)
    if terms is None:
        return _open(0, "V̇ could not be written as minus a sum of squares")
    coordinates = level_chart(formula, c)
    if isinstance(coordinates, str):
        return _open(0, coordinates)
    strict = _strict_set(V)
    if strict is None:
        return _open(0, "no small set about the equilibrium could be proved to lie in the basin")
    cell = _cell_inside(strict, root, coordinates)
    boxes = 0
    for program, fault in (
        (_defined(coordinates, dynamics), "the dynamics or the slopes of V are not shown to be bounded on the set"),
        *((_opposite(coordinates, term.weight), f"the weight {_short(term.weight)} in V̇ is not shown to be positive")
          for term in terms),
    ):  # fmt: skip
        found = _search(program, coordinates, c, np.full(loop.n, -1.0))
        boxes += found.boxes
        if found.answer is not Answer.PROVED:
            return _open(boxes, fault)
    lies = [_derivatives(term.root, loop, dynamics) for term in terms]
    for order in range(1, 1 + MOST_DERIVATIVES):
        found = _search(_vanishing(coordinates, [chain[: 1 + order] for chain in lies]), coordinates, c, cell)
        boxes += found.boxes
        if found.answer is Answer.PROVED:
            return InvarianceProof(True, boxes, _argument(terms, order, strict, boxes))
    return _open(boxes, "it could not be shown that no trajectory stays where V̇ = 0")


def _argument(terms: tuple[WeightedSquare, ...], order: int, strict: Bound, boxes: int) -> str:
    squares = " + ".join(f"({_short(term.weight)})*({_short(term.root)})**2" for term in terms)
    derivatives = "its first Lie derivative" if order == 1 else f"its first {order} Lie derivatives"
    if len(terms) > 1:
        derivatives = derivatives.replace("its", "their")
    roots = "the roots" if len(terms) > 1 else "the root"
    return (
        f"V̇ <= 0 only, by the identity V̇ = -({squares}) with weights proved to be positive; every start converges by "
        f"the invariance principle, since outside a set that lies in the basin (level {strict.level:.4g} of a "
        f"quadratic with V̇ < 0) {roots} under the squares and {derivatives} never vanish together (proved, {boxes} "
        "boxes)"
    )


def _short(tree: Expression) -> str:
    text = to_text(tree)
    return text if len(text) <= LONGEST else f"{text[: LONGEST - 1]}…"


def _open(boxes: int, reason: str) -> InvarianceProof:
    return InvarianceProof(False, boxes, reason)


def _as_formula(V: LyapunovFunction, root: EquilibriumEnclosure | None) -> FormulaV | None:
    """V as a formula in the states; a quadratic has one only where the equilibrium is a float exactly."""
    if isinstance(V, FormulaV):
        return None if V.from_equilibrium else V
    if root is None or np.any(root.x.low != root.x.high):
        return None
    exact = V.exact or tuple(tuple(map(Fraction, row)) for row in V.P.tolist())
    offsets: list[Expression] = [
        Binary("-", Name(state), Number(Decimal(x)))
        for state, x in zip(V.loop.states, root.x.low.tolist(), strict=True)
    ]
    tree: Expression = Number(Decimal(0))
    for i, row in enumerate(exact):
        for j, entry in enumerate(row):
            if entry:
                number = Binary("/", Number(Decimal(entry.numerator)), Number(Decimal(entry.denominator)))
                tree = total(tree, product(number, product(offsets[i], offsets[j])))
    return FormulaV(V.loop, V.centre, tree, to_text(tree))


def _strict_set(V: LyapunovFunction) -> Bound | None:
    """A level of the Lyapunov equation's quadratic that is proved to lie in the basin."""
    loop = V.loop
    A = loop.jacobian(V.centre)
    if not np.all(np.isfinite(A)) or np.linalg.eigvals(A).real.max() >= 0:
        return None
    U = Quadratic(loop, V.centre, solve_lyapunov(A, weight_matrix("domain", loop)))
    estimate, prover = contact_level(U), LevelProver(U)
    # The larger it is the fewer boxes are left for the rest, but a small one does.
    for share in SHARES if prover.is_ready and estimate.level > 0 else ():
        if prover.prove(share * estimate.level, STRICT_BOXES).answer is Answer.PROVED:
            return replace(estimate, level=share * estimate.level, strength=Strength.PROVED)
    return None


def _cell_inside(strict: Bound, root: EquilibriumEnclosure, coordinates: LevelChart) -> Array:
    """Half-widths in z, float64 (n,), of a box about the chart's centre that is proved to lie in {U < a}."""
    U, n = strict.V, coordinates.loop.n
    assert isinstance(U, Quadratic)
    sizes = np.diag(coordinates.T)
    reach = np.sqrt(np.diag(np.linalg.inv(U.P)))
    share = np.sqrt(strict.level / (reach @ np.abs(U.P) @ reach))
    for shrink in (1 - 1e-9, 0.999, 0.9, 0.5):
        cell = shrink * share * reach / sizes
        z = IntervalArray(-cell, cell) * sizes
        y = coordinates.centre + z - root.x  # encloses x - x* over the box
        size = IntervalArray.exact(y.magnitude[:, None])
        highest = size.T @ (IntervalArray.exact(U.enclosed_P.magnitude) @ size)
        if highest.high[0, 0] < strict.level:
            return np.asarray(cell)
    return np.full(n, -1.0)


def _search(program: Program, coordinates: LevelChart, c: float, cell: Array) -> Search:
    n = coordinates.loop.n
    budget = min(BOXES, int(WORK / (len(program.ops) * (1 + n) * (2 + n))))
    return negative_on_levels(program, coordinates.low, coordinates.high, (-np.inf, c), cell, budget)


def _begun(coordinates: LevelChart) -> tuple[Tape, dict[str, int], int]:
    """A tape with the rows of the loop's names and of V."""
    assert isinstance(coordinates.V, FormulaV)
    tape = Tape(coordinates.loop.n)
    names = tape.loop(coordinates.loop, coordinates.states(tape))
    return tape, names, tape.expression(coordinates.V.tree, names)


def _defined(coordinates: LevelChart, dynamics: tuple[Expression, ...]) -> Program:
    """Tape of Σ f² + Σ (dV/dx)² - BOUNDED: below zero means defined and bounded, since a pole is never below zero."""
    tape, names, value = _begun(coordinates)
    assert isinstance(coordinates.V, FormulaV)
    slopes = [derivative(coordinates.V.tree, state) for state in coordinates.loop.states]
    rows = [tape.expression(tree, names) for tree in (*dynamics, *coordinates.loop.dynamics, *slopes)]
    squares = tape.total(tape.multiply(row, row) for row in rows)
    return tape.program([tape.subtract(squares, tape.number(BOUNDED)), value])


def _opposite(coordinates: LevelChart, weight: Expression) -> Program:
    tape, names, value = _begun(coordinates)
    return tape.program([tape.negate(tape.expression(weight, names)), value])


def _vanishing(coordinates: LevelChart, chains: list[list[Expression]]) -> Program:
    """Tape of minus the sum of squares of all roots and Lie derivatives: below zero where one does not vanish."""
    tape, names, value = _begun(coordinates)
    rows = [tape.expression(tree, names) for chain in chains for tree in chain]
    return tape.program([tape.negate(tape.total(tape.multiply(row, row) for row in rows)), value])


def _derivatives(root: Expression, loop: Loop, dynamics: tuple[Expression, ...]) -> list[Expression]:
    """A root and its derivatives along the trajectories, as many as the formulas' smoothness allows."""
    chain = [root]
    try:
        for _ in range(MOST_DERIVATIVES):
            along = Number(Decimal(0))
            for state, rate in zip(loop.states, dynamics, strict=True):
                along = total(along, product(derivative(chain[-1], state), rate))  # type: ignore[assignment]
            chain.append(along)
    except NotSmooth:
        pass
    return chain
