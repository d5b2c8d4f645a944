"""What an independent program needs to check a proof again: the statement, the loop and the coordinates, all exact.

No number here is a rounded copy of another: decimals are those of the configuration, floats are hexadecimal, and the
matrix T of the coordinates may be anything regular. The boxes are rebuilt by whoever checks. `scripts/recheck` does.
"""

from __future__ import annotations

from decimal import Decimal
from typing import Any

from roa.basin.claim import Claim, Decrease, Result
from roa.bound.bounds import Bounds
from roa.bound.equilibrium_enclosure import enclose_equilibrium
from roa.bound.level_chart import level_chart
from roa.bound.lyapunov_function import LyapunovFunction, Quadratic
from roa.loop.configuration import Configuration
from roa.loop.formula_text import decimal_text, to_text


def certificate(configuration: Configuration, bounds: Bounds, claim: Claim | None) -> dict[str, Any] | None:
    """The certificate of the claim, where V̇ < 0 is proved for it, else of the largest proved bound.

    A ball may be proved by the set that holds it, so that the certificate of the bound stands for it. None where
    neither is about a quadratic V: what rests on an invariance argument or a formula is not written yet, nor what is
    proved of a loop with a hold, limits or look-up tables.
    """
    table = configuration.bound
    loop = configuration.loop
    if loop.hold is not None or loop.tables or loop.limits:
        return None
    if claim is not None and claim.result is Result.PROVED and table.level is not None:
        proved = claim.decrease is Decrease.PROVED
        return _written("claim", claim.V, table.level, table.inner) if proved else None
    best = bounds.largest_proved
    return None if best is None or configuration.loop.disturbances else _written(best.name, best.V, best.level, None)


def _written(about: str, V: LyapunovFunction, level: Decimal | float, inner: Decimal | None) -> dict[str, Any] | None:
    if not isinstance(V, Quadratic):
        return None
    loop, chart = V.loop, level_chart(V, float(level))
    if isinstance(chart, str):
        return None
    if inner is None:
        statement = f"every start in {{V <= {level}}} converges, since V̇ < 0 there but at the equilibrium"
    else:
        statement = f"every start in {{V <= {level}}} ends in {{V <= {inner}}}, since V̇ < 0 between"
    return {
        "about": about,
        "statement": statement,
        "states": loop.states,
        "parameters": {name: decimal_text(parameter.value) for name, parameter in loop.parameters.items()},
        "disturbance": {
            name: [decimal_text(low), decimal_text(high)] for name, (low, high) in loop.disturbances.items()
        },
        "signals": [[name, to_text(tree)] for name, tree in loop.signals.items()],
        "dynamics": [to_text(tree) for tree in loop.dynamics],
        "domain": [[decimal_text(low), decimal_text(high)] for low, high in loop.domain],
        "P": [list(map(_exact, row)) for row in (V.exact or V.P.tolist())],
        "level": decimal_text(level) if isinstance(level, Decimal) else float(level).hex(),
        "inner": None if inner is None else decimal_text(inner),
        # Whether V is about an equilibrium, which is near the centre, or about the centre itself.
        "equilibrium": enclose_equilibrium(loop, V.centre) is not None,
        "centre": [x.hex() for x in V.centre.tolist()],
        "T": [[entry.hex() for entry in row] for row in chart.T.tolist()],
    }


def _exact(entry: Any) -> str:
    return entry.hex() if isinstance(entry, float) else str(entry)
