"""The target set of a sweep: entering it is convergence."""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Target:
    """A proved level set, or a ball with a dwell where nothing is proved.

    Attributes
    ----------
    kind : "level" or "ball"
    centre : float64 (n,), the equilibrium, state units
    half_widths : float64 (n,), half-widths of the domain: the metric of every ball
    P, level : for kind "level": entered when (x - centre)' P (x - centre) <= level
    radius : of balls, in half-widths of the domain (Euclidean norm of (x - centre)/half_widths)
    dwell : s; time that a trajectory must stay in a ball, and be at its end at most half as far
        from the centre as at its entry
    elsewhere : float64 (k, n), other stable equilibria; each gets a ball of the same radius
    note : why this kind and size, where that needs saying
    residual : whether the level is the inner one of a ring on which V decreases by proof, and nothing is known inside
    """

    kind: str
    centre: Array
    half_widths: Array
    P: Array | None = None
    level: float = 0.0
    radius: float = 1e-3
    dwell: float = 0.0
    elsewhere: Array = field(default_factory=lambda: np.empty((0, 0)))
    note: str = ""
    residual: bool = False

    @property
    def words(self) -> str:
        """What entering the target set means, in words and numbers: attribute `target` of the store."""
        if self.residual:
            entered = (
                f"V <= {self.level:.6g}, a residual set: V decreases by proof on a ring about it, so that no "
                "trajectory that is inside leaves it; none has to come to rest"
            )
        elif self.kind == "level":
            entered = f"V <= {self.level:.6g}, a level set in which V decreases by proof"
        else:
            entered = (
                f"a ball of radius {self.radius:g} half-widths of the domain about the equilibrium, not left for "
                f"{self.dwell:.6g} s and at most half as far away at the end (not a proof)"
            )
        if self.note:
            entered += f"; {self.note}"
        if len(self.elsewhere):
            entered += f"; {len(self.elsewhere)} other stable equilibria watched by balls of the same kind"
        return entered
