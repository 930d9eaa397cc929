"""A learner that also keeps averages over the stream: what `Learner` takes and rows of averages in, better
weights for readers out (`stream.learners.averaging`)."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from typing import Any

import numpy as np
import numpy.typing as npt

from stream.batch import Batch
from stream.learners import averaging
from stream.learners.averaging import IN_SUMS, INTERCEPT_CURVE, INTERCEPT_PULL
from stream.learners.learner import Learner
from stream.settings.models import Learner as LearnerSettings

__all__ = ["AveragingLearner"]

LEARN: dict[str, Callable[..., int]] = {
    "ftrl": averaging.ftrl_learn_averaging,
    "truncated-gradient": averaging.truncated_gradient_learn_averaging,
}
Uint64s = npt.NDArray[np.uint64]
Int64s = npt.NDArray[np.int64]
Floats = npt.NDArray[np.float64]


class AveragingLearner(Learner):
    """A `Learner`, to the bit, whose `averages` are kept beside. `settings.averaging` is not None."""

    def __init__(self, settings: LearnerSettings) -> None:
        super().__init__(settings)
        assert settings.averaging is not None
        self._every = np.uint64(settings.averaging)
        self._learn_averaging = LEARN[settings.method]
        self._averages = np.zeros(4)
        self._told = np.empty(0, np.int64)

    @property
    def intercept(self) -> float:
        """The constant that goes with `average_weights`."""
        curve = float(self._averages[INTERCEPT_CURVE])
        return float(self._averages[INTERCEPT_PULL]) / curve if curve > 0 else super().intercept

    def average(
        self,
        cells: Uint64s,
        batch: Batch,
        slots: Int64s,
        first: int,
        last: int,
        undo: Uint64s,
        rows: Uint64s,
        places: Int64s,
        rows_undo: Uint64s,
    ) -> tuple[Floats, Int64s]:
        """`predict_then_update`, and the averages brought up to date.

        `rows` uint64[4 * slots]: averages, that of entry e in slot places[e] (>= 0 where the example has a
        label and the entry a slot); `rows_undo`: an undo log for them. An entry may be told twice.
        """
        self._make_room(batch)
        if len(self._told) < 2 * len(batch.addresses):
            self._told = np.empty(2 * len(batch.addresses), np.int64)
        events = self._learn_averaging(
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
            self._told,
            undo,
            rows,
            rows.view(np.float64),
            places,
            self._averages,
            self._every,
            rows_undo,
        )
        return self._margins, self._told[:events]

    def average_weights(self, rows: Uint64s, slots: Int64s) -> Floats:
        """Weights now by the rows of averages in the given slots; 0 where a slot is -1."""
        out = np.empty(len(slots))
        averaging.average_weights(
            rows,
            rows.view(np.float64),
            slots,
            self._sums,
            self._options,
            self._averages,
            np.uint64(self.learned),
            self._every,
            out,
        )
        return out

    def fade(self, kept: float) -> None:
        """The small sums count `kept` as much from now on; whoever holds the rows sees to them."""
        self._averages[IN_SUMS] *= kept
        self._averages[[INTERCEPT_PULL, INTERCEPT_CURVE]] *= kept * kept

    def state(self) -> dict[str, npt.NDArray[Any]]:
        """Everything needed to go on, rows aside."""
        return {**super().state(), "averages": self._averages.copy()}

    def restore(self, state: Mapping[str, npt.NDArray[Any]]) -> None:
        """Goes on from what `state` gave."""
        super().restore(state)
        self._averages[:] = state["averages"]
