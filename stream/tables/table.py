"""The table of live coordinates: addresses in, slots of rows out; bounded by admission and removal."""

from __future__ import annotations

import os
import threading
from collections.abc import Iterator
from contextlib import AbstractContextManager, nullcontext

import numpy as np
import numpy.typing as npt

from stream.batch import Batch
from stream.coordinate import CELLS, FIRST, NAMED, NO_UNDO, SECOND, TOUCH
from stream.errors import CannotCreate
from stream.memory import reserve
from stream.settings.models import State
from stream.tables import probing
from stream.tables.saving import Saving

__all__ = ["Table"]

SPARE = 8192
MOST_SLOTS = 1 << 32
SMALL = 1 << 22
"""Slots up to which speed comes before memory: half full, then doubled. Beyond: 23/25, grown by 1/32."""


def _random_secret() -> npt.NDArray[np.uint64]:
    """xor word, three odd multipliers, their inverses modulo 2**63. It never reaches the state."""
    word, *odd = (int.from_bytes(os.urandom(8), "little") >> 1 for _ in range(4))
    odd = [multiplier | 1 for multiplier in odd]
    return np.array([word, *odd, *(pow(multiplier, -1, 1 << 63) for multiplier in odd)], np.uint64)


def _limit(capacity: int) -> int:
    return capacity // 2 if capacity <= SMALL else capacity * 23 // 25


def _next_capacity(capacity: int) -> int:
    return 2 * capacity if capacity < SMALL else capacity + capacity // 32


