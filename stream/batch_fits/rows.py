"""Labelled examples of a log held in memory, as sparse rows over numbered columns."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

__all__ = ["Rows"]

Floats = npt.NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class Rows:
    """m examples over `count` columns, which are distinct within a row.

    `row_ptr` int64[m + 1]; `columns` int32[nnz], 0 to count - 1; `values` float32[nnz]; `labels` int8[m],
    0 or 1; `weights` float64[m] of the examples.
    """

    row_ptr: npt.NDArray[np.int64]
    columns: npt.NDArray[np.int32]
    values: npt.NDArray[np.float32]
    labels: npt.NDArray[np.int8]
    weights: Floats
    count: int

    def __len__(self) -> int:
        return len(self.labels)

    def part(self, first: int, last: int) -> Rows:
        """Examples first to last - 1, over no more columns than the highest that they have asks for.

        Where columns are numbered as they appear, the beginning of a log has none that is empty.
        """
        start, end = int(self.row_ptr[first]), int(self.row_ptr[last])
        columns = self.columns[start:end]
        return Rows(
            self.row_ptr[first : last + 1] - start,
            columns,
            self.values[start:end],
            self.labels[first:last],
            self.weights[first:last],
            int(columns.max(initial=-1)) + 1,
        )

    def squeezed(self) -> tuple[Rows, npt.NDArray[np.int32]]:
        """The same without empty columns, and int32[count] which columns are left."""
        left, columns = np.unique(self.columns, return_inverse=True)
        rows = Rows(self.row_ptr, columns.astype(np.int32), self.values, self.labels, self.weights, len(left))
        return rows, left

    def margins(self, weights: Floats, intercept: float) -> Floats:
        """float64[m] from weights float64[n], n >= count."""
        return intercept + _sums(self._rows(), weights[self.columns] * self.values, len(self))

    def column_sums(self, of_examples: Floats) -> Floats:
        """float64[count]: over all examples, value times the number float64[m] of its example."""
        return _sums(self.columns, of_examples[self._rows()] * self.values, self.count)

    def _rows(self) -> npt.NDArray[np.int64]:
        return np.repeat(np.arange(len(self)), np.diff(self.row_ptr))


def _sums(places: npt.NDArray[Any], amounts: Floats, size: int) -> Floats:
    """float64[size]: the amounts that fall on each place."""
    return np.bincount(places, amounts, size).astype(np.float64, copy=False)
