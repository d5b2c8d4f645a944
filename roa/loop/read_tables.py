"""The tables [tables.NAME]: points in the configuration itself, or in a CSV file beside it.

A configuration has to mean the same wherever it is read again: what a CSV held is kept as text in the table
[files] at the end of the configuration, from where it is taken the next time. The path is the name of a file in the
configuration's folder or below it, so that a configuration of unknown origin cannot read what it should not.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from decimal import Decimal, InvalidOperation
from pathlib import Path
from typing import Any

from roa.loop.faults import ABSENT, Faults
from roa.loop.lookup_table import BEYOND, KINDS, LookupTable
from roa.loop.values import kind, number, word
from roa.loop.wording import hint, listed, quoted, shortened

MOST_ROWS = 1000
MOST_TABLES = 100
LARGEST_CSV = 100_000  # bytes
KEYS = ("csv", "x", "y", "kind", "beyond")
_STAND_IN = (Decimal(0), Decimal(1))  # points of a faulty table while the rest is read


@dataclass(frozen=True)
class Files:
    """Where the text of a CSV comes from.

    Attributes
    ----------
    stored : texts by the name that `csv = …` gives; all of them, where there is one
    folder : of the configuration; not looked into where texts are stored, None where it does not come from a file
    """

    stored: Mapping[str, str]
    folder: Path | None


def read_tables(
    content: Mapping[str, Any], files: Files, faults: Faults
) -> tuple[dict[str, LookupTable], dict[str, str]]:
    """Return the tables by name, and the texts of the CSV files that were read from the folder.

    A faulty table counts as known: formulas that use it are not at fault.
    """
    if len(content) > MOST_TABLES:
        faults.add("tables", "", f"{len(content)} tables found, at most {MOST_TABLES} are accepted")
        return {}, {}
    reader = _Tables(files, faults, {})
    tables = {name: reader.table(name, entry) for name, entry in content.items()}
    return tables, reader.texts


@dataclass(frozen=True)
class _Tables:
    files: Files
    faults: Faults
    texts: dict[str, str]

    def table(self, name: str, entry: Any) -> LookupTable:
        place = f"tables.{name}"
        if not isinstance(entry, dict):
            self.faults.add("tables", name, f"must be a table [{place}], {kind(entry)} found", entry)
            return LookupTable(name, _STAND_IN, _STAND_IN)
        for key in (key for key in entry if key not in KEYS):
            self.faults.add(place, key, f"unknown key; accepted are {listed(KEYS)}{hint(key, KEYS)}")
        how = self.word(place, entry, "kind", KINDS)
        beyond = self.word(place, entry, "beyond", BEYOND)
        x, y = self.points(place, entry) or (_STAND_IN, _STAND_IN)
        return LookupTable(name, x, y, how, beyond)

    def word(self, place: str, entry: Mapping[str, Any], key: str, accepted: tuple[str, ...]) -> str:
        try:
            return word(*accepted)(entry.get(key, accepted[0]))
        except ValueError as error:
            self.faults.add(place, key, str(error), entry[key])
            return accepted[0]

    def points(self, place: str, entry: Mapping[str, Any]) -> tuple[tuple[Decimal, ...], tuple[Decimal, ...]] | None:
        """Return x and y, or None with a fault recorded."""
        before = len(self.faults.found)
        if "csv" in entry:
            if "x" in entry or "y" in entry:
                self.faults.add(place, "", "either csv or x and y is accepted; both are found")
                return None
            columns = self.csv(place, entry["csv"])
        else:
            missing = [key for key in ("x", "y") if key not in entry]
            if missing:
                cure = 'give csv = "FILE", or x = […] and y = […]'
                self.faults.add(place, "", f"{' and '.join(missing)} missing; {cure}")
                return None
            columns = self.column(place, "x", entry["x"]), self.column(place, "y", entry["y"])
        if columns is None or len(self.faults.found) > before:
            return None
        x, y = columns
        sentence = _fault_of_points(x, y)
        if sentence:
            self.faults.add(place, "csv" if "csv" in entry else "x", sentence, entry.get("csv", ABSENT))
            return None
        return x, y

    def column(self, place: str, key: str, values: Any) -> tuple[Decimal, ...]:
        if not isinstance(values, list):
            self.faults.add(place, key, f"must be a list of numbers, {kind(values)} found", values)
            return ()
        column = []
        for i, value in enumerate(values):
            try:
                column.append(number(value))
            except ValueError as error:
                self.faults.add(place, key, f"entry {i + 1} {error}", value)
                return ()
        return tuple(column)

    def csv(self, place: str, name: Any) -> tuple[tuple[Decimal, ...], tuple[Decimal, ...]] | None:
        try:
            text = self.text(name)
            return _columns(text)
        except ValueError as error:
            self.faults.add(place, "csv", str(error), name)
            return None

    def text(self, name: Any) -> str:
        if not isinstance(name, str):
            raise ValueError(f"must be the name of a file in quotes, {kind(name)} found")
        if name in self.files.stored:
            return self.files.stored[name]
        if self.files.stored:
            raise ValueError("is missing in [files], which has to hold the text of every file where it is given")
        if self.files.folder is None:
            raise ValueError("the configuration was not read from a file, so there is no folder to look in")
        # Line ends as in every string of TOML, so that what is kept is what was read.
        text = "".join(f"{line}\n" for line in _read(self.files.folder, name).splitlines())
        if "'''" in text or not text.replace("\n", "").replace("\t", "").isprintable():
            raise ValueError("holds characters that a table of numbers does not need")
        self.texts[name] = text
        return text


def _read(folder: Path, name: str) -> str:
    """Return the text of a file in the folder or below it."""
    path = folder / name
    if "\0" in name or not path.resolve().is_relative_to(folder.resolve()):
        raise ValueError("lies outside the folder of the configuration; put the file beside the configuration")
    try:
        if not path.is_file():
            found = "is no file" if path.exists() else "no such file"
            raise ValueError(f"{found} in the folder of the configuration, {folder.resolve()}")
        if path.stat().st_size > LARGEST_CSV:
            raise ValueError(f"the file has {path.stat().st_size} bytes, at most {LARGEST_CSV} are accepted")
        return path.read_bytes().decode("utf-8-sig")
    except UnicodeDecodeError as error:
        raise ValueError(f"not a text file in UTF-8 (byte {error.start})") from None
    except OSError as error:
        raise ValueError(f"cannot be read ({error.strerror})") from None


def _columns(text: str) -> tuple[tuple[Decimal, ...], tuple[Decimal, ...]]:
    """Read two columns of numbers, divided by a comma, a semicolon, a tab or blanks.

    Blank lines and lines that begin with # are left out; the first line left may hold names.
    """
    rows: list[tuple[Decimal, Decimal]] = []
    first = True
    for at, line in enumerate(text.splitlines(), start=1):
        if not line.strip() or line.lstrip().startswith("#"):
            continue
        fields = [field.strip().strip('"') for field in _divided(line)]
        if len(fields) != 2:
            raise ValueError(
                f"line {at}: two columns are accepted, {len(fields)} found ({quoted(shortened(line, 40))})"
            )
        numbers = [_decimal(field) for field in fields]
        if not (first and numbers == [None, None]):
            for field, value in zip(fields, numbers, strict=True):
                if value is None:
                    raise ValueError(f"line {at}: {quoted(shortened(field))} is not a number")
                try:
                    number(value)
                except ValueError as error:
                    raise ValueError(f"line {at}: {quoted(shortened(field))} {error}") from None
            rows.append((numbers[0], numbers[1]))  # type: ignore[arg-type]
        first = False
    return tuple(x for x, _ in rows), tuple(y for _, y in rows)


def _divided(line: str) -> list[str]:
    for divider in (",", ";", "\t"):
        if divider in line:
            return line.split(divider)
    return line.split()


def _decimal(text: str) -> Decimal | None:
    """Return the number that the text is, NaN and infinity included, or None."""
    try:
        return Decimal(text) if text.isascii() and "_" not in text else None
    except InvalidOperation:
        return None


def _fault_of_points(x: tuple[Decimal, ...], y: tuple[Decimal, ...]) -> str:
    if len(x) != len(y):
        return f"x and y must have as many numbers as each other; {len(x)} and {len(y)} found"
    if not 2 <= len(x) <= MOST_ROWS:
        rows = "row" if len(x) == 1 else "rows"
        return f"{len(x)} {rows} found; accepted are 2 to {MOST_ROWS}"
    for i in range(1, len(x)):
        if not float(x[i - 1]) < float(x[i]):
            return f"x must rise from row to row; row {i + 1} has {x[i]} after {x[i - 1]}"
    return ""


def with_files(text: str, files: Mapping[str, str]) -> str:
    """Return a configuration's text that holds the texts of the files that it was read with."""
    if not files:
        return text
    lines = [f"{quoted(name)} = '''\n{content}'''" for name, content in files.items()]
    return "\n".join([text.rstrip("\n"), "", "[files]  # what the files beside the configuration held", *lines, ""])
