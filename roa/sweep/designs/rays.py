"""Rays from the equilibrium: the edge of the basin bracketed and refined on each, in rounds.

A few rays all over the domain give an ellipsoid that follows the basin, in whose metric the radii spread little. The
rays proper are spread evenly over the directions of that metric: equally spaced in the plane, scrambled Sobol' points
on the sphere otherwise. On each, the edge is bracketed about the spread that the first rays showed, and halved.

Rays see only what is star-shaped from the equilibrium. So a part of the starts looks for what contradicts it: beyond
and before the edge that a ray found, and in pairs off the rays, where a start in the basin whose nearer partner on
the way to the equilibrium is not in it is a contradiction.

Source: Sobol' points carried to the sphere by normal deviates, e.g. Fang and Wang, Number-theoretic Methods in
Statistics, 1994 (from memory).
"""

from __future__ import annotations

from collections.abc import Generator
from contextlib import suppress
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.special import ndtri

from roa.errors import UserError
from roa.sweep.designs import Answers, Rounds
from roa.sweep.designs.sobol import Sobol

Array = NDArray[np.float64]
Flags = NDArray[np.bool_]
Step = Generator[Array, Answers, None]

# Part of the starts that looks beside the edges on the rays, and part that looks off them.
ON, OFF = 1 / 16, 1 / 16
# First rays: so many for each unknown of an ellipsoid, within these numbers; and halvings of each.
PER_UNKNOWN, FEWEST_FIRST, MOST_FIRST, FIRST_HALVINGS = 4, 32, 512, 7
# Starts that a ray proper costs: two ends of the guess, then halvings. A smooth curve is summed so well by equally
# spaced rays that in the plane a finer edge says more than another ray.
PER_RAY_IN_THE_PLANE, PER_RAY = 12, 8
# Fewer rays a replicate say nothing of the spread between replicates; fewer in the plane nothing of an area.
FEWEST_IN_A_REPLICATE, FEWEST_IN_THE_PLANE = 4, 32
# The first guess of a bracket: these quantiles of the first radii, each this much further out.
GUESS, MARGIN = (0.05, 0.95), 1.03
DITHER = 0.25
# A bracket narrower than this part of its radius is as good as the edge.
NARROW = 1e-12
# How far within the face the face is tried, and the equilibrium must lie, as a part of the ray or the half-width.
WITHIN = 1e-12
# Stream of all that is drawn here, beside the directions, which are those of `Sobol` with the same seed.
STREAM = 3


class Rays:
    """Rays from the equilibrium, their number fixed by the number of starts, so that it cannot be extended."""

    in_rounds = True
    extendable = False

    def __init__(self, box: Array, seed: int, replicates: int, samples: int, centre: Array) -> None:
        self.box, self.seed, self.samples, self.centre = box, seed, samples, centre
        self.half_widths = (box[:, 1] - box[:, 0]) / 2
        n = len(box)
        self._require_inside()
        self.replicates = replicates if n > 2 else 1
        self.interval = "spread between independent replicates" if n > 2 else "spread between combs of rays"
        unknowns = n * (n + 1) // 2
        self.first = 2 if n == 1 else int(np.clip(PER_UNKNOWN * unknowns, FEWEST_FIRST, MOST_FIRST))
        self.on, self.off = int(ON * samples), int(OFF * samples) // 2
        self.rays = self._count(samples)
        self.parts: dict[str, Any] = {"replicates": self.replicates, "rays": self.rays, "asked": samples}

    def _count(self, samples: int) -> int:
        """Number of rays proper that the starts allow.

        Raises
        ------
        UserError
            They do not allow enough of them to say anything.
        """
        n = len(self.box)
        if n == 1:
            return 2
        per_ray = PER_RAY if n > 2 else PER_RAY_IN_THE_PLANE
        fewest = FEWEST_IN_A_REPLICATE * self.replicates if n > 2 else FEWEST_IN_THE_PLANE
        before = self.first * (1 + FIRST_HALVINGS)
        count = int((1 - ON - OFF) * samples - before) // per_ray
        count -= count % self.replicates if n > 2 else count % 4
        if count < fewest:
            needed = int((before + fewest * per_ray) / (1 - ON - OFF)) + per_ray
            raise UserError(
                f'[sweep] samples = {samples}: design = "rays" needs at least {needed:,} starts for {n} states; '
                'ask for more, or use design = "sobol"'
            )
        return count

    def _require_inside(self) -> None:
        """Refuse an equilibrium on a face of the domain: half of the rays would have no length."""
        room = np.minimum(self.centre - self.box[:, 0], self.box[:, 1] - self.centre) / self.half_widths
        if not (room > WITHIN).all():
            state = int(np.argmin(room))
            raise UserError(
                f'[sweep] design = "rays": the equilibrium lies on a face of the domain (state {state + 1} at '
                f"{self.centre[state]:g}), where half of the rays have no length; enlarge the domain, or use "
                'design = "boundary" or "sobol"'
            )

    def directions(self, count: int, replicates: int) -> Array:
        """Directions spread evenly over the sphere, float64 (count, n); number i is of replicate i mod replicates."""
        n = len(self.box)
        if n == 1:
            return np.array([[1.0], [-1.0]])
        if n == 2:
            offset = np.random.default_rng(np.random.SeedSequence(self.seed, spawn_key=(STREAM, 0))).random()
            angle = 2 * np.pi * (np.arange(count) + offset) / count
            return np.stack([np.cos(angle), np.sin(angle)], axis=1)
        unit = np.tile([0.0, 1.0], (n, 1))
        normal = ndtri(np.clip(Sobol(unit, self.seed, replicates, count).points(0, count), 1e-15, 1 - 1e-15))
        return np.asarray(normal / np.linalg.norm(normal, axis=1, keepdims=True))

    def course(self) -> RayCourse:
        """Return a new passage from the first round on."""
        return RayCourse(self)


