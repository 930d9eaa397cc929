"""A seed and a place in the log in, raw 64-bit draws and uniform numbers out.

Only PCG64's raw output and SeedSequence are used, which numpy promises to keep; the distributions of
numpy's Generator may change between its versions.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

__all__ = ["bits", "raw_stream", "uniform"]

Raw = npt.NDArray[np.uint64]


def raw_stream(seed: int, *place: int) -> np.random.PCG64:
    """The random stream of one place (a block, the planting, ...) of the log with this seed."""
    return np.random.PCG64(np.random.SeedSequence(seed, spawn_key=place))


def uniform(raw: Raw) -> npt.NDArray[np.float64]:
    """The upper 53 bits as numbers in [0, 1)."""
    return (raw >> np.uint64(11)).astype(np.float64) * 2.0**-53


def bits(raw: Raw, low: int, count: int) -> npt.NDArray[np.int64]:
    """`count` bits from bit `low` upwards, as whole numbers."""
    return ((raw >> np.uint64(low)) & np.uint64((1 << count) - 1)).astype(np.int64)
