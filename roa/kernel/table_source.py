"""Look-up tables as functions of the generated module: the piece by bisection, then its polynomial.

The bisection is a fixed number of selects and loads. A chain of selects over the pieces, and a sum over the points,
were slower from 8 points on.

Without a quick instruction for loads from several places (before AVX-512) the compiler loads for one lane after the
other, which is cheap, and takes out of the vectors all that the places depend on, which is everything before. It looks
for that no further than to the place where two branches join; `apart` makes one. A test reads the compiled loop.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence

import numpy as np
from numpy.typing import NDArray

from roa.loop.lookup_table import LookupTable

_APART = """\
@packed
def apart(x):
    # x, behind a branch: long enough to stay one until the loop is packed, and NaN for NaN on its other side.
    if x == x:
        y = x
    else:
        y = ((x * x + x) * x + x) * x
    return y
"""


def source(tables: Sequence[LookupTable]) -> str:
    """Return the text that defines `lookup0(x)` and `slope0(x)`, … for the tables in their order."""
    texts = [_functions(k, table) for k, table in enumerate(tables)]
    return "\n\n".join([_APART, *texts]) if texts else ""


def _functions(k: int, table: LookupTable) -> str:
    count = _power_of_two(len(table.edges) + 1)
    edges = np.append(table.edges, np.full(count - 1 - len(table.edges), np.inf))
    used = 4 if table.numbers[:, 3:].any() else 2
    lines = ["", f"EDGES{k} = {_array(edges)}"]
    lines += [f"PIECES{k}_{column} = {_array(table.numbers[:, column])}" for column in range(1 + used)]
    coefficients = [f"PIECES{k}_{1 + power}[i]" for power in range(used)]
    derived = [f"{power}.0 * {name}" for power, name in enumerate(coefficients)][1:]
    for name, polynomial in ((f"lookup{k}", coefficients), (f"slope{k}", derived)):
        lines += ["", "", "@packed", f"def {name}(x):", "    place = apart(x)", "    i = 0"]
        lines += [f"    i = i + {half} if EDGES{k}[i + {half - 1}] <= place else i" for half in _halves(count)]
        lines += [f"    u = x - PIECES{k}_0[i]", f"    value = {_horner(polynomial)}"]
        if table.refuses:
            lines.append(f"    value = np.nan if {outside(table, 'x')} else value")
        lines.append("    return value")
    return "\n".join(lines)


def outside(table: LookupTable, x: str) -> str:
    """Write the condition that a table which ends with its points is left."""
    return f"({x} < {float(table.x[0])!r}) | ({x} > {float(table.x[-1])!r})"


def _power_of_two(least: int) -> int:
    return 1 << (least - 1).bit_length()


def _halves(count: int) -> Iterable[int]:
    while count > 1:
        count //= 2
        yield count


def _horner(coefficients: list[str]) -> str:
    text = coefficients[-1]
    for coefficient in reversed(coefficients[:-1]):
        text = f"{coefficient} + u * ({text})"
    return text


def _array(numbers: NDArray[np.float64]) -> str:
    """Write a constant of the module; numba keeps it where no store of the lanes can reach, which it has to know."""
    return f"np.array([{', '.join('np.inf' if number == np.inf else repr(float(number)) for number in numbers)}])"
