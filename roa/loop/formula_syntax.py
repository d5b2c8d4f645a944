"""The text of a formula as Python's syntax tree, within caps; nothing is decided here about its meaning.

Python's parser is safe on text of a capped length, but not silent: it warns, drops comments, changes
full-width letters and runs out of its stack. All of that becomes a fault with its column.
"""

from __future__ import annotations

import ast
import re
import warnings
from dataclasses import dataclass

from roa.loop.wording import shortened

LONGEST = 8000  # characters
MOST_NODES = 6000
DEEPEST = 50  # Python's own recursion limit stays far away
ACCEPTED = "accepted are + - * / **, brackets, numbers, names and the listed functions"


@dataclass(frozen=True)
class FormulaFault:
    """One fault of a formula: column (from 1) and a sentence without a full stop."""

    column: int
    sentence: str


class FormulaError(Exception):
    """A formula that cannot be read, with every fault that was found."""

    def __init__(self, faults: list[FormulaFault]) -> None:
        self.faults = tuple(sorted(faults, key=lambda fault: fault.column))
        super().__init__("; ".join(f"column {fault.column}: {fault.sentence}" for fault in self.faults))


def _fail(column: int, sentence: str) -> FormulaError:
    return FormulaError([FormulaFault(column, sentence)])


def syntax_tree(text: str) -> ast.expr:
    """Parse the text as one Python expression within the caps; columns count from its first character.

    Raises
    ------
    FormulaError
        Where it is none, holds characters that no formula has, or exceeds a cap.
    """
    if not text.strip():
        raise _fail(1, "the formula is empty")
    if len(text) > LONGEST:
        raise _fail(LONGEST + 1, f"the formula has {len(text)} characters, at most {LONGEST} are accepted; use signals")
    # Python would read full-width letters as ASCII names, and drop whatever follows a #.
    if stray := re.search(r"[^\x20-\x7e\n\r\t]|#", text):
        raise _fail(stray.start() + 1, f"the character {_shown(stray.group())} is not part of formulas")
    line = re.sub(r"[\n\r\t]", " ", text)
    indent = len(line) - len(line.lstrip())
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")
            body = ast.parse(line.strip(), mode="eval").body
    except SyntaxError as error:
        raise _syntax_fault(line, indent + (error.offset or 1), str(error.msg)) from None
    except (RecursionError, MemoryError, ValueError):
        raise _fail(1, f"the formula is nested deeper than {DEEPEST}; use signals") from None
    _check_size(body)
    _shift(body, indent)
    return body


def _syntax_fault(line: str, column: int, message: str) -> FormulaError:
    rest = line[column - 1 :].strip()
    if "was never closed" in message:
        return _fail(column, "this bracket is never closed")
    if "too many nested" in message:
        return _fail(column, f"the formula is nested deeper than {DEEPEST}; use signals")
    if not rest or re.search(r"[-+*/(,<>=]\s*$", line):
        return _fail(len(line.rstrip()) + 1, "the formula ends where a number or a name was expected")
    if rest[0] in ")]}":
        return _fail(column, "this bracket was never opened")
    if re.match(r"[\d.]+[A-Za-z_(]", rest):
        return _fail(column, f'cannot read "{shortened(rest)}"; a product needs *')
    if re.match(r"=[^=]", rest):
        return _fail(column, "a formula holds no =; write the right-hand side alone")
    return _fail(column, f'cannot read the formula from "{shortened(rest)}" on; {ACCEPTED}')


def _shown(character: str) -> str:
    return f'"{character}"' + ("" if character.isascii() else f" (U+{ord(character):04X})")


def _check_size(body: ast.expr) -> None:
    """Hold the syntax tree to the caps, level by level and without recursion."""
    level, depth, count = [body], 0, 0
    while level:
        depth, count = depth + 1, count + len(level)
        if depth > DEEPEST:
            cure = "a sum of n terms counts n: bracket groups of terms, or use signals"
            raise _fail(1, f"the formula is nested deeper than {DEEPEST}; {cure}")
        if count > MOST_NODES:
            raise _fail(1, f"the formula has more than {MOST_NODES} parts; use signals")
        level = [child for node in level for child in ast.iter_child_nodes(node) if isinstance(child, ast.expr)]


def _shift(body: ast.expr, indent: int) -> None:
    for node in ast.walk(body):
        if isinstance(node, ast.expr | ast.keyword):
            node.col_offset += indent
            node.end_col_offset = (node.end_col_offset or 0) + indent
