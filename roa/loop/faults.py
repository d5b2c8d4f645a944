"""All faults of one configuration, gathered so that the user sees them in one go."""

from __future__ import annotations

from dataclasses import dataclass, field
from decimal import Decimal
from typing import Any

from roa.errors import UserError
from roa.loop.formula_syntax import FormulaError
from roa.loop.wording import quoted, shortened

ABSENT = object()  # in place of a value that a fault does not repeat
_LONGEST_VALUE = 60  # characters of a value that a fault repeats


@dataclass
class Faults:
    """Faults found so far, each `file: [table] key = value: sentence`."""

    source: str
    found: list[str] = field(default_factory=list)

    def add(self, table: str, key: str, sentence: str, value: Any = ABSENT) -> None:
        """Record one fault; `table` and `key` may be empty where the fault lies higher up."""
        place = f"[{table}] {key}".strip() if table else key
        shown = "" if value is ABSENT else f" = {_shown(value)}"
        self._record(f"{place}{shown}: {sentence}")

    def add_formula(self, table: str, key: str, text: str, error: FormulaError) -> None:
        """Record every fault of one formula, with the formula shortened around each column."""
        for fault in error.faults:
            shown = quoted(_around(text, fault.column))
            self._record(f"[{table}] {key} = {shown}: column {fault.column}: {fault.sentence}")

    def _record(self, fault: str) -> None:
        # names come as they were typed; escaped, a line break in one leaves the fault one line
        line = "".join(character if character.isprintable() else repr(character)[1:-1] for character in fault)
        self.found.append(f"{self.source}: {line}")

    def raise_if_any(self) -> None:
        """Raise `UserError` with all faults, or return where there is none."""
        if self.found:
            raise UserError(self.found)


def _around(text: str, column: int) -> str:
    start = max(0, min(column - 1 - _LONGEST_VALUE // 2, len(text) - _LONGEST_VALUE))
    end = start + _LONGEST_VALUE
    return ("…" if start else "") + text[start:end] + ("…" if end < len(text) else "")


def _shown(value: Any) -> str:
    return shortened(_written(value), _LONGEST_VALUE)


def _written(value: Any) -> str:
    """Write a value as TOML would, near enough to be recognised."""
    match value:
        case bool():
            return "true" if value else "false"
        case str():
            return quoted(value)
        case Decimal() if not value.is_finite():
            return str(value).lower().replace("infinity", "inf")
        case list():
            return f"[{', '.join(map(_written, value))}]"
        case dict():
            return f"{{ {', '.join(f'{key} = {_written(item)}' for key, item in value.items())} }}"
    return str(value)
