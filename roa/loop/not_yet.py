"""Words of the configuration that are known and that this version does not support yet.

They are refused by name: a table that is ignored in silence would give a wrong verdict.
"""

from __future__ import annotations

TABLES: dict[str, str] = {}

KEYS = {
    ("dynamics", "python"): "dynamics as a Python function",
    ("sweep", "stop_outside"): "stopping outside by proof",
}

VALUES: dict[tuple[str, str, str], str] = {}


def table(name: str) -> str:
    """Return the sentence that refuses a table."""
    return f"not yet supported by this version ({TABLES[name]}); remove the table"


def key(table_name: str, name: str) -> str:
    """Return the sentence that refuses a key."""
    return f"not yet supported by this version ({KEYS[table_name, name]}); remove the key"


def value(table_name: str, name: str, word: str) -> str:
    """Return the sentence that refuses a value."""
    return f'"{word}" is not yet supported by this version; {VALUES[table_name, name, word]}'
