"""Examples in, for each coordinate the two sums that give its gradient at the best constant model out.

FIRST of a row is the sum of weight * value over learned examples, SECOND that over those with label 1. With
all weights zero and the best intercept, the probability is the base rate r everywhere, and the gradient of
the mean loss is (r * FIRST - SECOND) / total weight: its largest size is the strength from which on all
weights are zero.
Source: Koh, Kim, Boyd, JMLR 8 (2007), section 2.1 (lambda_max; from memory).
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from stream.batch import Batch
from stream.coordinate import FIRST, NO_UNDO, SECOND, TOUCH, row_of, touched
from stream.kernel import kernel, prefetch

__all__ = ["GradientSums"]

AHEAD = np.uint64(64)
Floats = npt.NDArray[np.float64]


class GradientSums:
    """In a learner's place: it scores nothing and learns the sums."""

    def __init__(self) -> None:
        self._totals = np.zeros(3)
        self._named = np.empty(0, np.int64)

    @property
    def learned(self) -> int:
        """Labelled examples so far."""
        return int(self._totals[0])

    @property
    def weight(self) -> float:
        """Sum of their weights."""
        return float(self._totals[1])

    @property
    def positive(self) -> float:
        """Sum of the weights of those with label 1."""
        return float(self._totals[2])

    def predict_then_update(
        self,
        cells: npt.NDArray[np.uint64],
        batch: Batch,
        slots: npt.NDArray[np.int64],
        first: int,
        last: int,
        undo: npt.NDArray[np.uint64] = NO_UNDO,
    ) -> tuple[Floats, npt.NDArray[np.int64]]:
        """As `Learner.predict_then_update`; all margins are 0."""
        add_gradients(
            cells,
            cells.view(np.float64),
            slots,
            batch.row_ptr,
            batch.values,
            batch.labels,
            batch.weights,
            first,
            last,
            self._totals,
        )
        return np.zeros(len(batch)), self._named

    def largest(self, cells: npt.NDArray[np.uint64]) -> float:
        """Largest size of a gradient of the mean loss, over all rows of the table; 0 where there is none."""
        if not self.weight > 0:
            return 0.0
        return (
            float(largest_gradient(cells, cells.view(np.float64), self.positive / self.weight)) / self.weight
        )


@kernel
def add_gradients(
    cells: npt.NDArray[np.uint64],
    floats: Floats,
    slots: npt.NDArray[np.int64],
    row_ptr: npt.NDArray[np.int64],
    values: npt.NDArray[np.float32],
    labels: npt.NDArray[np.int8],
    weights: Floats,
    first: int,
    last: int,
    totals: Floats,
) -> None:
    """Adds labelled examples first to last - 1; `totals` float64[3]: examples, weight, weight * label."""
    top = np.uint64(max(row_ptr[last] - 1, 0))
    for example in range(first, last):
        if labels[example] < 0:
            continue
        weight = weights[example]
        positive = weight if labels[example] == 1 else 0.0
        totals[0] += 1.0
        totals[1] += weight
        totals[2] += positive
        number = np.uint64(totals[0])
        for e in range(np.uint64(row_ptr[example]), np.uint64(row_ptr[example + 1])):
            prefetch(floats, row_of(max(slots[min(e + AHEAD, top)], 0)))
            if slots[e] >= 0:
                row = row_of(slots[e])
                floats[row + FIRST] += weight * values[e]
                floats[row + SECOND] += positive * values[e]
                cells[row + TOUCH] = touched(cells[row + TOUCH], number)


@kernel
def largest_gradient(cells: npt.NDArray[np.uint64], floats: Floats, rate: float) -> float:
    """max |rate * FIRST - SECOND| over the rows in use."""
    found = 0.0
    for slot in range(len(cells) // 4):
        row = row_of(slot)
        if cells[row] != np.uint64(0):
            found = max(found, abs(rate * floats[row + FIRST] - floats[row + SECOND]))
    return found
