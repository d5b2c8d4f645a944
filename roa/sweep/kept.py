"""What a run keeps of its samples, by `[sweep] store`, and what that takes on the disk."""

from __future__ import annotations

# In the order in which they stand in a record.
KEPT = {
    "all": ("initial", "outcome", "time", "final", "peak", "steps", "reason"),
    "outcomes": ("outcome", "time"),
}
# Bytes of a start in each column that has one value a start; the others have a float64 for each state.
WIDTHS = {"outcome": 1, "time": 8, "steps": 4, "reason": 1}


def row_bytes(kept: str, n: int) -> int:
    """Return what a start with n states takes on the disk, in a block or merged, bytes."""
    return sum(WIDTHS.get(name, 8 * n) for name in KEPT[kept])
