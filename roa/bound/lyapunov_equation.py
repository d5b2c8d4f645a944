"""P from the Lyapunov equation A'P + PA = -Q."""

from __future__ import annotations

from decimal import Decimal

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import solve_continuous_lyapunov

from roa.loop.model import Loop

Array = NDArray[np.float64]


def solve_lyapunov(A: Array, Q: Array) -> Array:
    """Solve A'P + PA = -Q for a symmetric P.

    scipy solves M X + X M' = R; hence the transpose, and the minus sign on the right. P is positive definite
    if Q is and every eigenvalue of A has a negative real part; it is what comes out of the equation otherwise.

    Parameters
    ----------
    A : float64 (n, n), 1/s
    Q : float64 (n, n), symmetric

    Returns
    -------
    float64 (n, n), symmetric to the last bit
    """
    P: Array = solve_continuous_lyapunov(A.T, -Q)
    return (P + P.T) / 2


def weight_matrix(Q: str | tuple[tuple[Decimal, ...], ...], loop: Loop) -> Array:
    """Return Q as floats, (n, n): "identity", "domain" (1/half-width^2 on the diagonal) or the matrix given."""
    if isinstance(Q, str):
        return np.eye(loop.n) if Q == "identity" else np.diag(loop.half_widths**-2.0)
    return np.array([[float(entry) for entry in row] for row in Q])
