"""What proofs about one V of a loop with a hold share: the equilibrium enclosed, and coordinates z with ζ = T z."""

from __future__ import annotations

from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from roa.bound.definite import smallest_eigenvalue
from roa.bound.equilibrium_enclosure import EquilibriumEnclosure, enclose_equilibrium
from roa.bound.held_flow import Held
from roa.bound.sampled_function import SampledQuadratic
from roa.kernel.enclosure import enclose
from roa.kernel.flow_series import NotSmooth
from roa.kernel.interval_arrays import IntervalArray
from roa.kernel.tape import Program, Tape

Array = NDArray[np.float64]

LOWEST, HIGHEST = 3, 14  # degrees of the Taylor polynomial that are tried


class SampledFrame:
    """The state at a sample and what V says of it; see `sampled_proof` for the letters.

    Attributes
    ----------
    V : SampledQuadratic
    n, m, N : states, held signals, and all that V weighs: n, or n + m with a delay
    """

    def __init__(self, V: SampledQuadratic) -> None:
        self.V, self.hold = V, V.hold
        self.n, self.m, self.N = V.loop.n, len(V.hold.signals), len(V.whole)

    @property
    def obstacle(self) -> str:
        """Why nothing can be proved at all, or nothing."""
        if self.root is None or self.rest is None:
            return "the equilibrium could not be enclosed"
        if not self.shape > 0:
            return "V is not proved to be positive definite"
        if self.hold.delay and not self.V.is_whole:
            return "with a delay V must weigh the command that still acts as well, and the given one does not"
        return self._kink

    @cached_property
    def _kink(self) -> str:
        """What is not smooth between two samples, or nothing."""
        try:
            return "" if self.coefficients else "there are no coefficients"
        except NotSmooth as error:
            return f"{error}, where the proof of a sampled loop needs it smooth"

    @cached_property
    def root(self) -> EquilibriumEnclosure | None:
        """The equilibrium, or None where it could not be enclosed."""
        return enclose_equilibrium(self.V.loop, self.V.centre)

    @cached_property
    def rest(self) -> IntervalArray | None:
        """The commands at the equilibrium, (m,)."""
        if self.root is None:
            return None
        u = self.commands(self.root.x)
        return u if np.isfinite(u.low).all() and np.isfinite(u.high).all() else None

    @cached_property
    def held(self) -> Held:
        """The plant with its commands held."""
        assert self.root is not None
        assert self.rest is not None
        return Held(self.V.loop, self.root.x, self.rest)

    def commands(self, x: IntervalArray) -> IntervalArray:
        """Commands computed from the samples of a box, (m,)."""
        tape = Tape(self.n)
        names = tape.loop(self.V.loop, range(self.n))
        program = tape.program([names[name] for name in self.hold.signals])
        return enclose(program, x.low[None], x.high[None], order=0).value[0]

    @cached_property
    def coefficients(self) -> dict[int, Program]:
        """The Taylor coefficient of each order in (x, u), of which a remainder is made."""
        tape, series = self.held.series()
        return {order: tape.program(series.coefficient(order)) for order in range(LOWEST + 1, HIGHEST + 2)}

    @cached_property
    def T(self) -> Array:
        """Float matrix with T'PT near the identity; taken as exact, whatever it is."""
        return np.asarray(np.linalg.inv(np.linalg.cholesky(self.V.whole)).T)

    @cached_property
    def form(self) -> IntervalArray:
        """T'PT, (N, N)."""
        return IntervalArray.exact(self.T.T) @ (self.V.enclosed_whole @ self.T)

    @cached_property
    def shape(self) -> float:
        """Lower bound of the smallest eigenvalue of T'PT; negative or 0 where T or P is of no use."""
        try:
            return smallest_eigenvalue(self.form)[0] if np.all(np.isfinite(self.T)) else 0.0
        except np.linalg.LinAlgError:
            return 0.0

    def extents(self, reach: float) -> Array:
        """Largest |ζ_i| where |z| <= reach, (N,)."""
        squares = (IntervalArray.exact(self.T).squared() @ np.ones((self.N, 1)))[:, 0]
        return np.nextafter(np.nextafter(np.sqrt(squares.high), np.inf) * reach, np.inf)

    def box(self, reach: float) -> IntervalArray:
        """Box of the states with |z| <= reach, (n,)."""
        assert self.root is not None
        extents = self.extents(reach)[: self.n]
        return self.root.x + IntervalArray(-extents, extents)

    @cached_property
    def allowed(self) -> IntervalArray:
        """The domain, (n,), rounded inwards."""
        ends = IntervalArray.numbers(end for pair in self.V.loop.domain for end in pair)
        return IntervalArray(ends.high[::2], ends.low[1::2])

    @cached_property
    def kappa(self) -> Array:
        """Weights of the commands in s², (m,): about one over their slopes in z, so that all terms are alike."""
        slopes = np.abs(self.V.K @ self.T[: self.n])
        size = np.linalg.norm(slopes, axis=1)
        return np.where(size > 0, 1 / np.where(size > 0, size, 1.0), 1.0)
