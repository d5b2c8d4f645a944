"""From a TOML file to a `Configuration`, with all faults in one go."""

from __future__ import annotations

import tomllib
from collections.abc import Iterable, Mapping
from decimal import Decimal, InvalidOperation
from pathlib import Path
from typing import Any, TypeVar

import numpy as np
from pydantic import BaseModel, ValidationError

from roa.errors import UserError
from roa.loop import not_yet
from roa.loop.configuration import BoundTable, Configuration, SweepTable, VerdictTable
from roa.loop.expression import Expression
from roa.loop.faults import ABSENT, Faults
from roa.loop.formula import Vocabulary, parse
from roa.loop.formula_syntax import FormulaError
from roa.loop.hold import check_with_hold
from roa.loop.loop_tables import read_loop
from roa.loop.model import Loop
from roa.loop.read_tables import Files, read_tables, with_files
from roa.loop.values import kind
from roa.loop.wording import hint, listed, shortened

LARGEST_FILE = 200_000  # bytes
TABLES = (
    "states", "parameters", "signals", "tables", "dynamics", "equilibrium", "domain", "limits", "hold", "disturbance",
    "bound", "sweep", "verdict", "files",
)  # fmt: skip
UNTITLED = "Untitled loop"  # not the name of the file, which changes when a run keeps its copy
BOUND_KEYS = ("Q", "P", "V", "level", "ball", "scale", "inner", "search", "degree", "boxes")

TableT = TypeVar("TableT", bound=BaseModel)


def read(path: Path) -> Configuration:
    """Read a configuration file.

    Raises
    ------
    UserError
        Where the file cannot be read, or with every fault of its content, one line each.
    """
    try:
        if not path.is_file():
            raise UserError(f"{path}: {'is not a file' if path.exists() else 'no such file'}")
        if path.stat().st_size > LARGEST_FILE:
            raise UserError(_too_large(str(path), path.stat().st_size))
        text = path.read_bytes().decode("utf-8-sig")
    except UnicodeDecodeError as error:
        raise UserError(f"{path}: not a text file in UTF-8 (byte {error.start})") from None
    except OSError as error:
        raise UserError(f"{path}: cannot be read ({error.strerror})") from None
    return read_text(text, str(path), path.parent)


def read_text(text: str, source: str, folder: Path | None = None) -> Configuration:
    """Read a configuration from its text; `source` names it in faults, CSV files lie in `folder`. Raises as `read`."""
    if len(text) > LARGEST_FILE or len(text.encode()) > LARGEST_FILE:
        raise UserError(_too_large(source, len(text.encode())))
    faults = Faults(source)
    tables = _tables(_toml(text, source), faults)
    title = _title(tables.pop("title", UNTITLED), faults)
    stored = _files(tables.get("files", {}), faults)
    lookups, texts = read_tables(tables.get("tables", {}), Files(stored, folder), faults)
    loop = read_loop(title, tables, lookups, faults)
    bound = _bound_table(tables.get("bound", {}), tables, loop, faults)
    sweep = _checked("sweep", SweepTable, tables.get("sweep", {}), SweepTable.model_fields, faults)
    if loop and loop.hold:
        ultimate = {"[disturbance]": bool(loop.disturbances), "[bound] inner": bool(bound and bound.inner)}
        check_with_hold(loop.hold, sweep.horizon if sweep else None, ultimate, faults)
    verdict = _checked("verdict", VerdictTable, tables.get("verdict", {}), VerdictTable.model_fields, faults)
    faults.raise_if_any()
    assert loop is not None
    assert bound is not None
    assert sweep is not None
    assert verdict is not None
    text = with_files(text, texts)
    if len(text.encode()) > LARGEST_FILE:
        raise UserError(_too_large(source, len(text.encode()), " with its tables"))
    return Configuration(source, text, loop, bound, sweep, verdict)


def _too_large(source: str, size: int, what: str = "") -> str:
    return f"{source}: the file{what} has {size} bytes, at most {LARGEST_FILE} are accepted"


def _toml(text: str, source: str) -> dict[str, Any]:
    try:
        return tomllib.loads(text, parse_float=_exact)
    except tomllib.TOMLDecodeError as error:
        sentence, _, line = str(error).rpartition(" (at ")
        raise UserError(f"{source}: not valid TOML: {shortened(sentence, 120)} (at {line}") from None
    except (RecursionError, ValueError):
        raise UserError(f"{source}: not valid TOML: brackets nested too deep, or a number of too many digits") from None


def _exact(text: str) -> Decimal:
    try:
        return Decimal(text)
    except InvalidOperation:  # an exponent beyond any range; refused where the number is used
        return Decimal("Infinity")


