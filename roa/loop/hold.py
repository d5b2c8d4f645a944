"""Table [hold]: the signals that a digital controller computes from samples and holds between them."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from decimal import Decimal
from typing import Any

from roa.loop.expression import Expression, names_in
from roa.loop.faults import Faults
from roa.loop.values import kind, number
from roa.loop.wording import hint, listed

KEYS = ("signals", "period", "delay")


@dataclass(frozen=True)
class Hold:
    """The digital part of a loop.

    The controller samples the state at t = 0, T, 2T, … and computes the held signals from the sample, with all
    signals above them. A command computed at kT acts from kT + delay until the next one acts; before the first
    one acts, a held signal has its value at the equilibrium. What is not held is continuous.

    Attributes
    ----------
    signals : names of the held signals, in the order of table [signals]
    period : T, s, > 0
    delay : s, 0 <= delay <= period
    """

    signals: tuple[str, ...]
    period: Decimal
    delay: Decimal

    @property
    def T(self) -> float:
        """Period, s."""
        return float(self.period)

    @property
    def tau(self) -> float:
        """Delay, s."""
        return float(self.delay)

    @property
    def words(self) -> str:
        """What is held and how, for people."""
        delay = f"{self.tau:g} s after" if self.delay else "at"
        return f"{listed(self.signals)} sampled every {self.T:g} s, acting from {delay} the sample"


def read_hold(
    table: Mapping[str, Any],
    names: Mapping[str, Any],
    signals: Mapping[str, Expression],
    dynamics: Mapping[str, Expression],
    faults: Faults,
) -> Hold | None:
    """Build the hold from its table, or record what is wrong and return None.

    Parameters
    ----------
    table : content of [hold]
    names : of the states and parameters
    signals, dynamics : trees by name
    """
    before = len(faults.found)
    for key in (key for key in table if key not in KEYS):
        faults.add("hold", key, f"unknown key; accepted are {listed(KEYS)}{hint(key, KEYS)}")
    held = _signals(table, names, signals, dynamics, faults)
    period, delay = _period(table, faults), _seconds(table, "delay", faults) or Decimal(0)
    if delay < 0:
        faults.add("hold", "delay", "must be from 0 to the period", table["delay"])
    elif period is not None and delay > period:
        sentence = f"must not be longer than the period, {period:f} s: a newer command would act before an older one"
        faults.add("hold", "delay", sentence, table["delay"])
    if len(faults.found) > before or period is None:
        return None
    return Hold(held, period, delay)


def check_with_hold(hold: Hold, horizon: float | None, ultimate: Mapping[str, bool], faults: Faults) -> None:
    """Record what does not go together with a hold.

    Parameters
    ----------
    horizon : s; None where it is not known
    ultimate : by table and key, whether the configuration asks for an ultimate bound there
    """
    period = hold.T
    for place in (place for place, is_asked in ultimate.items() if is_asked):
        sentence = f"not together with {place}: there is no proof of an ultimate bound of a sampled loop; remove one"
        faults.add("hold", "", sentence)
    if horizon is not None and period > horizon:
        sentence = f"must not be longer than horizon = {horizon:g} of [sweep]; a trajectory would meet one sample only"
        faults.add("hold", "period", sentence, hold.period)


def _signals(
    table: Mapping[str, Any],
    names: Mapping[str, Any],
    signals: Mapping[str, Expression],
    dynamics: Mapping[str, Expression],
    faults: Faults,
) -> tuple[str, ...]:
    found = table.get("signals")
    if not isinstance(found, list) or not found or not all(isinstance(name, str) for name in found):
        if "signals" not in table:
            faults.add("hold", "signals", 'the key is missing; a list of signals is needed, such as ["torque"]')
        else:
            sentence = f'must be a list of names of signals, such as ["torque"]; {_what(found)} found'
            faults.add("hold", "signals", sentence, found)
        return ()
    reached = _reached(signals, dynamics)
    for i, name in enumerate(found):
        if name in names:
            sentence = f'"{name}" is no signal; only signals are held: write the command as a signal in [signals]'
        elif name not in signals:
            sentence = f'no such signal: "{name}"; signals are {listed(signals) or "none"}{hint(name, signals)}'
        elif name in found[:i]:
            sentence = f'"{name}" is named twice'
        elif name not in reached:
            sentence = f'the dynamics do not depend on "{name}", so that holding it does nothing; remove it'
        else:
            continue
        faults.add("hold", "signals", sentence, found)
    return tuple(name for name in signals if name in found)


def _what(value: Any) -> str:
    return "an empty list" if value == [] else kind(value)


def _reached(signals: Mapping[str, Expression], dynamics: Mapping[str, Expression]) -> set[str]:
    """Names that the dynamics depend on, through signals too."""
    reached: set[str] = set().union(*(names_in(tree) for tree in dynamics.values()))
    for name in reversed(list(signals)):
        if name in reached:
            reached |= names_in(signals[name])
    return reached


def _period(table: Mapping[str, Any], faults: Faults) -> Decimal | None:
    if "period" not in table:
        faults.add("hold", "period", "the key is missing; the time from one sample to the next is needed, in s")
        return None
    period = _seconds(table, "period", faults)
    if period is not None and period <= 0:
        faults.add("hold", "period", "must be greater than 0", table["period"])
        return None
    return period


def _seconds(table: Mapping[str, Any], key: str, faults: Faults) -> Decimal | None:
    if key not in table:
        return None
    try:
        return number(table[key])
    except ValueError as error:
        faults.add("hold", key, str(error), table[key])
        return None
