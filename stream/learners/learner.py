"""A learner of either method: a batch and the slots of its entries in, margins out, rows updated in place."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from stream.batch import Batch
from stream.coordinate import NO_UNDO
from stream.learners import ftrl, truncated_gradient
from stream.learners.layout import LEARNED, REFUSED, SCRATCH, STRENGTH
from stream.settings.models import Learner as LearnerSettings

__all__ = ["Learner"]


@dataclass(frozen=True, slots=True)
class _Method:
    learn: Callable[..., int]
    weights: Callable[..., None]
    intercept: Callable[..., float]


METHODS = {
    "ftrl": _Method(ftrl.ftrl_learn, ftrl.ftrl_weights, ftrl.ftrl_intercept),
    "truncated-gradient": _Method(
        truncated_gradient.truncated_gradient_learn,
        truncated_gradient.truncated_gradient_weights,
        truncated_gradient.truncated_gradient_intercept,
    ),
}


class Learner:
    """One interface for `ftrl` and `truncated-gradient`.

    It owns the accumulated strength, the intercept and the counts; the rows of coordinates belong to the
    table and are passed in: `cells` uint64[4 * slots] and its float64 view `floats`.
    """

    def __init__(self, settings: LearnerSettings) -> None:
        horizon = np.inf if settings.horizon is None else settings.horizon
        self._options = np.array(
            [
                settings.learning_rate,
                settings.damping,
                settings.l1,
                settings.l1_per_example,
                settings.l2,
                horizon,
            ]
        )
        self._method = METHODS[settings.method]
        self._sums = np.zeros(3)
        self._counts = np.zeros(2, np.int64)
        self._margins = np.empty(0)
        self._scratch = np.empty((SCRATCH, 0))
        self._named = np.empty(0, np.int64)

    @property
    def learned(self) -> int:
        """Labelled examples learned so far; the number of the last one."""
        return int(self._counts[LEARNED])

    @property
    def refused(self) -> int:
        """Updates refused because a weight would have stopped being finite."""
        return int(self._counts[REFUSED])

    @property
    def strength(self) -> float:
        """Accumulated strength, in units of the sum of losses; `l1` is not in it."""
        return float(self._sums[STRENGTH])

    @property
    def intercept(self) -> float:
        """The unpenalised constant of the margin."""
        return float(self._method.intercept(self._sums, self._options))

    def predict_then_update(
        self,
        cells: npt.NDArray[np.uint64],
        batch: Batch,
        slots: npt.NDArray[np.int64],
        first: int,
        last: int,
        undo: npt.NDArray[np.uint64] = NO_UNDO,
    ) -> tuple[npt.NDArray[np.float64], npt.NDArray[np.int64]]:
        """Scores examples first to last - 1 of the batch in order, each before it is learned from.

        Returns (margins float64[m], of which first to last - 1 are new; entries int64[k] whose weight
        became non-zero and has no name yet). Both arrays are reused by the next call. Unlabelled
        examples are scored and change nothing. `undo`: an undo log with room for a row for each entry.
        """
        self._make_room(batch)
        events = self._method.learn(
            cells,
            cells.view(np.float64),
            slots,
            batch.row_ptr,
            batch.values,
            batch.labels,
            batch.weights,
            first,
            last,
            self._sums,
            self._counts,
            self._options,
            self._scratch,
            self._margins,
            self._named,
            undo,
        )
        return self._margins, self._named[:events]

    def weights(self, cells: npt.NDArray[np.uint64], begin: int, end: int) -> npt.NDArray[np.float64]:
        """Weights now of the rows in slots begin to end - 1, float64[end - begin]; 0 in an empty slot."""
        out = np.empty(end - begin)
        self._method.weights(cells, cells.view(np.float64), begin, end, self._sums, self._options, out)
        return out

    def state(self) -> dict[str, npt.NDArray[Any]]:
        """Everything needed to go on, the table aside."""
        return {"sums": self._sums.copy(), "counts": self._counts.copy()}

    def restore(self, state: Mapping[str, npt.NDArray[Any]]) -> None:
        """Goes on from what `state` gave."""
        self._sums[:] = state["sums"]
        self._counts[:] = state["counts"]

    def _make_room(self, batch: Batch) -> None:
        if len(self._margins) < len(batch):
            self._margins = np.empty(len(batch))
        longest = int(np.max(np.diff(batch.row_ptr), initial=0))
        if self._scratch.shape[1] < longest:
            self._scratch = np.empty((SCRATCH, longest))
        if len(self._named) < len(batch.addresses):
            self._named = np.empty(len(batch.addresses), np.int64)
