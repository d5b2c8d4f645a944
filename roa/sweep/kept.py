"""What a run keeps of its samples, by `[sweep] store`, and what that takes on the disk."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from typing import Any

import numpy as np
from numpy.typing import NDArray

from roa.kernel.trajectories import Trajectories

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


def completed(columns: Mapping[str, NDArray[Any]], starts: Callable[[], NDArray[np.float64]]) -> Trajectories:
    """Return kept columns as trajectories; what is not kept is NaN, -1 step, and no reason.

    Parameters
    ----------
    starts : makes the starts again, float64 (m, n), where they are not among the columns
    """
    initial = columns["initial"] if "initial" in columns else starts()
    m, n = initial.shape
    nothing = np.broadcast_to(np.nan, (m, n))
    columns_of: dict[str, Any] = {"initial": initial, "final": nothing, "peak": nothing}
    columns_of |= {"steps": np.broadcast_to(np.int32(-1), (m,)), "reason": np.zeros(m, np.uint8)}
    return Trajectories(**(columns_of | dict(columns)))
