"""P from the Lyapunov equation A'P + PA = -Q, or from M'PM - P = -TQ of a loop sampled with the period T."""

from __future__ import annotations

from decimal import Decimal

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import block_diag, solve_continuous_lyapunov, solve_discrete_lyapunov

from roa.loop.model import Loop
from roa.loop.sampled import SampledLinearisation

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


def solve_sampled_lyapunov(sampled: SampledLinearisation, Q: Array) -> Array:
    """Solve M'PM - P = -TQ for a symmetric P, with M the map over one period T.

    The factor T makes P that of the continuous equation as T goes to zero. With a delay M maps the state and the
    command that still acts. That command is weighed by as much as P would say of it without: then what it does
    counts twice, and P is definite with a margin.

    Parameters
    ----------
    sampled : stable
    Q : float64 (n, n), symmetric

    Returns
    -------
    float64 like the map: (n, n), or (n + m, n + m) with a delay, whose first n rows and columns are V of a state
    where the command of the equilibrium still acts, as at a start
    """
    n, M = len(Q), sampled.map
    P: Array = solve_discrete_lyapunov(M.T, block_diag(sampled.period * Q, np.zeros((len(M) - n,) * 2)))
    if len(M) > n:
        P = solve_discrete_lyapunov(M.T, block_diag(sampled.period * Q, np.diag(np.diag(P)[n:])))
    return (P + P.T) / 2


def weight_matrix(Q: str | tuple[tuple[Decimal, ...], ...], loop: Loop) -> Array:
    """Return Q as floats, (n, n): "identity", "domain" (1/half-width^2 on the diagonal) or the matrix given."""
    if isinstance(Q, str):
        return np.eye(loop.n) if Q == "identity" else np.diag(loop.half_widths**-2.0)
    return np.array([[float(entry) for entry in row] for row in Q])
