"""The best polynomial: V of degree 4 to 8 by linear programmes, with the simulated edge of the basin as guide.

The unknown coefficients enter V and V̇ linearly. With R the distance of the edge along a ray: V >= 1 on θR and from
there outwards to the faces of the domain, V̇ <= -ε |z|² within θR, and the mean of V on θR as small as can be, which
draws {V <= 1} to the edge; or V bounded there and ε as large as can be. θ near 1 is tried first, and lowered where
there is no such V or no proof. Points at which V̇ < 0 fails become rows. What comes out is proved, or is nothing.

Source of the scheme: linear programmes for Lyapunov functions from simulation, as in Kapinski and others 2014 (from
memory); the rest was tried out.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import linprog

from roa.bound.level_set_proof import LevelSetProver
from roa.bound.lyapunov_function import Quadratic
from roa.bound.monomials import Monomials
from roa.bound.search_guide import Guide, Say
from roa.bound.statement import Bound, Strength
from roa.kernel.branch_and_bound import Answer

Array = NDArray[np.float64]

NAME = "best polynomial"
DEGREES = {1: (4, 6), 2: (6, 8), 3: (4, 6)}
DEGREES_MORE = (4,)
THETAS = (0.9985, 0.995, 0.985, 0.96, 0.92, 0.85, 0.75, 0.6)  # of the edge
GOOD = 0.985  # share of the volume within θR beyond which a lower θ cannot do better
INSIDE = np.linspace(0.05, 1.0, 20)  # parts of θR at which V̇ is looked at; in four states and more, every second
OUTSIDE = np.linspace(0.0, 1.0, 9)[1:] ** 1.5  # parts of the way from the edge to the face at which V is
LEAST_DECREASE = 1e-4  # ε, where it is not what is maximised
ROUNDS = 4  # of counterexamples
WORST = 300  # points that become rows in one round
SHARES = (0.999999, 0.9999, 0.999, 0.995, 0.98, 0.95, 0.9, 0.8)  # of the level below the lowest counterexample
BOXES, WORK = 400_000, 2.5e9  # of one proof: most boxes, and most elementary interval operations
NEAR = 1e-3  # |z|² below which floats do not tell the sign of V̇


def best_polynomial(guide: Guide, degree: int | None, boxes: int | None, say: Say) -> Bound:
    """Search for V of the largest proved level set; level 0 with the reason in the note where none is larger.

    Parameters
    ----------
    guide : in whose coordinates the best ellipsoid so far is the unit ball
    degree : of V; None for the degrees that the number of states affords
    boxes : most boxes of one proof; None for what some seconds can do
    say : told of every success
    """
    best = _Found(0.0, Bound(NAME, _ball(guide), 0.0, Strength.ESTIMATED, "no polynomial could be proved"))
    degrees = (degree,) if degree is not None else DEGREES.get(guide.n, DEGREES_MORE)
    for d in degrees:
        found = _of_degree(guide, d, boxes)
        if found is not None and found.volume > best.volume:
            best = found
            say(f"proved a polynomial V of degree {d}, with {best.volume:.4g} times the volume of the best ellipsoid")
        if best.part > GOOD:
            break
    if best.volume > 1.0 or best.bound.level == 0:
        return best.bound
    return Bound(
        NAME, best.bound.V, 0.0, Strength.ESTIMATED, "no polynomial was proved that exceeds the best ellipsoid"
    )


@dataclass(frozen=True)
class _Found:
    """A proved bound, its volume in that of the unit ball in z, and in that within the edge."""

    volume: float
    bound: Bound
    part: float = 0.0


def _ball(guide: Guide) -> Quadratic:
    return Quadratic(guide.loop, guide.centre, guide.S.T @ guide.S)


def _of_degree(guide: Guide, degree: int, boxes: int | None) -> _Found | None:
    monomials = Monomials.up_to(guide.n, degree)
    best: _Found | None = None
    for theta in THETAS:
        if best is not None and theta**guide.n * _volume(guide, guide.edge.radius) <= best.volume:
            break
        for widest in (True, False):
            coefficients = _Programme(guide, monomials, theta, widest).solve()
            found = None if coefficients is None else _proved(guide, monomials, coefficients, boxes)
            if found is not None and (best is None or found.volume > best.volume):
                best = found
            if coefficients is None or (best is not None and best.part > GOOD * theta**guide.n):
                break
    return best


def _volume(guide: Guide, radius: Array) -> float:
    """Volume within the radii of the rays, in that of the unit ball; an estimate."""
    return float(np.mean(radius**guide.n))


class _Programme:
    """The linear programme for one θ: rows over the coefficients and a last unknown, ε or nothing.

    Parameters
    ----------
    widest : draw {V <= 1} to the edge; else maximise ε
    """

    def __init__(self, guide: Guide, monomials: Monomials, theta: float, widest: bool) -> None:
        self._guide, self._monomials, self._widest = guide, monomials, widest
        self._k = len(monomials.exponents)
        self._theta, self._reach = theta, theta * guide.edge.radius
        edge, face = guide.edge.radius, guide.edge.face
        parts = INSIDE if guide.n <= 3 else INSIDE[1::2]
        self._at_edge = monomials.values(guide.along_rays(self._reach[:, None]))
        beyond = edge[:, None] + OUTSIDE * (face - edge)[:, None]
        self._beyond = monomials.values(guide.along_rays(beyond))
        self._decreases: list[Array] = []
        self._add(guide.along_rays(self._reach[:, None] * parts))
        self._curvatures: list[Array] = []

    def solve(self) -> Array | None:
        """Coefficients of V, or None where there are none; counterexamples within θR have become rows."""
        coefficients = self._with_definite_part()
        for _ in range(ROUNDS):
            if coefficients is None:
                return None
            against = self._counterexamples(coefficients)
            if not len(against):
                break
            self._add(against)
            coefficients = self._with_definite_part()
        return coefficients

    def _add(self, z: Array) -> None:
        flow = self._guide.flow(z)
        good = np.all(np.isfinite(flow), axis=1)
        z, flow = z[good], flow[good]
        self._decreases.append(self._monomials.derivatives(z, flow) / np.einsum("mi,mi->m", z, z)[:, None])

    def _counterexamples(self, coefficients: Array) -> Array:
        """The points within {V <= 1} and θR at which V̇ is highest, where it is not below zero."""
        z = self._guide.checked
        V = self._monomials.values(z) @ coefficients
        z = z[V <= 1.0]
        rate = self._monomials.derivatives(z, self._guide.flow(z)) @ coefficients
        size = np.einsum("mi,mi->m", z, z)
        against = (rate >= 0) & (size > NEAR) & (size < (self._theta * self._guide.edge_towards(z)) ** 2)
        order = np.argsort(-rate[against] / size[against], kind="stable")[:WORST]
        return np.asarray(z[against][order])

    def _with_definite_part(self) -> Array | None:
        """Solve until the quadratic part of V̇ is negative definite: eigenvectors become rows."""
        A = self._guide.A
        for _ in range(20):
            coefficients = self._solve_once()
            if coefficients is None:
                return None
            H = self._monomials.quadratic_part(coefficients)
            values, vectors = np.linalg.eigh(H @ A + A.T @ H)
            if values[-1] < -LEAST_DECREASE / 10:
                return coefficients
            self._curvatures += [self._curvature(v) for v in vectors.T[values >= -LEAST_DECREASE / 10]]
        return None

    def _curvature(self, v: Array) -> Array:
        """Row of the quadratic part of V̇ along v."""
        quadratic = self._monomials.exponents.sum(axis=1) == 2
        return np.where(quadratic, self._monomials.derivatives(v[None], (self._guide.A @ v)[None])[0], 0.0)

    def _solve_once(self) -> Array | None:
        decreases = np.concatenate([*self._decreases, np.reshape(self._curvatures, (-1, self._k))])
        inward = -np.concatenate([self._at_edge, self._beyond])
        if self._widest:
            cost = self._at_edge.mean(axis=0)
            rows = np.concatenate([inward, decreases])
            limits = np.concatenate([np.full(len(inward), -1.0), np.full(len(decreases), -LEAST_DECREASE)])
        else:
            cost = np.append(np.zeros(self._k), -1.0)
            rows = np.concatenate([inward, decreases, self._at_edge])
            last = np.concatenate([np.zeros(len(inward)), np.ones(len(decreases)), np.zeros(len(self._at_edge))])
            rows = np.concatenate([rows, last[:, None]], axis=1)
            limits = np.concatenate(
                [np.full(len(inward), -1.0), np.zeros(len(decreases)), np.full(len(self._at_edge), 1.5)]
            )
        found = linprog(cost, A_ub=rows, b_ub=limits, bounds=(None, None), method="highs")
        if found.status != 0 or (not self._widest and found.x[-1] <= 0):
            return None
        return np.asarray(found.x[: self._k])


def _proved(guide: Guide, monomials: Monomials, coefficients: Array, boxes: int | None) -> _Found | None:
    """Prove the largest level that can be had of a V, with its volume."""
    V = guide.function(monomials, coefficients)
    prover = LevelSetProver(V)
    if not prover.is_ready:
        return None
    z = guide.checked
    values = monomials.values(z) @ coefficients
    rates = monomials.derivatives(z, guide.flow(z)) @ coefficients
    size = np.einsum("mi,mi->m", z, z)
    # Beyond the edge {V <= c} may have other parts, of which nothing is asked.
    against = ~(rates < 0) & (size > NEAR) & (size < guide.edge_towards(z) ** 2)
    faces = monomials.values(guide.along_rays(guide.edge.face[:, None])) @ coefficients
    highest = float(min(values[against].min(initial=np.inf), faces.min()))
    budget = min(BOXES, int(WORK / prover.box_work)) if boxes is None else boxes
    for share in SHARES:
        level = _rounded(share * highest)
        if not level > 0:
            return None
        proof = prover.prove(level, budget)
        if proof.answer is Answer.PROVED:
            note = (
                f"a polynomial of degree {monomials.exponents.sum(axis=1).max()}: V̇ < 0 is proved by interval branch "
            )
            note += f"and bound ({proof.boxes} boxes) on the part of the set that holds the equilibrium"
            bound = Bound(NAME, V, level, Strength.PROVED, note)
            volume = _volume(guide, _radii(guide, monomials, coefficients, level))
            return _Found(volume, bound, volume / _volume(guide, guide.edge.radius))
        if proof.witness is not None:
            at = guide.to_z(proof.witness)[None]
            highest = min(highest, float((monomials.values(at) @ coefficients)[0]))
    return None


def _rounded(level: float) -> float:
    """The level in few digits, rounded down, so that it can be written in a configuration."""
    if not level > 0:
        return 0.0
    digits = 9 - int(np.floor(np.log10(level)))
    return float(f"{np.floor(level * 10.0**digits) / 10.0**digits:.{max(digits, 0)}f}")


def _radii(guide: Guide, monomials: Monomials, coefficients: Array, level: float) -> Array:
    """How far the rays run within {V <= level}, (m,)."""
    parts, face = np.linspace(0.02, 1.0, 50), guide.edge.face

    def over(radius: Array) -> NDArray[np.bool_]:
        values = monomials.values(guide.along_rays(radius)) @ coefficients
        return np.asarray(values.reshape(radius.shape) > level)

    left = over(face[:, None] * parts)
    first = np.where(left.any(axis=1), left.argmax(axis=1), len(parts))
    near, far = face * first / len(parts), face * np.minimum(first + 1, len(parts)) / len(parts)
    for _ in range(20):
        middle = (near + far) / 2
        outside = over(middle[:, None])[:, 0]
        near, far = np.where(outside, near, middle), np.where(outside, middle, far)
    return near
