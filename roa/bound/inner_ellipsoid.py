"""An ellipsoid about the equilibrium that is proved to lie in the basin: a place of arrival for other proofs."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from roa.bound.equilibrium_enclosure import EquilibriumEnclosure
from roa.bound.level_proof import LevelProver
from roa.bound.lyapunov_equation import solve_lyapunov, weight_matrix
from roa.bound.lyapunov_function import Quadratic
from roa.kernel.branch_and_bound import Answer
from roa.loop.model import Loop

FIRST, SMALLER, ATTEMPTS = 0.5, 0.25, 24  # of the level that touches the domain
BUDGET = 2000  # boxes of each attempt


@dataclass(frozen=True)
class InnerEllipsoid:
    """The set {V <= level}, proved to lie in the basin.

    Attributes
    ----------
    V : Quadratic, that of the Lyapunov equation with Q = "domain"
    level : float
    boxes : int, that the proofs looked at
    """

    V: Quadratic
    level: float
    boxes: int


def inner_ellipsoid(loop: Loop, root: EquilibriumEnclosure, boxes: int = BUDGET) -> InnerEllipsoid | None:
    """Find and prove one, None where the linearisation is not stable or nothing can be proved."""
    x = root.x.middle
    A = loop.jacobian(x)
    if not np.all(np.isfinite(A)) or np.linalg.eigvals(A).real.max() >= 0:
        return None
    V = Quadratic(loop, x, solve_lyapunov(A, weight_matrix("domain", loop)))
    prover = LevelProver(V)
    gaps = np.abs(loop.box - x[:, None]).min(axis=1)
    try:
        level = float(np.min(gaps**2 / np.diag(np.linalg.inv(V.P)))) * FIRST
    except np.linalg.LinAlgError:
        return None
    used = 0
    for _ in range(ATTEMPTS):
        proof = prover.prove(level, boxes)
        used += proof.boxes
        if proof.answer is Answer.PROVED:
            return InnerEllipsoid(V, level, used)
        level *= SMALLER
    return None
