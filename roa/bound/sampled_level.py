"""The contact level of a loop with a hold: the largest level within which V decreases from sample to sample.

First an estimate, by rays in whitened coordinates along which the first state is sought whose V is not smaller one
period later; then the largest share of it that can be proved.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from roa.bound.contact_level import NAME
from roa.bound.proved_contact_level import prove_contact_level
from roa.bound.sampled_function import SampledQuadratic
from roa.bound.sampled_proof import SampledProver
from roa.bound.statement import Bound, Strength
from roa.loop.wording import point_text

Array = NDArray[np.float64]

RAYS, SCAN = 512, 32
NEAR = 10  # points on a ray that has been turned, in the last tenth of the length that it has to beat
KEPT, CHILDREN, TURNS, SHRINK = 8, 24, 24, 0.6  # rays that are turned, how often each, and how the turns shrink
BISECTIONS = 30


def sampled_contact_level(V: SampledQuadratic) -> Bound:
    """Return the contact level with what could be proved of it; level 0 with the reason where nothing is known."""
    prover = SampledProver(V)
    if not V.is_whole:
        return Bound(NAME, V, 0.0, Strength.ESTIMATED, prover.obstacle)
    level, zeta, note = estimate(V)
    contact = V.centre + zeta[: V.loop.n]
    bound = Bound(NAME, V, level, Strength.ESTIMATED, note, contact)
    if not level > 0:
        return bound
    if prover.obstacle:
        return replace(bound, note=f"{note}; not proved: {prover.obstacle}")
    return prove_contact_level(bound, 0.0)


def estimate(V: SampledQuadratic) -> tuple[float, Array, str]:
    """Estimate the contact level; the state (N,) that limits it, and what happens there."""
    N, rng = len(V.whole), np.random.default_rng(7)
    frame = np.linalg.inv(np.linalg.cholesky(V.whole)).T
    face, touching, words = _face(V)
    reach = float(np.sqrt(face))
    directions = _unit(rng.standard_normal((RAYS, N))) if N > 1 else np.array([[1.0], [-1.0]])
    share = np.arange(1, SCAN + 1) / SCAN
    ends = _ends(V, frame, directions, reach * share)
    size = 0.3
    near = 1 - 0.1 * np.arange(NEAR)[::-1] / NEAR
    for _ in range(TURNS if N > 1 else 0):
        best = np.argsort(ends, kind="stable")[:KEPT]
        parents = np.repeat(directions[best], CHILDREN, axis=0)
        children = _unit(parents + size * rng.standard_normal(parents.shape) / np.sqrt(N))
        directions = np.concatenate([directions[best], children])
        ends = np.concatenate([ends[best], _ends(V, frame, children, ends[best[-1]] * near)])
        size *= SHRINK
    i = int(np.argmin(ends))
    if not ends[i] < reach:
        return face, touching, words
    zeta = ends[i] * frame @ directions[i]
    where = point_text(V.loop.states, V.loop.units, V.centre + zeta[: V.loop.n])
    return float(ends[i] ** 2), zeta, f"V no longer decreases over a period from {where}"


def _ends(V: SampledQuadratic, frame: Array, directions: Array, lengths: Array) -> Array:
    """Length of each ray up to its first state from which V does not decrease, found between the given lengths.

    The longest of them where there is no such state.
    """
    rays = directions @ frame.T

    def holds(rays: Array, lengths: Array) -> NDArray[np.bool_]:
        with np.errstate(invalid="ignore"):
            return np.asarray(V.change(lengths[:, None] * rays) < 0)

    failed = ~np.stack([holds(rays, np.full(len(rays), length)) for length in lengths], axis=1)
    ended = np.flatnonzero(failed.any(axis=1))
    first = failed[ended].argmax(axis=1)
    low, high = np.concatenate([[0.0], lengths])[first], lengths[first]
    for _ in range(BISECTIONS):
        middle = (low + high) / 2
        inside = holds(rays[ended], middle)
        low, high = np.where(inside, middle, low), np.where(inside, high, middle)
    ends = np.full(len(rays), float(lengths[-1]))
    ends[ended] = low
    return ends


def _face(V: SampledQuadratic) -> tuple[float, Array, str]:
    """The level at which the set first touches a face of the domain, where, and which."""
    loop, inverse = V.loop, np.linalg.inv(V.whole)
    gaps = loop.box - V.centre[:, None]
    levels = gaps**2 / np.diag(inverse)[: loop.n, None]
    i, side = np.unravel_index(np.argmin(levels), levels.shape)
    words = f"the level set touches the domain's face {loop.states[i]} = {loop.box[i, side]:g} {loop.units[i]}".rstrip()
    return float(levels[i, side]), gaps[i, side] * inverse[:, i] / inverse[i, i], words


def _unit(vectors: Array) -> Array:
    return np.asarray(vectors / np.linalg.norm(vectors, axis=1, keepdims=True))
