"""Batches in, margins out: table, learner and names taken together, in the order that the rules demand."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from functools import cache
from typing import Any, TypeVar

import numpy as np
import numpy.typing as npt

from stream.arrays_file import Arrays as ArraysByName
from stream.arrays_file import Rows
from stream.background import View
from stream.batch import Batch
from stream.coordinate import example_of, tally_of
from stream.learners import Learner
from stream.runs.sifting import Sifting
from stream.settings import Settings
from stream.tables import NameLedger, Table, names_state
from stream.weights import Weights

__all__ = ["Model"]

NAMES_SWEPT_EVERY = 1 << 20
"""Learned examples between sweeps that drop the names of zero weights."""
KEPT_WHEN_CROWDED = 7 / 8
"""Share of `max_live` that is left, where possible, when room must be made."""

Arrays = dict[str, npt.NDArray[Any]]
T = TypeVar("T")


def _part(name: str, values: Mapping[str, T]) -> dict[str, T]:
    return {f"{name}.{key}": value for key, value in values.items()}


class Model:
    """A learner over its table. What it does depends on examples and their numbers, never on batch cuts."""

    def __init__(self, settings: Settings) -> None:
        self._settings = settings
        self._table = Table(settings.state)
        self._learner = Learner(settings.learner)
        self._names = NameLedger()
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
        return self._learner.learned

    @property
    def live(self) -> int:
        """Coordinates with state."""
        return self._table.live

    @property
    def intercept(self) -> float:
        """The unpenalised constant of the margin."""
        return self._learner.intercept

    @property
    def strength(self) -> float:
        """Accumulated strength, in units of the sum of losses."""
        return self._learner.strength

    @property
    def refused_updates(self) -> int:
        """Updates refused since a weight would have stopped being finite."""
        return self._learner.refused

    @property
    def refused_coordinates(self) -> int:
        """New coordinates refused since `max_live` was reached and nothing could be removed."""
        return self._table.refused

    def memory(self) -> dict[str, int]:
        """Bytes of the table, the admission filter and the names."""
        return {
            "table_bytes": self._table.table_bytes,
            "admission_bytes": self._table.filter_bytes,
            "name_bytes": self._names.name_bytes,
        }

    def predict_then_update(self, batch: Batch) -> npt.NDArray[np.float64]:
        """Scores each example of the batch, then learns it if it has a label, one after the other.

        Returns margins float64[m], each from the weights before its example; the array is reused.
        """
        margins = np.empty(0)
        first = 0
        while first < len(batch):
            before = self.learned
            slots, stopped = self._table.admit(batch, first, min(len(batch), first + self._until_sweep()))
            if stopped == first:
                slots, stopped = self._admit_crowded(batch, first)
            with self._table.undo(int(batch.row_ptr[stopped] - batch.row_ptr[first])) as undo:
                margins, named = self._learner.predict_then_update(
                    self._table.cells, batch, slots, first, stopped, undo
                )
            self._names.record(batch, named)
            if self.learned > before:
                self._sweep_if_due()
            first = stopped
        return margins[: len(batch)]

    def nnz(self) -> int:
        """Weights that are not exactly zero now."""
        return sum(
            int(np.count_nonzero(self._learner.weights(self._table.cells, begin, end)))
            for begin, end in self._table.chunks()
        )

    def weights(self) -> Weights:
        """The non-zero weights now, with names and message counts. One too small for float32 is left out."""
        found, values = [np.empty(0, np.int64)], [np.empty(0, np.float32)]
        for begin, end in self._table.chunks():
            weights = self._learner.weights(self._table.cells, begin, end).astype(np.float32)
            slots = np.flatnonzero(weights)
            found.append(begin + slots)
            values.append(weights[slots])
        slots = np.concatenate(found)
        addresses = self._table.addresses_at(slots)
        order = np.argsort(addresses)
        addresses = addresses[order]
        return Weights(
            addresses,
            np.concatenate(values)[order],
            tuple(self._names[address] for address in addresses.tolist()),
            tally_of(self._table.touches(slots[order])),
            self.intercept,
            self.learned,
            self._settings.fingerprint(),
        )

    def state(self) -> Arrays:
        """Everything needed to go on, by name; equal for equal streams."""
        return (
            _part("table", self._table.state())
            | self._small_state()
            | _part("names", names_state(self._names.copied()))
        )

    def begin_saving(self, weights: bool = False) -> View:
        """The state as it is now, for another thread to write while this one goes on learning.

        Its `close` must be called before the next one. Learning waits for a copy of eight bytes a coordinate,
        the admission filter and the names. `weights`: whether the view gives the weights too.
        """
        small = _part("table", self._table.admission()) | self._small_state()
        copied = self._names.copied()
        names = cache(lambda: names_state(copied))
        saving = self._table.begin_saving(self.learned)
        pieces: Iterator[ArraysByName] = saving.pieces()
        sifting = self._sifting() if weights else None
        if sifting is not None:
            pieces = sifting.passing(pieces)
        rows = Rows(saving.length, _part("table", saving.dtypes), (_part("table", piece) for piece in pieces))
        return View(
            rows,
            lambda: small | _part("names", names()),
            saving.close,
            None if sifting is None else lambda: sifting.weights(names()),
        )

    def _sifting(self) -> Sifting:
        learner = Learner(self._settings.learner)
        learner.restore(self._learner.state())
        return Sifting(learner, self._settings.fingerprint())

    def _small_state(self) -> Arrays:
        counts = np.array([self._room_sought_from, self._table.refused], np.int64)
        return {**_part("learner", self._learner.state()), "model.counts": counts}

    def restore(self, arrays: Mapping[str, npt.NDArray[Any]]) -> None:
        """Goes on from what `state` gave; meant for a fresh object."""

        def part(name: str) -> Arrays:
            return {
                key.removeprefix(f"{name}."): array
                for key, array in arrays.items()
                if key.startswith(f"{name}.")
            }

        self._table.load(part("table"))
        self._learner.restore(part("learner"))
        self._names.restore(part("names"))
        self._room_sought_from, self._table.refused = (int(count) for count in arrays["model.counts"])

    def _until_sweep(self) -> int:
        """Learned examples until the next sweep: what is admitted at once may not reach past it."""
        return min(period - self.learned % period for period in self._periods)

    @staticmethod
    def _idle_period(idle_after: int) -> int:
        return max(1, min(idle_after // 4, NAMES_SWEPT_EVERY))

    def _admit_crowded(self, batch: Batch, example: int) -> tuple[npt.NDArray[np.int64], int]:
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

    def _zero_weight_slots(self, idle_after: int = 0) -> npt.NDArray[np.int64]:
        """Of rows that were last touched `idle_after` examples ago, or earlier."""
        found = [np.empty(0, np.int64)]
        for begin, end in self._table.chunks():
            zero = self._learner.weights(self._table.cells, begin, end) == 0.0
            slots = begin + np.flatnonzero(zero & self._table.in_use(begin, end))
            age = self.learned - example_of(self._table.touches(slots)).astype(np.int64)
            found.append(slots[age >= idle_after])
        return np.concatenate(found)

    def _remove_oldest(self, count: int) -> None:
        """Removes up to `count` zero-weight coordinates, oldest touch first, ties by address."""
        slots = self._zero_weight_slots()
        order = np.lexsort((self._table.addresses_at(slots), example_of(self._table.touches(slots))))
        self._table.forget(slots[order[: max(count, 0)]])

    def _sweep_if_due(self) -> None:
        state = self._settings.state
        if state.admit_after > 1 and self.learned % state.admission_halved_every == 0:
            self._table.age_filter()
        if state.idle_after is not None and self.learned % self._idle_period(state.idle_after) == 0:
            self._table.forget(self._zero_weight_slots(state.idle_after))
        if self.learned % NAMES_SWEPT_EVERY == 0:
            self._drop_names_of_zeros()

    def _drop_names_of_zeros(self) -> None:
        addresses = self._names.addresses()
        slots = self._table.slots_of(addresses)
        order = np.argsort(slots)
        zero = slots < 0
        for begin, end in self._table.chunks():
            first, last = np.searchsorted(slots, (begin, end), sorter=order)
            weights = self._learner.weights(self._table.cells, begin, end)
            here = order[first:last]
            zero[here] = weights[slots[here] - begin] == 0.0
        self._names.drop(addresses[zero])
        self._table.clear_named(slots[zero & (slots >= 0)])
