"""Solutions of the Lyapunov equation A'P + PA = -Q from elsewhere, and what follows from them.

The traps are the sign of the right side and which factor carries the transpose: scipy solves A X + X A' = R.
"""

import numpy as np
import pytest
import scipy.linalg

from roa.bound.lyapunov_equation import solve_lyapunov
from roa.bound.point_checks import positive_definite

PUBLISHED = {
    # a worked question on math.stackexchange, 4604793
    "stackexchange": ([[0, 1], [-1, -1]], [[1.5, 0.5], [0.5, 1]]),
    # a worked example page, "Finding the region of attraction", imathworks
    "imathworks": ([[-3, 1], [1, -3]], [[3 / 16, 1 / 16], [1 / 16, 3 / 16]]),
    # from memory, computed independently
    "companion": ([[0, 1], [-2, -3]], [[1.25, 0.25], [0.25, 0.25]]),
    # Khalil, Nonlinear Systems, 3rd ed. 2002, region-of-attraction example (from memory), computed independently
    "van der pol": ([[0, -1], [1, -1]], [[1.5, -0.5], [-0.5, 1]]),
}


@pytest.mark.parametrize("name", PUBLISHED)
def test_published_solutions(name):
    A, P = (np.array(matrix, dtype=float) for matrix in PUBLISHED[name])
    found = solve_lyapunov(A, np.eye(2))
    np.testing.assert_allclose(found, P, rtol=0, atol=1e-14)
    np.testing.assert_array_equal(found, found.T)
    assert positive_definite(found) == "proved"


@pytest.mark.parametrize("name", ["stackexchange", "companion", "van der pol"])
def test_the_transpose_matters(name):
    A, P = (np.array(matrix, dtype=float) for matrix in PUBLISHED[name])
    assert np.abs(solve_lyapunov(A.T, np.eye(2)) - P).max() > 0.2


def test_sign_and_transpose_of_the_manual_example():
    """SciPy manual, solve_continuous_lyapunov (from memory), computed independently: A X + X A' = +I.

    Its X is negative definite because the right side is +I; ours for A' is minus that.
    """
    A = np.array([[-3, -2, 0], [-1, -1, 0], [0, -5, -1]], dtype=float)
    X = np.array([[-0.75, 0.875, -3.75], [0.875, -1.375, 5.3125], [-3.75, 5.3125, -27.0625]])
    np.testing.assert_allclose(solve_lyapunov(A.T, np.eye(3)), -X, rtol=1e-12)
    assert positive_definite(-X) == "proved"
    assert positive_definite(X) == "refuted"
    assert np.abs(solve_lyapunov(A, np.eye(3)) + X).max() > 1


def test_discrete_equation_follows_the_same_convention():
    """A'PA - P = -I with P = [[52, 40], [40, 100]]/27 (Ogata, Discrete-Time Control Systems, from memory).

    scipy's discrete solver carries the transpose on the other factor too.
    """
    A = np.array([[0, 0.5], [-0.5, -1]])
    P = scipy.linalg.solve_discrete_lyapunov(A.T, np.eye(2))
    np.testing.assert_allclose(P, np.array([[52, 40], [40, 100]]) / 27, rtol=1e-12)
    np.testing.assert_allclose(A.T @ P @ A - P, -np.eye(2), atol=1e-12)


def test_solution_of_an_unstable_discrete_example_is_refuted():
    """SciPy manual, solve_discrete_lyapunov (from memory): A has spectral radius 1.1578, and X is indefinite."""
    A = np.array([[0.2, 0.5], [0.7, -0.9]])
    X = np.array([[0.70872893, 1.43518822], [1.43518822, -2.4266315]])
    np.testing.assert_allclose(scipy.linalg.solve_discrete_lyapunov(A, np.eye(2)), X, atol=1e-7)
    assert np.abs(np.linalg.eigvals(A)).max() == pytest.approx(1.1578, abs=1e-4)
    assert positive_definite(X) == "refuted"


def test_largest_eigenvalue_and_the_radius_of_a_unit_remainder():
    """Common practice, computed independently: λ_max(P) = (5 + sqrt 5)/4, half its reciprocal 0.276393."""
    largest = np.linalg.eigvalsh(solve_lyapunov(np.array([[0.0, 1], [-1, -1]]), np.eye(2)))[-1]
    assert largest == pytest.approx((5 + np.sqrt(5)) / 4, rel=1e-12)
    assert 1 / (2 * largest) == pytest.approx(0.276393202, abs=1e-9)


@pytest.mark.parametrize(
    ("A", "radius"), [([[-3, -2], [1, 0]], (3 - np.sqrt(5)) / 2), ([[0, -1], [1, -1]], 0.276393202)]
)
def test_perturbation_that_keeps_stability(A, radius):
    """Patel and Toda 1980 (from memory), computed independently: |E| < λ_min(Q)/(2 λ_max(P)) keeps A + E stable."""
    A = np.array(A, dtype=float)
    allowed = 1 / (2 * np.linalg.eigvalsh(solve_lyapunov(A, np.eye(2)))[-1])
    assert allowed == pytest.approx(radius, abs=1e-9)
    frequency = np.linspace(-20, 20, 40001)[:, None, None]
    exact = np.linalg.svd(1j * frequency * np.eye(2) - A, compute_uv=False)[:, -1].min()
    assert allowed < exact
    if A[0, 0] == -3:
        assert exact == pytest.approx(0.540182, abs=1e-5)  # complex stability radius (from memory)


def test_unit_weights_allow_the_most():
    """Q = I maximises λ_min(Q)/λ_max(P) (Patel and Toda 1980; Vidyasagar; from memory): over random loops."""
    random = np.random.default_rng(12)
    for _ in range(300):
        n = random.integers(2, 6)
        A = random.normal(size=(n, n))
        A -= (np.linalg.eigvals(A).real.max() + random.uniform(0.05, 2)) * np.eye(n)
        G = random.normal(size=(n, n))
        Q = G @ G.T + 1e-3 * np.eye(n)
        best = 1 / np.linalg.eigvalsh(solve_lyapunov(A, np.eye(n)))[-1]
        other = np.linalg.eigvalsh(Q)[0] / np.linalg.eigvalsh(solve_lyapunov(A, Q))[-1]
        assert other <= best * (1 + 1e-9)
