"""Delays of positives in, a histogram out that says how many of them each waiting time would lose."""

from __future__ import annotations

from bisect import bisect_left

import numpy as np
import numpy.typing as npt

__all__ = ["EDGES_MS", "Delays"]

PER_DECADE = 10
EDGES_MS = tuple(round(10 ** (at / PER_DECADE)) for at in range(3 * PER_DECADE, 11 * PER_DECADE + 1))
"""Upper edges of the bins, even on the logarithm: 1 s to 10^8 s (three years), ten to a factor of ten."""


class Delays:
    """How long after their message positives came. `counts`: int64[len(EDGES_MS) + 1].

    Bin i holds delays above EDGES_MS[i - 1], at most EDGES_MS[i]; the last one longer delays.
    """

    def __init__(self) -> None:
        self.counts: npt.NDArray[np.int64] = np.zeros(len(EDGES_MS) + 1, np.int64)

    def add(self, delay_ms: int) -> None:
        """Counts one; an outcome before its message has no delay."""
        self.counts[bisect_left(EDGES_MS, delay_ms)] += 1

    def lost(self) -> list[tuple[int, float]]:
        """Each waiting time (ms) with the share of positives that came later; none without a positive."""
        total = int(self.counts.sum())
        if not total:
            return []
        later = total - np.cumsum(self.counts)
        return [(edge, int(left) / total) for edge, left in zip(EDGES_MS, later[:-1], strict=True)]