def _tables(document: dict[str, Any], faults: Faults) -> dict[str, Any]:
    """Keep the known tables; record a fault for everything else."""
    known: dict[str, Any] = {}
    for name, content in document.items():
        if name == "title":
            known[name] = content
        elif name not in TABLES:
            word, table, key = ("table", name, "") if isinstance(content, dict) else ("key", "", name)
            accepted = f"accepted are title and the tables {listed(TABLES)}"
            faults.add(table, key, f"unknown {word}; {accepted}{hint(name, ('title', *TABLES))}")
        elif not isinstance(content, dict):
            faults.add("", name, f"must be a table [{name}], {kind(content)} found", content)
        else:
            known[name] = content
    return known


def _title(title: Any, faults: Faults) -> str:
    if not isinstance(title, str) or len(title) > 200 or not title.isprintable():
        faults.add("", "title", "must be one line of text of at most 200 characters", title)
        return ""
    return title


def _files(content: Mapping[str, Any], faults: Faults) -> dict[str, str]:
    """Return the texts of files that the configuration itself holds."""
    for name, text in content.items():
        if not isinstance(text, str):
            faults.add("files", name, f"must be the text of a file, {kind(text)} found", text)
    return {name: text for name, text in content.items() if isinstance(text, str)}


def _checked(
    name: str, table: type[TableT], content: Mapping[str, Any], accepted: Iterable[str], faults: Faults
) -> TableT | None:
    """Build a table from its known keys; record every other key and every value that it refuses."""
    accepted = tuple(accepted)
    for key in (key for key in content if key not in accepted):
        if (name, key) in not_yet.KEYS:
            faults.add(name, key, not_yet.key(name, key))
        else:
            faults.add(name, key, f"unknown key; accepted are {listed(accepted)}{hint(key, accepted)}")
    try:
        return table.model_validate({key: value for key, value in content.items() if key in accepted})
    except ValidationError as error:
        for fault in error.errors():
            sentence = str(fault["ctx"]["error"]) if "ctx" in fault else fault["msg"]
            if key := str(fault["loc"][0]) if fault["loc"] else "":
                faults.add(name, key, sentence, content.get(key, ABSENT))
            else:
                faults.add(name, "", sentence)
        return None


def _bound_table(
    content: dict[str, Any], tables: Mapping[str, Any], loop: Loop | None, faults: Faults
) -> BoundTable | None:
    given = [key for key in ("Q", "P", "V") if key in content]
    if len(given) > 1:
        faults.add("bound", "", f"only one of Q, P and V is accepted; {' and '.join(given)} found")
    rest = {key: value for key, value in content.items() if key != "V"}
    table = _checked("bound", BoundTable, rest, BOUND_KEYS, faults)
    if "V" in content:
        tree = _lyapunov_formula(content["V"], tables, loop, faults)
        formula = {"Q": None, "P": None, "V": tree, "V_text": content["V"]}
        table = table.model_copy(update=formula) if table and tree else None
    if table and loop:
        _check_matrices(table, loop.n, faults)
        _check_scale(table, loop.n, faults)
    return table


def _lyapunov_formula(text: Any, tables: Mapping[str, Any], loop: Loop | None, faults: Faults) -> Expression | None:
    if not isinstance(text, str):
        faults.add("bound", "V", f"must be a formula in quotes, {kind(text)} found", text)
        return None
    varying = tables.get("disturbance", {})
    states = tables.get("states", {})
    parameters = [name for name in tables.get("parameters", {}) if name not in varying]
    signals = {
        name: f'"{name}" is a signal; V is a formula in states and parameters: write the signal out'
        for name in tables.get("signals", {})
    }
    signals |= {name: f'"{name}" varies with time; V is a formula in states and constants' for name in varying}
    constants = {name: loop.parameters[name].value for name in parameters} if loop else {}
    lookups = loop.tables if loop else {}
    try:
        return parse(text, Vocabulary([*states, *parameters], constants, signals, lookups))
    except FormulaError as error:
        faults.add_formula("bound", "V", text, error)
        return None


def _check_matrices(table: BoundTable, n: int, faults: Faults) -> None:
    for key, matrix in (("Q", table.Q), ("P", table.P)):
        if isinstance(matrix, tuple) and len(matrix) != n:
            faults.add("bound", key, f"must have {n} rows and columns, one for each state; {len(matrix)} found")
        elif key == "Q" and isinstance(matrix, tuple) and not _positive_definite(np.array(matrix, dtype=np.float64)):
            faults.add("bound", key, "must be positive definite")


def _check_scale(table: BoundTable, n: int, faults: Faults) -> None:
    if table.scale is not None and len(table.scale) != n:
        faults.add("bound", "scale", f"must have {n} numbers, one for each state; {len(table.scale)} found")


def _positive_definite(matrix: np.ndarray[Any, np.dtype[np.float64]]) -> bool:
    """Judge by eigenvalues, after scaling the diagonal to one so that units do not matter."""
    diagonal = np.diag(matrix)
    if not (diagonal > 0).all():
        return False
    scale = np.sqrt(diagonal)
    return bool(np.linalg.eigvalsh(matrix / scale / scale[:, None]).min() > 1e-14 * len(matrix))
