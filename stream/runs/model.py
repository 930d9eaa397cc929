"""Batches in, margins out: table, learner and names taken together, in the order that the rules demand."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace
from functools import cache
from typing import Any, TypeVar

import numpy as np
import numpy.typing as npt

from stream.arrays_file import Rows
from stream.background import View
from stream.coordinate import tally_of
from stream.learners import AveragingLearner, Learner
from stream.runs.averaging import Averaging
from stream.runs.sifting import Sifting
from stream.runs.table_model import TableModel
from stream.settings import Settings
from stream.tables import NameLedger, names_state
from stream.weights import Weights

__all__ = ["Model"]

Arrays = dict[str, npt.NDArray[Any]]
T = TypeVar("T")


def _part(name: str, values: Mapping[str, T]) -> dict[str, T]:
    return {f"{name}.{key}": value for key, value in values.items()}


def _learner_of(settings: Settings) -> Learner:
    averaging = settings.learner.averaging is not None
    return AveragingLearner(settings.learner) if averaging else Learner(settings.learner)


class Model(TableModel):
    """One learner over its table."""

    def __init__(self, settings: Settings) -> None:
        self._names = NameLedger()
        self._learner = _learner_of(settings)
        self._averaging = Averaging(self._learner) if isinstance(self._learner, AveragingLearner) else None
        super().__init__(settings, self._averaging or self._learner, self._names)

    @property
    def intercept(self) -> float:
        """The unpenalised constant of the margin, as it goes with `weights`."""
        return self._learner.intercept

    @property
    def strength(self) -> float:
        """Accumulated strength, in units of the sum of losses."""
        return self._learner.strength

    @property
    def refused_updates(self) -> int:
        """Updates refused since a weight would have stopped being finite."""
        return self._learner.refused

    def memory(self) -> dict[str, int]:
        """As `TableModel`'s; averages count as table."""
        found = super().memory()
        if self._averaging is not None:
            found["table_bytes"] += self._averaging.table_bytes
        return found

    def next_pass(self) -> None:
        """The log is about to be read again."""
        if self._averaging is not None:
            self._averaging.next_pass()

    def nnz(self) -> int:
        """Weights that are not exactly zero now."""
        return sum(int(np.count_nonzero(self._weights_at(*chunk))) for chunk in self._table.chunks())

    def weights(self) -> Weights:
        """The non-zero weights now, with names and message counts. One too small for float32 is left out.

        They are what readers get: averages, where `learner.averaging` asks for them.
        """
        found, values = [np.empty(0, np.int64)], [np.empty(0, np.float32)]
        for begin, end in self._table.chunks():
            weights = self._weights_at(begin, end).astype(np.float32)
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
        averages = {} if self._averaging is None else self._averaging.state()
        return (
            _part("table", self._table.state())
            | averages
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
        pieces = (_part("table", piece) for piece in saving.pieces())
        rows, close = Rows(saving.length, _part("table", saving.dtypes), pieces), saving.close
        if self._averaging is not None:
            rows, close = self._averaging.saved_with(rows, close)
        sifting = self._sifting() if weights else None
        if sifting is not None:
            rows = replace(rows, pieces=sifting.passing(rows.pieces))
        return View(
            rows,
            lambda: small | _part("names", names()),
            close,
            None if sifting is None else lambda: sifting.weights(names()),
        )

    def _sifting(self) -> Sifting:
        learner = _learner_of(self._settings)
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
        if self._averaging is not None:
            self._averaging.restore(arrays)
        self._learner.restore(part("learner"))
        self._names.restore(part("names"))
        self._room_sought_from, self._table.refused = (int(count) for count in arrays["model.counts"])

    def _weights_at(self, begin: int, end: int) -> npt.NDArray[np.float64]:
        """What readers get of slots begin to end - 1; 0 in an empty one."""
        if self._averaging is None:
            return self._learner.weights(self._table.cells, begin, end)
        out = np.zeros(end - begin)
        used = np.flatnonzero(self._table.in_use(begin, end))
        out[used] = self._averaging.weights(self._table.addresses_at(begin + used))
        return out

    def _is_zero(self, begin: int, end: int) -> npt.NDArray[np.bool_]:
        """Whether the weight in each slot of begin to end - 1 is exactly zero, and what readers get too."""
        zero = np.asarray(self._learner.weights(self._table.cells, begin, end) == 0.0)
        return zero if self._averaging is None else zero & (self._weights_at(begin, end) == 0.0)

    def _forget(self, slots: npt.NDArray[np.int64]) -> None:
        if self._averaging is not None:
            self._averaging.forget(self._table.addresses_at(slots))
        super()._forget(slots)

    def _drop_names_of_zeros(self) -> None:
        addresses = self._names.addresses()
        slots = self._table.slots_of(addresses)
        order = np.argsort(slots)
        zero = slots < 0
        for begin, end in self._table.chunks():
            first, last = np.searchsorted(slots, (begin, end), sorter=order)
            here = order[first:last]
            zero[here] = self._is_zero(begin, end)[slots[here] - begin]
        self._names.drop(addresses[zero])
        self._table.clear_named(slots[zero & (slots >= 0)])
        if self._averaging is not None:
            self._averaging.clear_named(addresses[zero])
