"""Batches in, margins out: table, names and a learner of any kind, in the order that the rules demand."""

from __future__ import annotations

from abc import ABC, abstractmethod
from typing import Protocol

import numpy as np
import numpy.typing as npt

from stream.batch import Batch
from stream.coordinate import NO_UNDO, example_of
from stream.settings import Settings
from stream.tables import Table

__all__ = ["KEPT_WHEN_CROWDED", "NAMES_SWEPT_EVERY", "TableModel"]

NAMES_SWEPT_EVERY = 1 << 20
"""Learned examples between sweeps that drop the names of zero weights."""
KEPT_WHEN_CROWDED = 7 / 8
"""Share of `max_live` that is left, where possible, when room must be made."""

Floats = npt.NDArray[np.float64]
Int64s = npt.NDArray[np.int64]


class _Learns(Protocol):
    """What a learner is asked for here; see `Learner.predict_then_update`."""

    @property
    def learned(self) -> int: ...

    def predict_then_update(
        self,
        cells: npt.NDArray[np.uint64],
        batch: Batch,
        slots: Int64s,
        first: int,
        last: int,
        undo: npt.NDArray[np.uint64] = NO_UNDO,
    ) -> tuple[Floats, Int64s]: ...


class _Names(Protocol):
    """Where names are taken down; see `NameLedger`."""

    @property
    def name_bytes(self) -> int: ...

    def record(self, batch: Batch, entries: Int64s) -> None: ...


class TableModel(ABC):
    """A learner over its table. What it does depends on examples and their numbers, never on batch cuts."""

    def __init__(self, settings: Settings, learner: _Learns, names: _Names) -> None:
        self._settings = settings
        self._table = Table(settings.state)
        self._learns, self._records = learner, names
        self._room_sought_from = 0  # learned examples before which no room is made again
        state = settings.state
        self._periods = [NAMES_SWEPT_EVERY]
        if state.admit_after > 1:
            self._periods.append(state.admission_halved_every)
        if state.idle_after is not None:
            self._periods.append(self._idle_period(state.idle_after))

    @property
    def learned(self) -> int:
        """Labelled examples learned so far."""
        return self._learns.learned

    @property
    def live(self) -> int:
        """Coordinates with state."""
        return self._table.live

    @property
    def refused_coordinates(self) -> int:
        """New coordinates refused since `max_live` was reached and nothing could be removed."""
        return self._table.refused

    def memory(self) -> dict[str, int]:
        """Bytes of the table, the admission filter and the names."""
        return {
            "table_bytes": self._table.table_bytes,
            "admission_bytes": self._table.filter_bytes,
            "name_bytes": self._records.name_bytes,
        }

    def predict_then_update(self, batch: Batch) -> Floats:
        """Scores each example of the batch, then learns it if it has a label, one after the other.

        Returns margins float64[m, ...], each from the weights before its example; the array is reused.
        """
        margins = np.empty(0)
        first = 0
        while first < len(batch):
            before = self.learned
            slots, stopped = self._table.admit(batch, first, min(len(batch), first + self._until_sweep()))
            if stopped == first:
                slots, stopped = self._admit_crowded(batch, first)
            with self._table.undo(int(batch.row_ptr[stopped] - batch.row_ptr[first])) as undo:
                margins, named = self._learns.predict_then_update(
                    self._table.cells, batch, slots, first, stopped, undo
                )
            self._records.record(batch, named)
            if self.learned > before:
                self._sweep_if_due()
            first = stopped
        return margins[: len(batch)]

    @abstractmethod
    def nnz(self) -> int:
        """Weights that are not exactly zero now."""

    @abstractmethod
    def _is_zero(self, begin: int, end: int) -> npt.NDArray[np.bool_]:
        """Whether the weight in each slot of begin to end - 1 is exactly zero."""

    def _until_sweep(self) -> int:
        """Learned examples until the next sweep: what is admitted at once may not reach past it."""
        return min(period - self.learned % period for period in self._periods)

    @staticmethod
    def _idle_period(idle_after: int) -> int:
        return max(1, min(idle_after // 4, NAMES_SWEPT_EVERY))

    def _admit_crowded(self, batch: Batch, example: int) -> tuple[Int64s, int]:
        """Slots for an example that would take the table over `max_live`; room is made first where it can."""
        max_live = self._settings.state.max_live
        assert max_live is not None
        if self.learned >= self._room_sought_from:
            self._room_sought_from = self.learned + max(1, max_live // 64)
            self._remove_oldest(self.live - int(max_live * KEPT_WHEN_CROWDED))
            slots, stopped = self._table.admit(batch, example, example + 1)
            if stopped > example:
                return slots, stopped
        return self._table.admit_crowded(batch, example)

    def _forget(self, slots: npt.NDArray[np.int64]) -> None:
        self._table.forget(slots)

    def _zero_weight_slots(self, idle_after: int = 0) -> Int64s:
        """Of rows that were last touched `idle_after` examples ago, or earlier."""
        found = [np.empty(0, np.int64)]
        for begin, end in self._table.chunks():
            zero = self._is_zero(begin, end)
            slots = begin + np.flatnonzero(zero & self._table.in_use(begin, end))
            age = self.learned - example_of(self._table.touches(slots)).astype(np.int64)
            found.append(slots[age >= idle_after])
        return np.concatenate(found)

    def _remove_oldest(self, count: int) -> None:
        """Removes up to `count` zero-weight coordinates, oldest touch first, ties by address."""
        slots = self._zero_weight_slots()
        order = np.lexsort((self._table.addresses_at(slots), example_of(self._table.touches(slots))))
        self._forget(slots[order[: max(count, 0)]])

    def _sweep_if_due(self) -> None:
        state = self._settings.state
        if state.admit_after > 1 and self.learned % state.admission_halved_every == 0:
            self._table.age_filter()
        if state.idle_after is not None and self.learned % self._idle_period(state.idle_after) == 0:
            self._forget(self._zero_weight_slots(state.idle_after))
        if self.learned % NAMES_SWEPT_EVERY == 0:
            self._drop_names_of_zeros()

    def _drop_names_of_zeros(self) -> None:
        """Forgets the names of zero weights; called after every NAMES_SWEPT_EVERY learned examples."""
        return
