"""The P of the largest ellipsoid: successive linear programmes over P, against rays on which f is sampled once.

Along a ray from the equilibrium V̇ is linear in P, so that a sample of f serves for every P. With the ellipsoid
scaled to level 1 and whitened, P = I + Δ, the level at which a ray first meets V̇ = 0 has a gradient in P, and so
has the volume: a linear programme over Δ in a trust region takes the step, and it is kept where the volume grew.
Where V̇ comes near zero inside, which those gradients do not show, there are rows of their own. Rays are few
where there are many states: those with the lowest ends are turned at the new P, what is found joins the rays,
and the search goes on until turning finds nothing lower.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import linprog

from roa.bound.contact_level import contact_level, rough_level, unit_vectors
from roa.bound.lyapunov_function import Quadratic
from roa.loop.model import Loop

Array = NDArray[np.float64]

ROUNDS = 6  # of whitening, each with rays of its own
ROUNDS_FIRST = 2  # after which only the best start goes on
CHECKS = 4  # of what was found, each with further rounds where it fails
CUTS = 6  # times in a round that turned rays join
STEPS = 15  # linear programmes between two cuts
RAYS = {1: 2, 2: 360, 3: 1024}
RAYS_MORE = 2048  # in four states and more
RADII = np.concatenate([np.linspace(0.03, 0.9, 18), np.linspace(0.92, 1.3, 20), np.linspace(1.35, 2.6, 16)])
TRUST = 0.3  # on the entries of Δ, at first
LEAST_TRUST, LEAST_STEP = 4e-3, 1e-5  # below which there is no further round, and no further linear programme
ENOUGH = 1e-4  # gain of the logarithm of the volume in a round that is not worth another
ROWS = 1000  # most rows of a kind in a linear programme
EIGENVECTOR_CUTS = 12  # rounds of them for one step
LEAST_DECAY = 1e-4  # of V by the linear part, against the norm of A in the whitened frame
TURNED, TRIALS = (6, 16), (8, 24)  # lowest rays that are turned, and trials for each: in the plane, and beyond
TURNS = 14  # rounds of turning
KEPT = 256  # directions that the next round takes over
FIRST_TURN, SHRINK = 0.25, 0.65  # rad, and by how much it shrinks from round to round


def search_shape(loop: Loop, centre: Array, starts: Sequence[Array]) -> Array | None:
    """Return a P at whose level 1 the ellipsoid is the largest that was found; an estimate. None where none is.

    Parameters
    ----------
    loop : Loop
    centre : float64 (n,), the equilibrium
    starts : symmetric matrices (n, n); those that are no Lyapunov functions are left out
    """
    found = [scaled for P in starts if (scaled := _scaled(loop, centre, P)) is not None]
    if not found:
        return None
    climbs = [_Climb(loop, centre, scaled) for scaled in found]
    for climb in climbs:
        climb.go(ROUNDS_FIRST)
    best = max(climbs, key=lambda climb: climb.log_volume)
    best.go(ROUNDS - ROUNDS_FIRST)
    for _ in range(CHECKS):
        if best.is_confirmed():
            break
        best.go(ROUNDS_FIRST)
    return best.P


def _scaled(loop: Loop, centre: Array, P: Array) -> Array | None:
    """P with its contact level at about 1."""
    level = rough_level(Quadratic(loop, centre, P))
    return P / level if level > 0 else None


class _Climb:
    """The climb from one start: rounds of whitening, and in each of them linear programmes and cuts."""

    def __init__(self, loop: Loop, centre: Array, P: Array) -> None:
        self._loop, self._centre = loop, centre
        self.P = P
        self._ends = np.zeros((0, loop.n))  # directions that were found to end early, relative to the equilibrium
        self._trust = TRUST

    @property
    def log_volume(self) -> float:
        """Logarithm of the volume of {V <= 1}, but for a constant."""
        return -0.5 * float(np.linalg.slogdet(self.P)[1])

    def is_confirmed(self) -> bool:
        """Whether the finer rays of `contact_level` find no lower end; what they find is taken over."""
        bound = contact_level(Quadratic(self._loop, self._centre, self.P))
        if bound.contact is None or not bound.level > 0 or bound.level > 1 - ENOUGH:
            return True
        self.P = self.P / bound.level
        self._ends = np.concatenate([self._ends, (bound.contact - self._centre)[None]])
        self._trust = TRUST
        return False

    def go(self, rounds: int) -> None:
        """Climb so many rounds further."""
        n = self._loop.n
        for _ in range(rounds):
            if self._trust < LEAST_TRUST:
                return
            T = np.linalg.inv(np.linalg.cholesky(self.P)).T
            back = np.linalg.inv(T)
            rays = _Rays(self._loop, self._centre, T)
            rays.join(unit_vectors(n, RAYS.get(n, RAYS_MORE)))
            rays.join(_unit(self._ends @ back.T))
            M, gain = rays.climb(self._trust)
            self._ends = np.concatenate([self._ends, rays.turned @ T.T])[-KEPT:]
            self.P = back.T @ M @ back
            if gain < ENOUGH:
                self._trust /= 4


def _unit(vectors: Array) -> Array:
    return np.asarray(vectors / np.linalg.norm(vectors, axis=-1, keepdims=True).clip(1e-300))


@dataclass(frozen=True)
class _Ends:
    """Where rays first meet V̇ = 0 (those that do).

    Attributes
    ----------
    ray, j : int (k,), the ray, and the sample at or behind the end
    part : (k,), place of the end between the samples j - 1 and j
    r, level, slope : (k,), radius and V there, and d/dr of V̇ / 2r
    """

    ray: NDArray[np.int64]
    j: NDArray[np.int64]
    part: Array
    r: Array
    level: Array
    slope: Array


@dataclass(frozen=True)
class _View:
    """An ellipsoid M: its log volume at its level, that level, and the rows of a linear programme about it."""

    size: float
    level: float
    rows: Array
    limits: Array


class _Rays:
    """V̇ along rays y = r T u in the whitened coordinates of one ellipsoid, for any P = T^-T M T^-1.

    Parameters
    ----------
    T : float64 (n, n), the whitening: T'PT = I at the start
    """

    def __init__(self, loop: Loop, centre: Array, T: Array) -> None:
        self._loop, self._centre, self._T, self._n = loop, centre, T, loop.n
        self._gaps = np.abs(loop.box - centre[:, None]).min(axis=1)
        self._back = np.linalg.inv(T).T
        self._pairs = np.tril_indices(loop.n)
        self._twice = np.where(self._pairs[0] == self._pairs[1], 1.0, 2.0)
        A = np.linalg.inv(T) @ loop.jacobian(centre) @ T
        self._A = A / np.linalg.norm(A)
        self._slowest = np.zeros((0, loop.n))  # directions in which the linear part once failed to decrease V
        self.turned = np.zeros((0, loop.n))  # where turning has ended
        self._u = np.zeros((0, loop.n))
        self._g = np.zeros((0, len(RADII), loop.n))
        self._known = np.zeros((0, len(RADII)), dtype=bool)

    def join(self, u: Array) -> None:
        """Add rays along the unit vectors u (m, n)."""
        g, known = self._sample(u)
        self._u = np.concatenate([self._u, u])
        self._g = np.concatenate([self._g, g])
        self._known = np.concatenate([self._known, known])

    def climb(self, trust: float) -> tuple[Array, float]:
        """Climb from M = I; M of the largest ellipsoid that no ray cuts, at level 1, and what it gained."""
        start = np.eye(self._n)
        self._turn(start)
        M = start / self._look(start, trust).level
        for _ in range(CUTS):
            M = self._climb_between_cuts(M, trust)
            before = self._look(M, trust).size
            self._turn(M)
            after = self._look(M, trust)
            if not after.size > self._look(start, trust).size:
                M = start
            elif after.size > before - ENOUGH:
                break
        view, first = self._look(M, trust), self._look(start, trust)
        return M / view.level, view.size - first.size

    def _climb_between_cuts(self, M: Array, trust: float) -> Array:
        view = self._look(M, trust)
        for _ in range(STEPS):
            if trust < LEAST_STEP or not np.isfinite(view.size):
                break
            step = self._step(M, view, trust)
            if step is None or np.linalg.eigvalsh(M + step)[0] <= 1e-3:
                trust /= 2
                continue
            new = self._look(M + step, trust)
            if not new.size > view.size + 1e-9:
                trust /= 3
                continue
            if new.size - view.size < ENOUGH / 10:
                return (M + step) / new.level
            M = (M + step) / new.level  # back to level 1, so that entries of Δ keep their meaning
            view = self._look(M, trust)
        return M

    def _sample(self, u: Array) -> tuple[Array, NDArray[np.bool_]]:
        """T^-1 f along rays, (m, s, n), and where it is known."""
        points = self._centre + RADII[:, None] * (u @ self._T.T)[:, None]
        with np.errstate(all="ignore"):
            g = self._loop.rhs(points) @ self._back
        box = self._loop.box
        known = np.all((points >= box[:, 0]) & (points <= box[:, 1]) & np.isfinite(g), axis=2)
        g[~known] = 0.0
        return g, known

    def _ends(self, u: Array, g: Array, known: NDArray[np.bool_], M: Array) -> tuple[_Ends, Array]:
        """Ends of rays, and V̇ / 2r at all samples (m, s).

        A ray that leaves the domain first has no end: the faces have rows of their own.
        """
        uM = u @ M
        q = np.einsum("mi,msi->ms", uM, g)
        over = (q >= 0) & known
        stop = over | ~known
        first = np.where(stop.any(axis=1), stop.argmax(axis=1), 0)
        ray = np.flatnonzero(over[np.arange(len(u)), first])
        j = first[ray]
        before = np.maximum(j - 1, 0)
        q0, q1, r0, r1 = q[ray, before], q[ray, j], RADII[before], RADII[j]
        slope = (q1 - q0) / np.where(j > 0, r1 - r0, 1.0)
        part = np.where(j > 0, -q0 / np.where(q1 > q0, q1 - q0, 1.0), 0.0)
        r = np.where(j > 0, r0 + part * (r1 - r0), 0.0)
        level = r**2 * np.einsum("mi,mi->m", uM[ray], u[ray])
        return _Ends(ray, j, part, r, level, slope), q

    def _turn(self, M: Array) -> None:
        """Turn the rays of the lowest ends by random steps of shrinking length; what is lower joins the rays."""
        ends, _ = self._ends(self._u, self._g, self._known, M)
        if self._n == 1 or not len(ends.ray):
            return
        order = np.argsort(ends.level, kind="stable")[: TURNED[self._n > 2]]
        u, level = self._u[ends.ray[order]], ends.level[order]
        random = np.random.default_rng(13)
        size, trials, found = FIRST_TURN, TRIALS[self._n > 2], [np.zeros((0, self._n))]
        for _ in range(TURNS):
            turned = _unit(u[:, None] + size * random.normal(size=(len(u), trials, self._n)) / np.sqrt(self._n))
            flat = turned.reshape(-1, self._n)
            new, _ = self._ends(flat, *self._sample(flat), M)
            levels = np.full(len(flat), np.inf)
            levels[new.ray] = new.level
            by_ray = levels.reshape(len(u), trials)
            choice = by_ray.argmin(axis=1)
            lowest = by_ray[np.arange(len(u)), choice]
            better = lowest < level
            u = np.where(better[:, None], turned[np.arange(len(u)), choice], u)
            level = np.where(better, lowest, level)
            found.append(u[better])
            size *= SHRINK
        self.turned = np.concatenate([self.turned, u])
        self.join(np.concatenate(found))

    def _step(self, M: Array, view: _View, trust: float) -> Array | None:
        """Δ that makes the ellipsoid larger to first order: least tr(M^-1 Δ) with rows Δ >= limits.

        The linear part must go on to decrease V; that is no row but a matrix inequality, taken by eigenvectors.
        """
        inverse = np.asarray(np.linalg.inv(M), dtype=np.float64)
        cost = self._entries(inverse)
        for _ in range(EIGENVECTOR_CUTS):
            v = self._slowest
            turned = v @ self._A.T
            decay = -self._entries(v[:, :, None] * turned[:, None])
            limits = LEAST_DECAY + np.einsum("mi,ij,mj->m", v, M, turned)
            rows, least = np.concatenate([view.rows, decay]), np.concatenate([view.limits, limits])
            found = linprog(cost, A_ub=-rows, b_ub=-least, bounds=(-trust, trust), method="highs")
            if found.status != 0 or found.fun > -1e-9:
                return None
            step = np.zeros((self._n, self._n))
            step[self._pairs] = found.x
            step = step + np.tril(step, -1).T
            linear = (M + step) @ self._A
            value, vector = np.linalg.eigh(linear + linear.T)
            if value[-1] < -LEAST_DECAY:
                return step
            self._slowest = np.concatenate([self._slowest, vector.T[value >= -LEAST_DECAY]])
        return None

    def _entries(self, matrices: Array) -> Array:
        """Weights of the lower triangle of Δ in <matrix, Δ>, (..., n, n) -> (..., k)."""
        symmetric = (matrices + np.swapaxes(matrices, -1, -2)) / 2
        return np.asarray(symmetric[(..., *self._pairs)] * self._twice)

    def _look(self, M: Array, trust: float) -> _View:
        ends, q = self._ends(self._u, self._g, self._known, M)
        face_levels, face_gradients = self._faces(M)
        level = float(min(ends.level.min(initial=np.inf), face_levels.min()))
        if not level > 0:
            return _View(-np.inf, 0.0, np.zeros((0, 0)), np.zeros(0))
        size = 0.5 * self._n * np.log(level) - 0.5 * float(np.linalg.slogdet(M)[1])
        near = np.argsort(ends.level, kind="stable")[:ROWS]
        near = near[ends.level[near] <= level * (1 + 4 * trust * self._n)]
        ray, j, part, r = ends.ray[near], ends.j[near], ends.part[near, None], ends.r[near]
        v = self._u[ray]
        at = (1 - part) * self._g[ray, j - 1] + part * self._g[ray, j]
        by_r = 2 * r * np.einsum("mi,ij,mj->m", v, M, v) / ends.slope[near]
        by_M: Array = (
            r[:, None, None] ** 2 * v[:, :, None] * v[:, None] - by_r[:, None, None] * v[:, :, None] * at[:, None]
        )
        inner, inner_limits = self._inner_rows(q, M, level, trust)
        return _View(
            size,
            level,
            np.concatenate([self._entries(by_M), self._entries(face_gradients), inner]),
            np.concatenate([level - ends.level[near], level - face_levels, inner_limits]),
        )

    def _faces(self, M: Array) -> tuple[Array, Array]:
        """Levels at which the ellipsoid touches the faces, (n,), and their gradients, (n, n, n)."""
        inverse = self._T @ np.linalg.inv(M)
        extent = np.einsum("ij,ij->i", inverse, self._T)
        levels = self._gaps**2 / extent
        return levels, (levels / extent)[:, None, None] * inverse[:, :, None] * inverse[:, None]

    def _inner_rows(self, q: Array, M: Array, level: float, trust: float) -> tuple[Array, Array]:
        """Rows that keep V̇ < 0 where it comes near zero inside the ellipsoid: -V̇ >= 0, linear in Δ."""
        decay = np.where(self._known, q, -np.inf) / RADII  # about linear in r next to the equilibrium
        earlier = np.concatenate([np.full((len(q), 1), -np.inf), decay[:, :-1]], axis=1)
        later = np.concatenate([decay[:, 1:], np.full((len(q), 1), np.inf)], axis=1)
        form = np.einsum("mi,ij,mj->m", self._u, M, self._u)
        top = (decay >= earlier) & (decay > later) & (decay < 0) & (RADII**2 * form[:, None] < level * (1 + trust))
        ray, j = np.nonzero(top)
        size: Array = np.linalg.norm(self._g[ray, j], axis=1) / RADII[j]
        share = -decay[ray, j] / size
        order = np.argsort(share, kind="stable")[:ROWS]
        order = order[share[order] <= 4 * trust * self._n]
        ray, j = ray[order], j[order]
        g = self._g[ray, j] / (RADII[j] * size[order])[:, None]
        inner: Array = self._u[ray][:, :, None] * g[:, None]
        return -self._entries(inner), -share[order]
