"""A learner's table and what is learned in; averages of each of its coordinates, and weights by them, out.

The averages stand in a table of their own, which has the coordinates of the learner's table, no more and no
less: who does not ask for averages has no such table, and nothing of this runs.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping
from typing import Any

import numpy as np
import numpy.typing as npt

from stream.arrays_file import Arrays, Rows
from stream.batch import Batch
from stream.coordinate import CELLS, FIRST, NO_UNDO, SECOND, TOUCH
from stream.learners import AveragingLearner
from stream.settings.models import State
from stream.tables import Table

__all__ = ["Averaging", "average_weights_of"]

PASS_KEPT = 1 / 8
"""What passes over the log before count, beside the one under way: weights were further off then."""

COLUMNS = ("first", "second")
Int64s = npt.NDArray[np.int64]
Floats = npt.NDArray[np.float64]


class Averaging:
    """In a learner's place: it learns as `learner` does, and keeps the averages."""

    def __init__(self, learner: AveragingLearner) -> None:
        self._learner = learner
        self._table = Table(State())
        self._places = np.empty(0, np.int64)

    @property
    def learned(self) -> int:
        """Labelled examples learned so far."""
        return self._learner.learned

    @property
    def table_bytes(self) -> int:
        """Memory of the averages."""
        return self._table.table_bytes

    def predict_then_update(
        self,
        cells: npt.NDArray[np.uint64],
        batch: Batch,
        slots: Int64s,
        first: int,
        last: int,
        undo: npt.NDArray[np.uint64] = NO_UNDO,
    ) -> tuple[Floats, Int64s]:
        """As `Learner.predict_then_update`; an entry may be told twice."""
        begin, end = int(batch.row_ptr[first]), int(batch.row_ptr[last])
        if len(self._places) < end:
            self._places = np.empty(2 * end, np.int64)
        labelled = np.repeat(batch.labels[first:last] >= 0, np.diff(batch.row_ptr[first : last + 1]))
        self._places[begin:end] = self._table.hold(
            batch.addresses[begin:end], labelled & (slots[begin:end] >= 0)
        )
        with self._table.undo(end - begin) as rows_undo:
            return self._learner.average(
                cells, batch, slots, first, last, undo, self._table.cells, self._places, rows_undo
            )

    def weights(self, addresses: npt.NDArray[np.uint64]) -> Floats:
        """Weights now by the averages of the given coordinates, float64[k]."""
        return self._learner.average_weights(self._table.cells, self._table.slots_of(addresses))

    def forget(self, addresses: npt.NDArray[np.uint64]) -> None:
        """Takes coordinates out, as the learner's table does."""
        self._table.forget(self._table.slots_of(addresses))

    def clear_named(self, addresses: npt.NDArray[np.uint64]) -> None:
        """The next touch of these coordinates tells their names again."""
        slots = self._table.slots_of(addresses)
        self._table.clear_named(slots[slots >= 0])

    def next_pass(self) -> None:
        """The log is read again: what has been added up counts less beside what is to come."""
        self._learner.fade(PASS_KEPT)
        for begin, end in self._table.chunks():
            slots = CELLS * (begin + np.flatnonzero(self._table.in_use(begin, end)))
            self._table.floats[slots + int(FIRST)] *= PASS_KEPT
            self._table.floats[slots + int(SECOND)] *= PASS_KEPT

    def state(self) -> dict[str, npt.NDArray[Any]]:
        """Rows in the order of the learner's table, by name; the small sums are in the learner's state."""
        arrays = self._table.state()
        return {f"averages.{name}": arrays[name] for name in COLUMNS}

    def restore(self, arrays: Mapping[str, npt.NDArray[Any]]) -> None:
        """Goes on from a model's state."""
        rows = {name: arrays[f"averages.{name}"] for name in COLUMNS}
        self._table.load({**rows, "addresses": arrays["table.addresses"], "touch": arrays["table.touch"]})

    def saved_with(self, rows: Rows, close: Callable[[], None]) -> tuple[Rows, Callable[[], None]]:
        """The learner's rows of this moment and the averages beside them; `close` for both.

        Both are cut into the same pieces, as both have the same coordinates.
        """
        saving = self._table.begin_saving(self.learned)

        def pieces() -> Iterator[Arrays]:
            for one, own in zip(rows.pieces, saving.pieces(), strict=True):
                yield {**one, **{f"averages.{name}": own[name] for name in COLUMNS}}

        def close_both() -> None:
            close()
            saving.close()

        dtypes = {f"averages.{name}": saving.dtypes[name] for name in COLUMNS}
        return Rows(rows.length, {**rows.dtypes, **dtypes}, pieces()), close_both


def average_weights_of(learner: AveragingLearner, rows: Arrays) -> Floats:
    """Weights by rows of a model's state, float64[k]."""
    touch = rows["table.touch"]
    cells = np.empty((len(touch), CELLS), np.uint64)
    cells[:, int(FIRST)] = rows["averages.first"].view(np.uint64)
    cells[:, int(SECOND)] = rows["averages.second"].view(np.uint64)
    cells[:, int(TOUCH)] = touch
    return learner.average_weights(cells.reshape(-1), np.arange(len(touch)))
