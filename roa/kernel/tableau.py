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
    embedded_order : int, of the solution that it is compared with
    c : tuple of s nodes
    a : s rows, row i with i coefficients; the last row holds the weights b
    e : s weights of the error estimate, b minus the embedded weights
    """

    name: str
    source: str
    order: int
    embedded_order: int
    c: tuple[float, ...]
    a: tuple[tuple[float, ...], ...]
    e: tuple[float, ...]

    @property
    def stages(self) -> int:
        """Number of stages, the shared one included."""
        return len(self.c)
