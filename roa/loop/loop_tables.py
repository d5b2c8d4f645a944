"""The tables that describe the loop itself: states, parameters, signals, dynamics, equilibrium, domain."""

from __future__ import annotations

import keyword
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from decimal import Decimal
from typing import Any

from roa.loop import not_yet
from roa.loop.disturbance_table import check_use, constants, read_disturbances
from roa.loop.expression import FUNCTIONS, Expression
from roa.loop.faults import Faults
from roa.loop.formula import Vocabulary, parse
from roa.loop.formula_syntax import FormulaError
from roa.loop.hold import Hold, read_hold
from roa.loop.lookup_table import LookupTable
from roa.loop.model import Loop, Parameter
from roa.loop.values import kind, number, pair
from roa.loop.wording import hint, listed, quoted

MOST_STATES = 40
LONGEST_NAME = 64
LONGEST_UNIT = 40


def read_loop(
    title: str, tables: Mapping[str, dict[str, Any]], lookups: Mapping[str, LookupTable], faults: Faults
) -> Loop | None:
    """Build the loop from its tables, or record what is wrong and return None; `lookups` are its look-up tables.

    A name that is faulty where it is defined still counts as known elsewhere: one slip, one fault.
    """
    before = len(faults.found)
    for required in ("states", "dynamics", "domain"):
        if required not in tables:
            faults.add(required, "", "the table is missing")
    reader = _LoopTables(tables, lookups, faults)
    reader.check_names()
    units = reader.units()
    parameters, disturbances = read_disturbances(tables.get("disturbance", {}), reader.parameters(), faults)
    known = constants(parameters, disturbances)
    signals = reader.signals([*parameters], known)
    dynamics = reader.dynamics([*parameters], known)
    if len(faults.found) == before:  # a faulty formula may be the one that uses it
        check_use(disturbances, [*signals.values(), *dynamics.values()], [*tables.get("parameters", {})], faults)
    hold = reader.hold(signals, dynamics)
    guess = reader.guess()
    domain = reader.domain(guess)
    limits = reader.limits()
    if len(faults.found) > before:
        return None
    states = tuple(units)
    return Loop(
        title=title,
        states=states,
        units=tuple(units.values()),
        parameters=parameters,
        signals=signals,
        dynamics=tuple(dynamics[name] for name in states),
        domain=tuple(domain[name] for name in states),
        guess=tuple(guess.get(name, Decimal(0)) for name in states),
        limits=limits,
        tables=lookups,
        hold=hold,
        disturbances=disturbances,
    )


