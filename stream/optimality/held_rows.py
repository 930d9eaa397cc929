"""Batches in; some of their labelled examples out, held in memory as rows, then as columns."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from stream.batch import Batch
from stream.optimality.solving import Columns

__all__ = ["EvenSample", "HeldRows"]

GROUP = 64


@dataclass(slots=True)
class _Part:
    """Rows of one batch: entry by entry `addresses` uint64, `values` float32; row by row `lengths` int64,
    `labels` int8, `weights` float64, and `numbers` int64, the labelled example that it is in the log."""

    addresses: npt.NDArray[np.uint64]
    values: npt.NDArray[np.float32]
    lengths: npt.NDArray[np.int64]
    labels: npt.NDArray[np.int8]
    weights: npt.NDArray[np.float64]
    numbers: npt.NDArray[np.int64]

    def only(self, rows: npt.NDArray[np.bool_]) -> _Part:
        """Copies of the rows chosen."""
        entries = np.repeat(rows, self.lengths)
        return _Part(
            self.addresses[entries],
            self.values[entries],
            self.lengths[rows],
            self.labels[rows],
            self.weights[rows],
            self.numbers[rows],
        )


class HeldRows:
    """Labelled examples chosen from a log, in its order."""

    def __init__(self) -> None:
        self._parts: list[_Part] = []
        self.rows = self.entries = 0

    def add(self, batch: Batch, chosen: npt.NDArray[np.bool_], numbers: npt.NDArray[np.int64]) -> None:
        """Takes the chosen examples (bool[m]) of the batch; `numbers` int64[m]: which of the log's labelled
        examples these are."""
        if chosen.any():
            whole = _Part(
                batch.addresses, batch.values, np.diff(batch.row_ptr), batch.labels, batch.weights, numbers
            )
            self._parts.append(whole.only(chosen))
            self._count()

    def thin(self, stride: int) -> None:
        """Lets go of all but every `stride`-th group of 64 labelled examples of the log."""
        self._parts = [part.only(part.numbers // GROUP % stride == 0) for part in self._parts]
        self._count()

    def _count(self) -> None:
        self.rows = sum(len(part.lengths) for part in self._parts)
        self.entries = sum(len(part.addresses) for part in self._parts)

    @property
    def numbers(self) -> npt.NDArray[np.int64]:
        """int64[r]: which of the log's labelled examples they are."""
        return np.concatenate([np.empty(0, np.int64), *(part.numbers for part in self._parts)])

    def columns(self) -> tuple[npt.NDArray[np.uint64], Columns]:
        """Addresses of the columns, uint64[k] ascending, and the rows as columns."""
        parts = self._parts
        addresses, column = np.unique(np.concatenate([p.addresses for p in parts]), return_inverse=True)
        lengths = np.concatenate([p.lengths for p in parts])
        columns = Columns.of(
            column.astype(np.int64),
            np.concatenate([np.zeros(1, np.int64), np.cumsum(lengths)]),
            np.concatenate([p.values for p in parts]),
            np.concatenate([p.labels for p in parts]),
            np.concatenate([p.weights for p in parts]),
            len(addresses),
        )
        return addresses, columns


class EvenSample:
    """Rows spread evenly over a log whose length nobody knows: every 2^k-th group of 64, k as it must be."""

    def __init__(self, most_rows: int, most_entries: int) -> None:
        self._most_rows, self._most_entries = most_rows, most_entries
        self._stride = 1
        self.held = HeldRows()

    def add(self, batch: Batch, numbers: npt.NDArray[np.int64]) -> None:
        """`numbers` int64[m]: as in HeldRows.add, -1 without a label."""
        self.held.add(batch, (numbers >= 0) & (numbers // GROUP % self._stride == 0), numbers)
        while self._stride < 1 << 40 and self._too_many():
            self._stride *= 2
            self.held.thin(self._stride)

    def _too_many(self) -> bool:
        return self.held.entries > self._most_entries or self.held.rows > max(self._most_rows, GROUP)
