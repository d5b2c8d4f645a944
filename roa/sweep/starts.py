"""The starts of a sweep made again, where they are not stored: they follow from the design and the index."""

from __future__ import annotations

from collections.abc import Callable
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from roa.sweep import designs
from roa.sweep.header import Header

Array = NDArray[np.float64]
# (first, count) -> float64 (count, n), state units
Starts = Callable[[int, int], Array]


def starts_of(header: Header) -> Starts:
    """Return what makes the starts of a sweep again, bit for bit."""
    box = tuple((float(low), float(high)) for low, high in header.fingerprint_parts["config.domain"])
    return _starts(header.design, box, header.seed, header.replicates, header.asked)


# A design takes milliseconds to make, and every block of a run is read with the same.
@lru_cache(maxsize=4)
def _starts(name: str, box: tuple[tuple[float, float], ...], seed: int, replicates: int, samples: int) -> Starts:
    design = designs.load(name)
    assert not design.in_rounds  # refused before the sweep
    return design(np.array(box), seed, replicates, samples).points
