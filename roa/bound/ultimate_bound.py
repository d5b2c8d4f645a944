"""The ultimate bound: {V <= level}, from which all trajectories enter {V <= inner} for good, and the best shape.

The shape: with x' = Ax + Bd and |d| <= 1, the ellipsoid {x'X⁻¹x <= 1} holds every trajectory that it has once held if
AX + XA' + αX + BB'/α = 0 for some α > 0; α is chosen for the smallest volume. B takes each disturbance at half of its
interval, so that the shape fits, while the levels are those that are proved for the loop as it is.
Source: Boyd, El Ghaoui, Feron and Balakrishnan, Linear Matrix Inequalities in System and Control Theory, 1994,
section 6.1 (from memory).
"""

from __future__ import annotations

from decimal import Decimal
from fractions import Fraction

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import solve_continuous_lyapunov

from roa.bound.lyapunov_function import LyapunovFunction, Quadratic
from roa.bound.ring_levels import estimate_ring
from roa.bound.ring_proof import RingProof, RingProver
from roa.bound.statement import Bound, Strength
from roa.kernel.branch_and_bound import Answer
from roa.loop.equilibrium import Equilibrium
from roa.loop.symbolic import Partials

Array = NDArray[np.float64]

NAME, BEST = "ultimate bound", "best ring"
WIDER = (1e-5, 1e-4, 1e-3, 1e-2, 0.03, 0.1, 0.3)  # by which the ring's levels are drawn in, each by this part
WORK, BOXES = 1.2e9, 200_000  # most elementary interval operations, and most boxes, of all attempts together
PART = 0.4  # of the budget that is left for each attempt
RATES = 400  # values of α


def ultimate_bound(V: LyapunovFunction, inner: Decimal | None, name: str = NAME) -> Bound:
    """Derive the ring of V, or the outer level to a given inner one, proved as far as that can be done."""
    estimate = estimate_ring(V, None if inner is None else float(inner))
    if not estimate.outer > 0:
        found = "no ring on which V falls was found" if inner is None else "V does not fall on {V = inner} everywhere"
        return Bound(name, V, 0.0, Strength.ESTIMATED, found)
    prover = RingProver(V)
    left = prover.budget(estimate.outer, WORK, BOXES)
    first, last = 0, len(WIDER) - 1
    best: tuple[float, float, RingProof] | None = None
    reason = ""
    while first <= last:
        # The narrowest drawing in first: most loops reach it at once. Then by halves.
        middle = first if best is None and first == 0 else (first + last) // 2
        c_in = estimate.inner * (1 + WIDER[middle]) if inner is None else float(inner)
        c_out = estimate.outer / (1 + WIDER[middle])
        proof = prover.prove(c_in if inner is None else inner, c_out, int(PART * left)) if c_in < c_out else None
        if proof is not None and proof.answer is Answer.PROVED:
            best, last = (c_in, c_out, proof), middle - 1
        else:
            reason = proof.reason if proof is not None and proof.reason else reason
            first = middle + 1
        left -= proof.boxes if proof is not None else 0
    if best is None:
        note = f"no ring could be proved{f' ({reason})' if reason else ''}"
        return Bound(name, V, estimate.outer, Strength.ESTIMATED, note, inner=estimate.inner)
    return Bound(name, V, best[1], Strength.PROVED, ring_argument(best[2], V), inner=best[0])


def ring_argument(proof: RingProof, V: LyapunovFunction) -> str:
    """The argument of a proof, for notes and reasons."""
    words = f"V̇ < 0 is proved on the ring by interval branch and bound ({proof.boxes} boxes)"
    if V.loop.disturbances:
        words += f" for {disturbance_words(V)}"
    if proof.exact_centre:
        point = ", ".join(f"{name} = {x!r}" for name, x in zip(V.loop.states, V.centre.tolist(), strict=True))
        words += f"; no equilibrium is proved, and V is about the point {point}"
    return words


def disturbance_words(V: LyapunovFunction) -> str:
    """Say what the disturbances may do."""
    each = [f"{name} anywhere in [{low}, {high}]" for name, (low, high) in V.loop.disturbances.items()]
    return f"every course of {' and '.join(each)}"


def best_ring_shape(V: LyapunovFunction, equilibrium: Equilibrium) -> Quadratic | None:
    """The quadratic whose inner level set is smallest for the linearisation, None where there is none."""
    loop = V.loop
    names = tuple(loop.disturbances)
    if not names or equilibrium.stability != "stable":
        return None
    others = tuple(name for name in loop.parameters if name not in names)
    partials = Partials((*loop.states, *names), others, loop.signals, loop.dynamics)
    B = partials.jacobian(loop.values_of(equilibrium.x), ())[..., len(loop.states) :]
    B = B * np.array([float(high - low) / 2 for low, high in loop.disturbances.values()])
    X = _smallest(equilibrium.A, B)
    if X is None:
        return None
    P = np.linalg.inv(X)
    P = (P + P.T) / 2
    # Floats of a short decimal form, so that the matrix can be copied into a configuration.
    rounded = np.array([[float(f"{entry:.6g}") for entry in row] for row in P])
    if not np.all(np.linalg.eigvalsh(rounded) > 0):
        return None
    exact = tuple(tuple(Fraction(Decimal(repr(float(entry)))) for entry in row) for row in rounded)
    return Quadratic(loop, V.centre, rounded, exact)


def _smallest(A: Array, B: Array) -> Array | None:
    fastest = -2 * float(np.linalg.eigvals(A).real.max())
    best, volume = None, np.inf
    for share in np.arange(1, RATES) / RATES:
        rate = share * fastest
        X = solve_continuous_lyapunov(A + rate / 2 * np.eye(len(A)), -B @ B.T / rate)
        sign, size = np.linalg.slogdet(X)
        if sign > 0 and size < volume and np.linalg.eigvalsh((X + X.T) / 2).min() > 0:
            best, volume = (X + X.T) / 2, size
    return best
