"""What the searches for polynomials share: whitened coordinates, the simulated edge in them, and points to check at."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from decimal import Decimal
from functools import cached_property

import numpy as np
from numpy.typing import NDArray
from scipy.stats import qmc

from roa.bound.contact_level import unit_vectors
from roa.bound.lyapunov_function import FormulaV
from roa.bound.monomials import Monomials, formula, shifted_names, substituted
from roa.bound.simulated_edge import Edge, Run, simulated_edge
from roa.loop.expression import Name
from roa.loop.formula_text import to_text
from roa.loop.model import Loop

Array = NDArray[np.float64]
Say = Callable[[str], None]

RAYS = {1: 2, 2: 200, 3: 500}
RAYS_MORE = 900  # in four states and more
CHECKED = {1: 2**11, 2: 2**15, 3: 2**15}
CHECKED_MORE = 2**16


@dataclass(frozen=True)
class Guide:
    """Coordinates z = S (x - x_eq) in which a proved ellipsoid is the unit ball, and the simulated edge in them.

    The trajectories behind the edge are stopped where they leave the domain: what is proved holds within it.

    Attributes
    ----------
    loop : Loop
    centre : float64 (n,), the equilibrium
    A : float64 (n, n), the Jacobian there, in z
    S : float64 (n, n)
    u : float64 (m, n), unit vectors in z
    edge : along them
    """

    loop: Loop
    centre: Array
    A: Array
    S: Array
    u: Array
    edge: Edge

    @classmethod
    def about(cls, loop: Loop, centre: Array, P: Array, run: Run) -> Guide:
        """Simulate the edge along rays that are evenly spread in the metric of P; `run` stops at the domain."""
        S = np.asarray(np.linalg.cholesky(P).T, dtype=np.float64)
        T = np.linalg.inv(S)
        u = unit_vectors(loop.n, RAYS.get(loop.n, RAYS_MORE))
        edge = simulated_edge(loop, centre, u @ T.T, run)
        return cls(loop, centre, S @ loop.jacobian(centre) @ T, S, u, edge)

    @property
    def n(self) -> int:
        """Number of states."""
        return self.loop.n

    @cached_property
    def _T(self) -> Array:
        return np.asarray(np.linalg.inv(self.S), dtype=np.float64)

    def along_rays(self, radii: Array) -> Array:
        """Points at the radii (m, k) of the rays, in z: (m k, n)."""
        return np.asarray((self.u[:, None] * radii[:, :, None]).reshape(-1, self.n))

    def flow(self, z: Array) -> Array:
        """The time derivative of z at the points z (m, n); NaN where f is not defined."""
        return np.asarray(self.loop.rhs(self.centre + z @ self._T.T) @ self.S.T)

    @cached_property
    def checked(self) -> Array:
        """Points spread over the domain, in z: (m, n)."""
        count = CHECKED.get(self.n, CHECKED_MORE)
        box = self.loop.box
        points = qmc.Sobol(self.n, scramble=True, rng=np.random.default_rng(17)).random(count)
        return np.asarray((qmc.scale(points, box[:, 0], box[:, 1]) - self.centre) @ self.S.T)

    def edge_towards(self, z: Array) -> Array:
        """Distance of the edge along the ray that is nearest to each of the points z (m, n): (m,)."""
        if not len(z):
            return np.zeros(0)
        return np.asarray(self.edge.radius[np.argmax(z @ self.u.T, axis=1)])

    def to_z(self, x: Array) -> Array:
        """States (n,) in z."""
        return np.asarray(self.S @ (x - self.centre))

    def function(self, monomials: Monomials, coefficients: Array) -> FormulaV:
        """The polynomial in the distances from the equilibrium, with the coefficients in decimals."""
        degree = int(monomials.exponents.sum(axis=1).max())
        terms = substituted(monomials, coefficients, self.S, degree)
        states = self.loop.states
        tree = formula(terms, [Name(state) for state in states])
        rest = [Decimal(repr(float(value))) for value in self.centre]
        text = to_text(formula(terms, shifted_names(states, rest)))
        return FormulaV(self.loop, self.centre, tree, text, from_equilibrium=True)
