"""Table [disturbance]: names that vary with time, anywhere in their intervals.

A name that is a parameter as well has its nominal value there, which must lie in the interval; any other name is made
a parameter whose nominal value is the middle. Equilibrium and trajectories are those of the nominal values.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from decimal import Context, Decimal
from typing import Any

from roa.loop.expression import Expression, names_in
from roa.loop.faults import Faults
from roa.loop.model import Parameter
from roa.loop.values import pair
from roa.loop.wording import hint

_EXACT = Context(prec=1000)  # more digits than two ends in the accepted range of sizes can differ by


def read_disturbances(
    table: Mapping[str, Any], parameters: Mapping[str, Parameter], faults: Faults
) -> tuple[dict[str, Parameter], dict[str, tuple[Decimal, Decimal]]]:
    """Return the parameters with the nominal values of all disturbances among them, and the intervals."""
    nominal, intervals = dict(parameters), {}
    for name, value in table.items():
        nominal.setdefault(name, Parameter(Decimal(0)))
        try:
            low, high = intervals[name] = pair(value)
        except ValueError as error:
            faults.add("disturbance", name, str(error), value)
            continue
        if name not in parameters:
            nominal[name] = Parameter(_EXACT.multiply(_EXACT.add(low, high), Decimal("0.5")))
        elif not low <= parameters[name].value <= high:
            sentence = f"must hold the nominal value {parameters[name].value} of [parameters]; widen it or move that"
            faults.add("disturbance", name, sentence, value)
    return nominal, intervals


def check_use(
    intervals: Mapping[str, Any], trees: Iterable[Expression], parameters: Sequence[str], faults: Faults
) -> None:
    """Record a fault for each disturbance that no formula uses: a slip in its name would leave it out of the proof."""
    used = set().union(*map(names_in, trees))
    for name in (name for name in intervals if name not in used):
        faults.add("disturbance", name, f"no formula uses this name{hint(name, [*parameters, *sorted(used)])}")


def constants(parameters: Mapping[str, Parameter], intervals: Mapping[str, Any]) -> dict[str, Decimal]:
    """Return the exact values that formulas may use as exponents: those of the parameters that do not vary."""
    return {name: parameter.value for name, parameter in parameters.items() if name not in intervals}