class RayCourse:
    """One passage through the rounds.

    Attributes
    ----------
    bundle : the rays proper; None until the first rays are done
    looks, contrary : how many starts were looked at for what contradicts a star shape, and how many do; the starts
        off the rays come in pairs
    """

    def __init__(self, design: Rays) -> None:
        self._design = design
        self._used = 0
        self._rng = np.random.default_rng(np.random.SeedSequence(design.seed, spawn_key=(STREAM, 1)))
        self.bundle: Bundle | None = None
        self.looks = self.contrary = 0

    def rounds(self) -> Rounds:
        """Yield the starts of one round after the other; see the text of the module."""
        design = self._design
        first = Bundle(design, np.diag(design.half_widths), design.directions(design.first, 1))
        yield from self._counted(first.guess(first.face.max(), first.face.max()))
        for _ in range(FIRST_HALVINGS):
            yield from self._counted(first.halve(first.open))
        frame, (low, high) = _fitted(first)
        bundle = Bundle(design, frame, design.directions(design.rays, design.replicates))
        yield from self._counted(bundle.guess(low, high, self._rng.random(design.rays)))
        ratio = high / low
        while bundle.beyond.any():
            ratio **= 2  # the further out an edge lies, the longer the strides
            yield from self._counted(bundle.stride(ratio))
        self.bundle = bundle
        yield from self._counted(self._look(bundle))
        while len(rays := bundle.widest()[: max(design.samples - self._used, 0)]):
            yield from self._counted(bundle.halve(rays))

    def _counted(self, step: Step) -> Rounds:
        """Ask what a step asks, unless it asks nothing, and count the starts."""
        starts = next(step)
        if not len(starts):
            return
        self._used += len(starts)
        answers = yield starts
        with suppress(StopIteration):  # a step asks once
            step.send(answers)

    def _look(self, bundle: Bundle) -> Step:
        """Look for what contradicts a star shape: before and beyond the edges, and in pairs off the rays."""
        design, n = self._design, len(self._design.box)
        ended = np.flatnonzero(bundle.high < bundle.face)
        before = self._rng.integers(len(bundle.low), size=design.on // 2)
        beyond = self._rng.permutation(np.resize(ended, design.on // 2 if len(ended) else 0))
        # Uniform in volume along each ray.
        inside = bundle.low[before] * self._rng.random(len(before)) ** (1 / n)
        nearest, face = bundle.high[beyond] ** n, bundle.face[beyond] ** n
        outside = (nearest + (face - nearest) * self._rng.random(len(beyond))) ** (1 / n)
        off = design.box[:, 0] + self._rng.random((design.off, n)) * (design.box[:, 1] - design.box[:, 0])
        nearer = design.centre + self._rng.random((design.off, 1)) * (off - design.centre)
        answers = yield np.concatenate([bundle.at(before, inside), bundle.at(beyond, outside), off, nearer])
        cuts = np.cumsum([len(before), len(beyond), len(off)])
        first, second, far, near = np.split(answers, cuts)
        self.looks += len(before) + len(beyond) + len(off)
        self.contrary += int(np.sum(~first) + np.sum(second) + np.sum(far & ~near))


class Bundle:
    """Rays x = centre + r T d with a bracket of the edge on each.

    Attributes
    ----------
    frame : float64 (n, n), T
    directions : float64 (m, n), |d| = 1
    face : float64 (m,), r at the face of the domain
    low, high : float64 (m,), r of a start in the basin and of one outside; both are `face` where the basin gets there
    crossed : rays on which a start in the basin was found beyond one that is not
    """

    def __init__(self, design: Rays, frame: Array, directions: Array) -> None:
        self._design = design
        self.frame, self.directions = frame, directions
        low, high = (design.box - design.centre[:, None]).T
        along = directions @ frame.T
        with np.errstate(divide="ignore", invalid="ignore"):
            parts = np.where(along > 0, high / along, np.where(along < 0, low / along, np.inf))
        self.face = parts.min(axis=1) * (1 - WITHIN)
        self.low, self.high = np.zeros(len(directions)), self.face.copy()
        self.crossed = 0
        self._bracketed = np.zeros(len(directions), np.bool_)

    def at(self, rays: NDArray[np.int64], r: Array) -> Array:
        """Starts at r, float64 (k,), of rays, int (k,): float64 (k, n), state units."""
        starts = self._design.centre + (r[:, None] * self.directions[rays]) @ self.frame.T
        return np.asarray(np.clip(starts, *self._design.box.T))

    @property
    def open(self) -> NDArray[np.int64]:
        """Rays whose bracket can be narrowed."""
        return np.flatnonzero(self.high - self.low > NARROW * self.high)

    @property
    def beyond(self) -> Flags:
        """Rays whose edge lies further out than what was tried, bool (m,)."""
        return np.asarray(~self._bracketed & (self.low < self.face))

    def guess(self, low: float, high: float, shift: Array | float = 0.0) -> Step:
        """Try the ends of a guessed bracket on all rays; the face where that is nearer.

        `shift`, float64 (m,) in [0, 1], widens each bracket by a part of it, so that those of different rays end
        at different places about the edge and their errors have nothing in common.
        """
        rays = np.arange(len(self.face))
        far = np.minimum(high * (1 + DITHER * shift * (1 - low / high)), self.face)
        near = np.minimum(low, self.face)
        two = rays[near < far]
        answers = yield self.at(np.concatenate([rays, two]), np.concatenate([far, near[two]]))
        self._note(rays, far, answers[: len(rays)])
        self._note(two, near[two], answers[len(rays) :])

    def stride(self, ratio: float) -> Step:
        """Try further out on the rays whose edge lies beyond what was tried."""
        rays = np.flatnonzero(self.beyond)
        r = np.minimum(self.low[rays] * ratio, self.face[rays])
        answers = yield self.at(rays, r)
        self._note(rays, r, answers)

    def halve(self, rays: NDArray[np.int64]) -> Step:
        """Try the middle of the brackets of rays, int (k,)."""
        middle = (self.low[rays] + self.high[rays]) / 2
        answers = yield self.at(rays, middle)
        self._note(rays, middle, answers)

    def widest(self) -> NDArray[np.int64]:
        """The open rays whose brackets hold at least half of the volume that the largest does, the largest first."""
        n, rays = len(self._design.box), self.open
        volume = self.high[rays] ** n - self.low[rays] ** n
        order = np.argsort(-volume, kind="stable")
        return np.asarray(rays[order[volume[order] >= volume.max(initial=0.0) / 2]])

    def _note(self, rays: NDArray[np.int64], r: Array, answers: Answers) -> None:
        """Narrow the brackets; of two crossings the inner one stays."""
        inside, outside = rays[answers], rays[~answers]
        self.low[inside] = np.maximum(self.low[inside], r[answers])
        reached = inside[self.low[inside] >= self.face[inside]]
        self.low[reached] = self.high[reached] = self.face[reached]
        self.high[outside] = np.minimum(self.high[outside], r[~answers])
        self._bracketed[outside] = True
        crossed = outside[self.low[outside] >= self.high[outside]]
        self.low[crossed] = 0.0
        self.crossed += len(crossed)


def _fitted(first: Bundle) -> tuple[Array, tuple[float, float]]:
    """Fit an ellipsoid to the edges that the first rays found; return its frame, and where radii lie in it.

    The matrix M with r² d'Md = 1 in the sense of least squares; where it is not positive definite, the first frame.
    """
    r, d = np.maximum((first.low + first.high) / 2, 1e-300), first.directions
    n = d.shape[1]
    rows, columns = np.triu_indices(n)
    products = d[:, rows] * d[:, columns] * np.where(rows == columns, 1.0, 2.0)
    entries = np.linalg.lstsq(products * (r**2)[:, None], np.ones(len(r)), rcond=None)[0]
    M = np.zeros((n, n))
    M[rows, columns] = M[columns, rows] = entries
    values, vectors = np.linalg.eigh(M)
    if not values.min() > 1e-9 * abs(values).max():
        values, vectors = np.full(n, np.median(r) ** -2), np.eye(n)
    frame = first.frame @ (vectors * values**-0.5)
    fitted = np.sqrt(np.sum((d @ vectors * values**0.5) ** 2, axis=1)) * r
    low, high = np.quantile(fitted, GUESS)
    return np.asarray(frame), (float(low) / MARGIN, float(high) * MARGIN)
