"""The contract of an explicit Runge–Kutta pair: coefficients, order and source, and nothing else."""

from __future__ import annotations

from dataclasses import dataclass


@dataclass(frozen=True)
class Tableau:
    """An embedded pair whose last stage is the first of the next step ("first same as last").

    The right-hand sides are autonomous, so the nodes c serve the tests alone.

    Attributes
    ----------
    name : str
    source : str, author, year, title
    order : int, of the solution that is carried on
    embedded_orders : tuple of one or two ints, of the solutions that it is compared with
    c : tuple of s nodes
    a : s rows, row i with i coefficients; the last row holds the weights b
    e : one or two rows of s weights of the error estimates, b minus embedded weights. Two estimates E
        and F are combined to E² / √(E² + F²/100), of higher order than both (Hairer, Nørsett, Wanner,
        Solving Ordinary Differential Equations I, 1993, II.10).
    """

    name: str
    source: str
    order: int
    embedded_orders: tuple[int, ...]
    c: tuple[float, ...]
    a: tuple[tuple[float, ...], ...]
    e: tuple[tuple[float, ...], ...]

    @property
    def step(self) -> str:
        """The part of the lane loop that attempts a step of this kind of method."""
        return "explicit_step.py.jinja"

    @property
    def stages(self) -> int:
        """Number of stages, the shared one included."""
        return len(self.c)

    @property
    def error_order(self) -> int:
        """The power of the step size that the error estimate falls with."""
        orders = [order + 1 for order in self.embedded_orders]
        return orders[0] if len(orders) == 1 else 2 * orders[0] - orders[1]


@dataclass(frozen=True)
class RosenbrockTableau:
    """A Rosenbrock method with the exact Jacobian J, in the form that needs no product with J.

    With M = 1 - hγJ, the stages solve M u_i = γ (h f(x + Σ a_ij u_j) + Σ c_ij u_j); the new state is x + Σ m_j u_j and
    the error Σ e_j u_j (Hairer, Wanner, Solving Ordinary Differential Equations II, 1996, IV.7).

    Attributes
    ----------
    name, source, order, embedded_orders : as of a `Tableau`, with one embedded order
    gamma : γ
    a, c : s rows, row i with i coefficients
    m, e : s weights each
    """

    name: str
    source: str
    order: int
    embedded_orders: tuple[int]
    gamma: float
    a: tuple[tuple[float, ...], ...]
    c: tuple[tuple[float, ...], ...]
    m: tuple[float, ...]
    e: tuple[float, ...]

    @property
    def step(self) -> str:
        """The part of the lane loop that attempts a step of this kind of method."""
        return "rosenbrock_step.py.jinja"

    @property
    def stages(self) -> int:
        """Number of evaluations of f a step and one, as of a `Tableau`: the first is shared with the step before."""
        return len(self.m) + 1

    @property
    def error_order(self) -> int:
        """The power of the step size that the error estimate falls with."""
        return self.embedded_orders[0] + 1


Method = Tableau | RosenbrockTableau
