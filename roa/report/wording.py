"""Numbers and outcomes in words: rounding that never flatters, and the strength beside each number."""

from __future__ import annotations

from collections.abc import Sequence
from decimal import ROUND_CEILING, ROUND_FLOOR, ROUND_HALF_EVEN, Context, Decimal
from math import floor, log10

from roa.kernel.outcomes import Outcome

LEVEL_DIGITS = 5


def level_text(level: float) -> str:
    """A level to five digits, rounded down: the set that is named lies in the set that was found."""
    return _plain(Context(prec=LEVEL_DIGITS, rounding=ROUND_FLOOR).create_decimal(repr(float(level))))


def number(value: float, digits: int = 4) -> str:
    """A number to so many digits, rounded to nearest."""
    return _plain(Context(prec=digits, rounding=ROUND_HALF_EVEN).create_decimal(repr(float(value))))


def percent(share: float, decimals: int = 1) -> str:
    """A share in per cent; what is not nothing and not all never reads as 0 % or 100 %."""
    text = f"{100 * share:.{decimals}f}"
    if share > 0 and float(text) == 0:
        text = f"< {10.0**-decimals:.{decimals}f}"
    elif share < 1 and float(text) == 100:
        text = f"> {100 - 10.0**-decimals:.{decimals}f}"
    return f"{text} %"


def percent_upper(limit: float) -> str:
    """An upper limit of a share in per cent to two digits, rounded up."""
    return f"{_plain(Context(prec=2, rounding=ROUND_CEILING).create_decimal(repr(100 * limit)))} %"


def interval_percent(low: float, high: float) -> str:
    """An interval of a share in per cent, rounded outward to the digits that it leaves meaningful."""
    step = Decimal(1).scaleb(-decimals_for(100 * (high - low)))
    ends = (Decimal(low) * 100).quantize(step, ROUND_FLOOR), (Decimal(high) * 100).quantize(step, ROUND_CEILING)
    return f"{ends[0]} to {ends[1]} %"


def share_with_interval(share: float, interval: tuple[float, float], confidence: float, strength: str) -> str:
    """A share with its interval and the strength of both."""
    low, high = interval
    value = percent(share, decimals_for(100 * (high - low)))
    return f"{value} ({confidence_text(confidence)} interval {interval_percent(low, high)}, {strength})"


def confidence_text(confidence: float) -> str:
    """0.99 as "99 %"."""
    return f"{100 * confidence:.10g} %"


def decimals_for(width: float) -> int:
    """Decimals that show an interval of that width to its first digit; at least 1, at most 6."""
    return 6 if width <= 0 else min(6, max(1, -floor(log10(width))))


def outcome_word(outcome: Outcome) -> str:
    """The outcome as a reader sees it: `settled_elsewhere` as "settled elsewhere"."""
    return outcome.word.replace("_", " ")


def point_text(states: Sequence[str], values: Sequence[float], units: Sequence[str]) -> str:
    """A state as "tilt = 0.31 rad, rate = -1.2 rad/s"."""
    parts = zip(states, values, units, strict=True)
    return ", ".join(f"{name} = {number(value, 6)} {unit}".rstrip() for name, value, unit in parts)


def in_a_row(parts: Sequence[str]) -> str:
    """Parts of a sentence, with "and" before the last."""
    return " and ".join([", ".join(parts[:-1]), parts[-1]] if len(parts) > 1 else parts)


def _plain(value: Decimal) -> str:
    """Plain digits for sizes of daily life, powers of ten beyond."""
    if value == 0:
        return "0"
    if -5 <= value.adjusted() < 7:
        return f"{value.normalize():f}"
    return f"{value.normalize():e}"
