"""Verified eigenvalue bounds against exact definiteness in rational arithmetic and against closed forms."""

from decimal import Decimal
from fractions import Fraction

import numpy as np
import pytest

from roa.bound.definite import definiteness, largest_eigenvalue, smallest_eigenvalue
from roa.bound.point_checks import positive_definite
from roa.kernel.interval_arrays import IntervalArray


def is_positive_definite(matrix):
    """Sylvester's criterion by exact elimination."""
    rows = [[Fraction(entry) for entry in row] for row in matrix]
    for k in range(len(rows)):
        if rows[k][k] <= 0:
            return False
        for i in range(k + 1, len(rows)):
            factor = rows[i][k] / rows[k][k]
            rows[i] = [a - factor * b for a, b in zip(rows[i], rows[k], strict=True)]
    return True


@pytest.mark.parametrize("n", [1, 2, 3, 6, 12])
def test_bounds_hold_and_are_sharp(n):
    random = np.random.default_rng(n)
    for _ in range(20):
        G = random.normal(size=(n, n)) * 10.0 ** random.uniform(-4, 4)
        M = (G + G.T) / 2
        low, high = smallest_eigenvalue(IntervalArray.exact(M))
        size = np.abs(M).max()
        assert high - low < 1e-12 * n * size
        exact_low, exact_high = Fraction(low), Fraction(high)
        shifted = [[Fraction(float(M[i, j])) for j in range(n)] for i in range(n)]
        above = [[shifted[i][j] - (exact_low if i == j else 0) for j in range(n)] for i in range(n)]
        below = [[shifted[i][j] - (exact_high if i == j else 0) for j in range(n)] for i in range(n)]
        tiny = Fraction(1, 10**40)
        assert is_positive_definite([[above[i][j] + (tiny if i == j else 0) for j in range(n)] for i in range(n)])
        assert not is_positive_definite(below)
        assert largest_eigenvalue(IntervalArray.exact(M))[1] >= np.linalg.eigvalsh(M)[-1] - 1e-13 * size


def test_interval_entries_are_all_covered():
    random = np.random.default_rng(9)
    middle = np.array([[2.0, 0.5, 0.0], [0.5, 1.0, 0.2], [0.0, 0.2, 0.7]])
    width = np.full((3, 3), 0.05)
    low, _ = smallest_eigenvalue(IntervalArray(middle - width, middle + width))
    for _ in range(300):
        wiggle = random.uniform(-1, 1, (3, 3)) * width
        assert np.linalg.eigvalsh(middle + (wiggle + wiggle.T) / 2)[0] >= low
    assert 0.3 < low < np.linalg.eigvalsh(middle)[0]


@pytest.mark.parametrize(
    ("matrix", "answer"),
    [
        ([["1.5", "-0.5"], ["-0.5", "1"]], "proved"),
        ([["1", "2"], ["2", "1"]], "refuted"),
        ([["1", "1"], ["1", "1"]], "undecided"),  # singular exactly: neither side can be proved in floats
        ([["-1"]], "refuted"),
        ([["0"]], "undecided"),
        ([["1", "0"], ["0", "1e-12"]], "proved"),
        ([["1", "0"], ["0", "-1e-12"]], "refuted"),
    ],
)
def test_definiteness_of_exact_matrices(matrix, answer):
    assert positive_definite([[Decimal(entry) for entry in row] for row in matrix]) == answer


def test_nothing_is_proved_of_undefined_or_unbounded_entries():
    for bad in (np.nan, np.inf):
        low = np.array([[1.0, 0.0], [0.0, 1.0]])
        high = np.array([[1.0, 0.0], [0.0, bad]])
        assert definiteness(IntervalArray(low, high)) == "undecided"
