"""The row of one coordinate, 32 bytes in one cache line, and its touch word: what table and learners share.

    0  key     (mixed address << 1) | 1; 0 is an empty slot            (tables only)
    1  FIRST   the learner's first float64, seen as its bits
    2  SECOND  the learner's second float64
    3  TOUCH   example number of the last touch << 29 | named << 28 | tally

The table is flat: cell c of the row in slot s is element 4 * s + c, so that the kernels' indices are
a shift and no stride.

`named` tells that the token's name is in the ledger. The tally counts the learned messages that
held the token in 28 bits: exponent e (5 bits) and count m (23 bits) stand for m * 2**e; from 2**23 on
only every 2**e-th example number counts, which keeps the share right to a few parts in ten thousand on
any feed that does not repeat with an even period.

While a checkpoint is written in the background, a learner leaves each row as it was in an undo log before
it changes it for the first time: a flat uint64[4 * (1 + room)] whose row 0 is (limit, rows in use, -, -).
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from stream.kernel import small

__all__ = [
    "CELLS",
    "FIRST",
    "LEAST",
    "NAMED",
    "NO_UNDO",
    "SECOND",
    "TOUCH",
    "TOUCH_SHIFT",
    "example_of",
    "leave",
    "row_of",
    "tally_of",
    "touched",
]

CELLS = 4
FIRST, SECOND, TOUCH = np.uint64(1), np.uint64(2), np.uint64(3)
TOUCH_SHIFT = np.uint64(29)
NAMED = np.uint64(1 << 28)
LEAST = np.uint64(1 << 29)
"""Touch word of example 1, the least of a row that is not all zeros."""
TALLY = np.uint64((1 << 28) - 1)
EXPONENT_SHIFT = np.uint64(23)
FULL = np.uint64(1 << 23)
ONE = np.uint64(1)
NO_UNDO = np.zeros(CELLS, np.uint64)
"""An undo log that asks for nothing."""


@small
def row_of(slot: int | np.int64 | np.uint64) -> np.uint64:
    """Index of cell 0 of the row in `slot` (>= 0)."""
    return np.uint64(slot) << np.uint64(2)


@small
def touched(word: np.uint64, example: np.uint64) -> np.uint64:
    """The touch word after example number `example` (from 1) was learned; NAMED is kept."""
    tally = word & TALLY
    exponent = tally >> EXPONENT_SHIFT
    if example & ((ONE << exponent) - ONE) == np.uint64(0):
        tally += ONE
        if tally & (FULL - ONE) == np.uint64(0):  # m ran over into the exponent: e grew by one, m is 2**22
            tally |= FULL >> ONE
    return (example << TOUCH_SHIFT) | (word & NAMED) | tally


@small
def leave(
    undo: npt.NDArray[np.uint64], used: np.uint64, cells: npt.NDArray[np.uint64], row: np.uint64
) -> np.uint64:
    """Copies the row that begins at cell `row` to the end of an undo log; returns how many rows are there."""
    used += ONE
    for cell in range(np.uint64(CELLS)):
        undo[row_of(used) + cell] = cells[row + cell]
    return used


def example_of(words: npt.NDArray[np.uint64]) -> npt.NDArray[np.uint64]:
    """Example number of the last touch."""
    return words >> TOUCH_SHIFT


def tally_of(words: npt.NDArray[np.uint64]) -> npt.NDArray[np.float64]:
    """Learned messages that held the token."""
    tally = words & TALLY
    count = (tally & (FULL - ONE)).astype(np.float64)
    return np.asarray(np.ldexp(count, (tally >> EXPONENT_SHIFT).astype(np.int32)))
