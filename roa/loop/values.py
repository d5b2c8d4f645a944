"""Single values of a configuration, checked: each check returns the value or raises with a sentence.

The reader of TOML gives integers, and decimals as `Decimal`, so that nothing is rounded before it
is checked. In Python a truth value is an integer and `nan` a float: both are refused by name here.
"""

from __future__ import annotations

from collections.abc import Callable
from decimal import Decimal
from typing import Any

from roa.loop.formula import LARGEST_NUMBER, SMALLEST_NUMBER

Matrix = tuple[tuple[Decimal, ...], ...]


def number(value: Any) -> Decimal:
    """Return a finite number as its exact decimal."""
    if isinstance(value, bool) or not isinstance(value, int | Decimal):
        raise ValueError(f"must be a number, {kind(value)} found")
    exact = Decimal(value)
    if not exact.is_finite():
        raise ValueError("must be a finite number")
    if exact and not SMALLEST_NUMBER <= abs(exact) <= LARGEST_NUMBER:
        raise ValueError("is out of range; accepted are 0 and sizes from 1e-300 to 1e300")
    return exact


def kind(value: Any) -> str:
    """Return what a value is, in the words of TOML."""
    kinds = ((bool, "true or false"), (str, "text"), (int | Decimal, "a number"), (list, "a list"), (dict, "a table"))
    return next((words for types, words in kinds if isinstance(value, types)), "a date or time")


def real(sentence: str, accepts: Callable[[Decimal], bool]) -> Callable[[Any], float]:
    """Return a check for a number that `accepts`; `sentence` says which ones those are."""

    def check(value: Any) -> float:
        exact = number(value)
        if not accepts(exact):
            raise ValueError(f"must be {sentence}")
        return float(exact)

    return check


def whole(sentence: str, accepts: Callable[[int], bool]) -> Callable[[Any], int]:
    """Return a check for a whole number that `accepts`; `sentence` says which ones those are."""

    def check(value: Any) -> int:
        exact = number(value)
        if exact != exact.to_integral_value() or not accepts(int(exact)):
            raise ValueError(f"must be {sentence}")
        return int(exact)

    return check


def word(*accepted: str) -> Callable[[Any], str]:
    """Return a check for one of the accepted words, or for any word where none is given."""

    def check(value: Any) -> str:
        if not isinstance(value, str):
            raise ValueError(f"must be text, {kind(value)} found")
        if accepted and value not in accepted:
            raise ValueError(f"must be one of {', '.join(accepted)}")
        return value

    return check


def pair(value: Any) -> tuple[Decimal, Decimal]:
    """Return [low, high] with low below high."""
    if not isinstance(value, list) or len(value) != 2:
        raise ValueError(f"must be a pair [low, high], {kind(value)} found")
    low, high = number(value[0]), number(value[1])
    if not float(low) < float(high):
        raise ValueError("must be a pair [low, high] with low below high")
    return low, high


def symmetric_matrix(value: Any) -> Matrix:
    """Return a square, symmetric matrix of exact decimals."""
    if not isinstance(value, list) or not value or not all(isinstance(row, list) for row in value):
        raise ValueError("must be a matrix, a list of rows [[…], …]")
    rows = tuple(tuple(number(entry) for entry in row) for row in value)
    n = len(rows)
    if any(len(row) != n for row in rows):
        raise ValueError(f"must be square; {n} rows and {sorted({len(row) for row in rows})} columns found")
    for i in range(n):
        for j in range(i):
            if rows[i][j] != rows[j][i]:
                raise ValueError(
                    f"must be symmetric; row {j + 1} column {i + 1} is {rows[j][i]}, "
                    f"row {i + 1} column {j + 1} is {rows[i][j]}"
                )
    return rows