@dataclass(frozen=True)
class _LoopTables:
    tables: Mapping[str, dict[str, Any]]
    lookups: Mapping[str, LookupTable]
    faults: Faults

    @property
    def states(self) -> dict[str, Any]:
        return self.table("states")

    def table(self, name: str) -> dict[str, Any]:
        return self.tables.get(name, {})

    def check_names(self) -> None:
        owner: dict[str, str] = {}
        for table in ("states", "parameters", "signals", "disturbance", "tables"):
            for name in self.table(table):
                if table == "disturbance" and owner.get(name) == "parameters":
                    continue  # a parameter that varies; its value there is the nominal one
                if sentence := _name_fault(name):
                    self.faults.add(table, name, sentence)
                elif name in owner:
                    self.faults.add(
                        table, name, f"the name is taken already in [{owner[name]}]; names must be distinct"
                    )
                owner.setdefault(name, table)

    def units(self) -> dict[str, str]:
        if "states" in self.tables and not 1 <= len(self.states) <= MOST_STATES:
            self.faults.add("states", "", f"{len(self.states)} states found, 1 to {MOST_STATES} are accepted")
        return {name: self._unit("states", name, unit, unit) for name, unit in self.states.items()}

    def _unit(self, table: str, name: str, unit: Any, value: Any) -> str:
        if isinstance(unit, str) and len(unit) <= LONGEST_UNIT and unit.isprintable():
            return unit
        what = 'text in quotes, such as "m/s" ("" where there is none)'
        self.faults.add(table, name, f"a unit must be {what}, of at most {LONGEST_UNIT} characters", value)
        return ""

    def parameters(self) -> dict[str, Parameter]:
        return {name: self._parameter(name, value) for name, value in self.table("parameters").items()}

    def _parameter(self, name: str, value: Any) -> Parameter:
        table = value if isinstance(value, dict) else {"value": value}
        accepted = ("value", "unit")
        for key in (key for key in table if key not in accepted):
            if key == "spread":
                sentence = "spread is not yet supported by this version (a range of values); remove it"
            else:
                sentence = f"unknown key {quoted(key)}; accepted are {listed(accepted)}{hint(key, accepted)}"
            self.faults.add("parameters", name, sentence, value)
        if "value" not in table and table.keys() <= {*accepted}:  # else the unknown key is its misspelling
            sentence = "value is missing; accepted are a number or { value = …, unit = … }"
            self.faults.add("parameters", name, sentence, value)
        exact = self._number("parameters", name, table.get("value", 1), Decimal(1))
        return Parameter(exact, self._unit("parameters", name, table.get("unit", ""), value))

    def _number(self, table: str, name: str, value: Any, otherwise: Decimal) -> Decimal:
        try:
            return number(value)
        except ValueError as error:
            self.faults.add(table, name, str(error), value)
            return otherwise

    def signals(self, parameters: Sequence[str], known: Mapping[str, Decimal]) -> dict[str, Expression]:
        trees: dict[str, Expression] = {}
        above = [*self.states, *parameters]
        for name, text in self.table("signals").items():
            refused = {later: _too_early(name, later) for later in self.table("signals")}  # unless it stands above
            tree = self._formula("signals", name, text, Vocabulary(above, known, refused, self.lookups))
            if tree is not None:
                trees[name] = tree
            above.append(name)
        return trees

    def dynamics(self, parameters: Sequence[str], known: Mapping[str, Decimal]) -> dict[str, Expression]:
        trees: dict[str, Expression] = {}
        vocabulary = Vocabulary([*self.states, *parameters, *self.table("signals")], known, tables=self.lookups)
        for name, text in self._of_states("dynamics", "its time derivative", complete=True).items():
            tree = self._formula("dynamics", name, text, vocabulary)
            if tree is not None:
                trees[name] = tree
        return trees

    def hold(self, signals: Mapping[str, Expression], dynamics: Mapping[str, Expression]) -> Hold | None:
        if "hold" not in self.tables or len(signals) < len(self.table("signals")):
            return None  # one slip, one fault: what a broken signal means for the hold shows once it is mended
        return read_hold(
            self.table("hold"), {**self.states, **self.table("parameters")}, signals, dynamics, self.faults
        )

    def _formula(self, table: str, name: str, text: Any, vocabulary: Vocabulary) -> Expression | None:
        if not isinstance(text, str):
            self.faults.add(table, name, f"must be a formula in quotes, {kind(text)} found", text)
            return None
        try:
            return parse(text, vocabulary)
        except FormulaError as error:
            self.faults.add_formula(table, name, text, error)
            return None

    def guess(self) -> dict[str, Decimal]:
        entries = self._of_states("equilibrium", "its guess", complete=False)
        return {name: self._number("equilibrium", name, value, Decimal(0)) for name, value in entries.items()}

    def domain(self, guess: Mapping[str, Decimal]) -> dict[str, tuple[Decimal, Decimal]]:
        pairs: dict[str, tuple[Decimal, Decimal]] = {}
        for name, value in self._of_states("domain", "its range [low, high]", complete=True).items():
            try:
                low, high = pairs[name] = pair(value)
            except ValueError as error:
                self.faults.add("domain", name, str(error), value)
                continue
            start = guess.get(name, Decimal(0))
            if not low <= start <= high:
                sentence = f"the guess {name} = {start} of [equilibrium] lies outside; move the guess or the domain"
                self.faults.add("domain", name, sentence, value)
        return pairs

    def limits(self) -> dict[str, tuple[Decimal, Decimal]]:
        known = [*self.states, *self.table("signals")]
        pairs: dict[str, tuple[Decimal, Decimal]] = {}
        for name, value in self.table("limits").items():
            if name not in known:
                found = "a parameter" if name in self.table("parameters") else "no state or signal"
                sentence = f"is {found}; limits are set on {listed(known)}{hint(name, known)}"
                self.faults.add("limits", name, sentence)
                continue
            try:
                pairs[name] = pair(value)
            except ValueError as error:
                self.faults.add("limits", name, str(error), value)
        return pairs

    def _of_states(self, table: str, what: str, complete: bool) -> dict[str, Any]:
        """Entries of a table whose keys are states; faults for others and, where asked, for missing ones."""
        entries: dict[str, Any] = {}
        for name, value in self.table(table).items():
            if name in self.states:
                entries[name] = value
            elif (table, name) in not_yet.KEYS:
                self.faults.add(table, name, not_yet.key(table, name))
            else:
                sentence = f"no such state; states are {listed(self.states)}{hint(name, self.states)}"
                self.faults.add(table, name, sentence)
        if complete and table in self.tables:
            for name in (state for state in self.states if state not in entries):
                self.faults.add(table, name, f"the state has no entry here; {what} is needed")
        return entries


def _name_fault(name: str) -> str:
    if not (name.isascii() and name.isidentifier() and len(name) <= LONGEST_NAME):
        return (
            f"not a name; accepted are ASCII letters, digits and _, no digit first, at most {LONGEST_NAME} characters"
        )
    if name in FUNCTIONS or name == "lookup":
        return "the name of a function cannot be used"
    if keyword.iskeyword(name):
        return "the name is reserved (a word of Python); choose another"
    return ""


def _too_early(name: str, later: str) -> str:
    if later == name:
        return f'signal "{name}" uses itself; a signal may use only those above it'
    return f'signal "{later}" is defined further down; a signal may use only those above it'