class Table:
    """Open addressing over 64-bit addresses; only live coordinates take memory.

    `cells`: uint64[4 * slots] as in `stream.coordinate`; `floats`: the same memory as float64. Both are
    valid until the next `admit`, `load` or `forget`.
    """

    def __init__(self, settings: State, capacity: int = 1 << 12) -> None:
        self._settings = settings
        self._secret = _random_secret()
        self._capacity = capacity
        self._filter = np.zeros(settings.admission_bytes if settings.admit_after > 1 else 1, np.uint8)
        self._slots = np.empty(0, np.int64)
        self._memory = reserve(CELLS * MOST_SLOTS)
        self.cells = self._memory[: CELLS * (capacity + SPARE)]
        self.live = 0
        self.refused = 0
        self._saving: Saving | None = None
        self._rows_move = threading.Lock()  # held while they do, and while the writer of a checkpoint looks

    @property
    def floats(self) -> npt.NDArray[np.float64]:
        """`cells` as float64[4 * slots]: FIRST and SECOND of a row are the learner's."""
        return self.cells.view(np.float64)

    @property
    def slots(self) -> int:
        """Slots, spare ones included."""
        return len(self.cells) // CELLS

    @property
    def table_bytes(self) -> int:
        """Memory of the rows, spare slots included."""
        return self.cells.nbytes

    @property
    def filter_bytes(self) -> int:
        """Memory of the admission filter; 1 when it is off."""
        return self._filter.nbytes

    def admit(self, batch: Batch, first: int, last: int) -> tuple[npt.NDArray[np.int64], int]:
        """Slots for the entries of examples first to last - 1, new coordinates of labelled ones admitted.

        Returns the slots (int64[nnz], -1 without state; the array is reused) and the example that it
        stopped before. The slots hold until the next call, so learn what was done, then go on from
        there. When it stops at `first` itself, the example's new coordinates would take the table over
        `max_live`: make room with `forget`, or go on with `admit_crowded`.
        """
        self._grow(int(batch.row_ptr[first + 1] - batch.row_ptr[first]))
        return self._admit(batch, first, last, refuse=False)

    def admit_crowded(self, batch: Batch, example: int) -> tuple[npt.NDArray[np.int64], int]:
        """`admit` for one example; coordinates beyond `max_live` are refused and counted in `refused`."""
        self._grow(int(batch.row_ptr[example + 1] - batch.row_ptr[example]))
        return self._admit(batch, example, example + 1, refuse=True)

    def hold(self, addresses: npt.NDArray[np.uint64], wanted: npt.NDArray[np.bool_]) -> npt.NDArray[np.int64]:
        """Slots of addresses, int64[k], -1 without state; those that are `wanted` (bool[k]) get state.

        The slots hold until the next change. Neither admission nor `max_live` is asked.
        """
        slots, before = self.slots_of(addresses), self._capacity
        missing = np.flatnonzero(wanted & (slots < 0))
        if not len(missing):
            return slots
        new = np.unique(addresses[missing])
        self._grow(len(new))
        nothing = np.zeros((len(new), CELLS - 1), np.uint64)
        probing.place(self.cells, np.uint64(self._capacity), self._secret, new, nothing)
        self.live += len(new)
        if self._capacity > before:  # rows have moved
            return self.slots_of(addresses)
        slots[missing] = self.slots_of(addresses[missing])
        return slots

    def forget(self, doomed: npt.NDArray[np.int64]) -> None:
        """Takes the rows at the given slots out."""
        if not len(doomed):
            return
        if self._saving is not None:
            self._saving.keep(self.cells.reshape(-1, CELLS)[doomed])
        with self._rows_move:
            self.cells[CELLS * doomed] = probing.DEAD
            self.live -= probing.respread(self.cells, self.slots, np.uint64(self._capacity))

    def age_filter(self) -> None:
        """Halves every count of the admission filter."""
        self._filter >>= 1

    def occupied(self) -> tuple[npt.NDArray[np.uint64], npt.NDArray[np.int64]]:
        """Addresses (uint64[live]) in ascending order and their slots (int64[live])."""
        addresses = np.empty(self.live, np.uint64)
        slots = np.empty(self.live, np.int64)
        probing.unmixed(self.cells, self.slots, self._secret, addresses, slots)
        order = np.argsort(addresses)
        return addresses[order], slots[order]

    def addresses_at(self, slots: npt.NDArray[np.int64]) -> npt.NDArray[np.uint64]:
        """Addresses of the rows in the given slots, uint64[k]; the slots must be in use."""
        addresses = np.empty(len(slots), np.uint64)
        probing.addresses_at(self.cells, self._secret, slots, addresses)
        return addresses

    def slots_of(self, addresses: npt.NDArray[np.uint64]) -> npt.NDArray[np.int64]:
        """Slots of addresses, int64[k], -1 without state."""
        slots = np.empty(len(addresses), np.int64)
        probing.find(self.cells, np.uint64(self._capacity), self._secret, addresses, 0, len(addresses), slots)
        return slots

    def in_use(self, begin: int, end: int) -> npt.NDArray[np.bool_]:
        """Which slots of begin to end - 1 hold a row."""
        keys = self.cells[CELLS * begin : CELLS * end : CELLS]
        return np.asarray(keys != 0)

    def touches(self, slots: npt.NDArray[np.int64]) -> npt.NDArray[np.uint64]:
        """Touch words of the rows in the given slots."""
        return self.cells[CELLS * slots + int(TOUCH)]

    def clear_named(self, slots: npt.NDArray[np.int64]) -> None:
        """Clears NAMED in the rows in the given slots, so that the next touch tells the name again."""
        self.cells[CELLS * slots + int(TOUCH)] &= ~NAMED

    def chunks(self, size: int = 1 << 16) -> Iterator[tuple[int, int]]:
        """Slot ranges that cover the table, for sweeps that must not copy it whole."""
        for begin in range(0, self.slots, size):
            yield begin, min(begin + size, self.slots)

    def state(self) -> dict[str, npt.NDArray[np.generic]]:
        """Everything needed to go on, sorted by address; free of slots, capacity and secret."""
        addresses, slots = self.occupied()
        slots *= CELLS
        return {
            "addresses": addresses,
            "first": self.floats[slots + int(FIRST)],
            "second": self.floats[slots + int(SECOND)],
            "touch": self.cells[slots + int(TOUCH)] & ~NAMED,
            **self.admission(),
        }

    def begin_saving(self, learned: int) -> Saving:
        """The rows after `learned` examples, which is now, for another thread to read while learning goes on.

        Until its `close`, whoever changes rows must take the undo log from `undo`.
        """
        assert self._saving is None, "one checkpoint at a time"
        keys = np.empty(self.live + 1, np.uint64)
        probing.keys_in_use(self.cells, self.slots, keys)
        self._saving = Saving(keys[:-1], self._secret, learned, self._gather, self._end_saving)
        return self._saving

    def undo(self, room: int) -> AbstractContextManager[npt.NDArray[np.uint64]]:
        """The undo log for a learner that is about to change `room` rows at most."""
        return nullcontext(NO_UNDO) if self._saving is None else self._saving.undo(room)

    def admission(self) -> dict[str, npt.NDArray[np.generic]]:
        """The part of the state that is not rows."""
        return {"admission": self._filter.copy()} if self._settings.admit_after > 1 else {}

    def load(self, arrays: dict[str, npt.NDArray[np.generic]]) -> None:
        """Replaces the contents by what `state` gave."""
        addresses = arrays["addresses"].astype(np.uint64, copy=False)
        self.live = 0
        while _limit(self._capacity) < len(addresses):
            self._capacity = _next_capacity(self._capacity)
        self._memory = reserve(CELLS * MOST_SLOTS)
        self.cells = self._memory[: CELLS * (self._capacity + SPARE)]
        state = np.stack([arrays[name].view(np.uint64) for name in ("first", "second", "touch")], axis=1)
        probing.place(self.cells, np.uint64(self._capacity), self._secret, addresses, state)
        self.live = len(addresses)
        if self._settings.admit_after > 1:
            self._filter[:] = arrays["admission"]

    def _gather(self, addresses: npt.NDArray[np.uint64], limit: np.uint64) -> npt.NDArray[np.uint64]:
        state = np.empty((3, len(addresses)), np.uint64)
        with self._rows_move:
            probing.gather(self.cells, np.uint64(self._capacity), self._secret, addresses, limit, state)
        return state

    def _end_saving(self) -> None:
        self._saving = None

    def _slots_for(self, batch: Batch) -> npt.NDArray[np.int64]:
        if len(self._slots) < len(batch.addresses):
            self._slots = np.empty(2 * len(batch.addresses), np.int64)
        return self._slots

    def _admit(
        self, batch: Batch, first: int, last: int, *, refuse: bool
    ) -> tuple[npt.NDArray[np.int64], int]:
        slots = self._slots_for(batch)
        counts = np.zeros(2, np.int64)
        room = _limit(self._capacity) - self.live
        if self._settings.max_live is not None:
            room = min(room, self._settings.max_live - self.live)
        stopped: int = probing.admit(
            self.cells,
            np.uint64(self._capacity),
            self._secret,
            batch.addresses,
            batch.row_ptr,
            batch.labels,
            first,
            last,
            slots,
            self._filter,
            self._settings.admit_after,
            room,
            counts,
            refuse,
        )
        self.live += int(counts[0])
        self.refused += int(counts[1])
        return slots, stopped

    def _grow(self, needed: int) -> None:
        """Makes room for `needed` more rows: memory is stretched, never doubled, and rows spread in place."""
        capacity = self._capacity
        while _limit(capacity) - self.live < needed:
            capacity = _next_capacity(capacity)
        if CELLS * (capacity + SPARE) > len(self._memory):
            raise CannotCreate(
                f"the table holds {self.live:,} coordinates and cannot grow beyond {self.slots:,} slots; "
                "set state.max_live or state.idle_after, or a stronger learner.l1_per_example"
            )
        if capacity > self._capacity:
            with self._rows_move:
                before, self._capacity = self.slots, capacity
                self.cells = self._memory[: CELLS * (capacity + SPARE)]
                probing.respread(self.cells, before, np.uint64(capacity))
