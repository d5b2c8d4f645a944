"""Keys of the configuration that are known and that this version does not support yet.

They are refused by name: a key that is ignored in silence would give a wrong verdict.
"""

from __future__ import annotations

KEYS = {
    ("dynamics", "python"): "dynamics as a Python function",
    ("sweep", "stop_outside"): "stopping outside by proof",
}


def key(table_name: str, name: str) -> str:
    """Return the sentence that refuses a key."""
    return f"not yet supported by this version ({KEYS[table_name, name]}); remove the key"
