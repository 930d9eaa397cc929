"""Blocks of examples drawn in memory: rows that stay, outcomes drawn anew each time from a counter."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from stream.batch import Batch
from stream.kernel import kernel, small

__all__ = ["BLOCK", "block_of", "draw_labels"]

BLOCK = 1_000_003
"""A prime, so that no example stands at the same place of every period of a power of two."""


@small
def _uniform(number: np.uint64) -> float:
    """In [0, 1): the `number`-th output of SplitMix64 (Steele, Lea, Flood, OOPSLA 2014), 53 bits of it."""
    word = number * np.uint64(0x9E3779B97F4A7C15)
    word = (word ^ (word >> np.uint64(30))) * np.uint64(0xBF58476D1CE4E5B9)
    word = (word ^ (word >> np.uint64(27))) * np.uint64(0x94D049BB133111EB)
    return np.float64((word ^ (word >> np.uint64(31))) >> np.uint64(11)) * 2.0**-53


@kernel
def draw_labels(probabilities: npt.NDArray[np.float64], first: int, labels: npt.NDArray[np.int8]) -> None:
    """labels[i] = 1 with probabilities[i], by draw number first + i (> 0)."""
    for i in range(len(labels)):
        labels[i] = _uniform(np.uint64(first + i)) < probabilities[i]


def block_of(shares: npt.NDArray[np.float64], seed: int, size: int = BLOCK) -> Batch:
    """`size` examples without labels; coordinate c is in each with probability shares[c]."""
    holds = np.random.default_rng(seed).random((size, len(shares))) < shares
    tokens = np.flatnonzero(holds.ravel())
    row_ptr = np.zeros(size + 1, np.int64)
    np.cumsum(holds.sum(axis=1), out=row_ptr[1:])
    entries = len(tokens)
    return Batch(
        row_ptr,
        (tokens % len(shares) + 1).astype(np.uint64),
        np.ones(entries, np.float32),
        np.zeros(size, np.int8),
        np.ones(size),
        np.zeros(0, np.uint8),
        np.zeros(entries, np.int64),
        np.zeros(entries, np.int32),
    )
