"""Scrambled Sobol' points in independent replicates.

Index i is point i // R of replicate i mod R, so that it means the same start at any number of samples, and the
spread between the R replicates measures the error of a share.

Source: Sobol' 1967; scrambling by a random linear map and a digital shift, Matoušek 1998; both by `scipy.stats.qmc`.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.stats import qmc

Array = NDArray[np.float64]
Bits = NDArray[np.uint64]

# Binary digits of a coordinate: as many as a float64 holds exactly, so that points and digits are the same thing.
DIGITS = 52
# A replicate has 2**40 points: with 16 replicates more than any sweep can run.
INDEX_BITS = 40
# Points of a replicate that differ in the low bits of their index alone; 1024 of each of 16 replicates is one block.
TABLE_BITS = 10
# First number of the spawn key: keeps these streams apart from every other use of the same seed.
STREAM = 0


class Sobol:
    """Scrambled Sobol' points in the box, reached at any index in the same short time."""

    in_rounds = False
    extendable = True
    interval = "spread between independent replicates"

    def __init__(self, box: Array, seed: int, replicates: int, samples: int) -> None:
        self.samples = samples
        self.replicates = replicates
        self.parts: dict[str, Any] = {"replicates": replicates}
        self._low, self._high = box.T
        n = len(box)
        origins = np.empty((replicates, n), np.uint64)
        steps = np.empty((INDEX_BITS, replicates, n), np.uint64)
        for r in range(replicates):
            stream = np.random.SeedSequence(entropy=seed, spawn_key=(STREAM, r))
            origins[r], steps[:, r] = _digits(n, np.random.default_rng(stream))
        table = origins[np.newaxis]
        for step in steps[:TABLE_BITS]:
            table = np.concatenate([table, table ^ step])
        self._table = table  # (2**TABLE_BITS, replicates, n): the first points, in the order of the indices
        self._steps = steps[TABLE_BITS:]

    def points(self, first: int, count: int) -> Array:
        """Return starts first, …, first + count - 1, float64 (count, n), state units."""
        digits = np.empty((count, len(self._low)), np.uint64)
        length = self._table.shape[0] * self.replicates
        row = 0
        while row < count:
            stretch, skip = divmod(first + row, length)
            taken = min(count - row, length - skip)
            shifted = self._table ^ self._shift(stretch)
            digits[row : row + taken] = shifted.reshape(length, -1)[skip : skip + taken]
            row += taken
        points: Array = self._low + digits * 2.0**-DIGITS * (self._high - self._low)
        # The sum may round to a neighbour of the upper face.
        np.minimum(points, self._high, out=points)
        return points

    def _shift(self, stretch: int) -> Bits:
        """Digits by which all points of a stretch differ from the table, (replicates, n)."""
        shift: Bits = np.zeros_like(self._table[0])
        for bit in range(stretch.bit_length()):
            if stretch >> bit & 1:
                shift ^= self._steps[bit]
        return shift


def _digits(n: int, rng: np.random.Generator) -> tuple[Bits, Bits]:
    """Return the digits of point 0, (n,), and by bit k of an index what the bit changes in them, (INDEX_BITS, n).

    The digits of point i are those of point 0 plus, modulo 2, one direction number for each bit of the Gray code of
    i (Antonov & Saleev 1979). Point by point, scipy takes 70 ns, half of what a quick loop's trajectory takes, and its
    `fast_forward` fails with more than 32 digits. But the direction numbers can be had one by one, since scipy's
    engine picks the next one by its count of points: told that 2**k were drawn, it adds number k.
    """
    engine = qmc.Sobol(n, scramble=True, bits=DIGITS, rng=rng)
    drawn = np.empty((INDEX_BITS + 1, n))
    drawn[0] = engine.random(1)[0]
    for k in range(INDEX_BITS):
        engine.num_generated = 2**k
        drawn[k + 1] = engine.random(1)[0]
    digits = (drawn * 2.0**DIGITS).astype(np.uint64)
    directions = digits[1:] ^ digits[:-1]
    # Bit k of an index shows in bits k and k - 1 of its Gray code i ^ (i >> 1).
    steps = directions.copy()
    steps[1:] ^= directions[:-1]
    return digits[0], steps
