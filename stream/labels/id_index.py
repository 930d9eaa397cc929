"""Halves of hashed ids in, handles of rows out: the index of waiting and remembered messages, in memory.

Twelve bytes a slot, in open addressing with linear probing. A handle is kept by its low 32 bits, so all that
are alive lie within 2**32 of each other. An entry whose handle is below the base is dead: its slot is taken
again, and it is gone after the next growth.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

__all__ = ["ABSENT", "IdIndex"]

Halves = npt.NDArray[np.uint64]
Handles = npt.NDArray[np.int64]

ABSENT = -1
FULLEST = 0.8
"""Share of slots in use at which the index grows: at most 12 / 0.4 = 30 bytes an entry, at least 15."""
PIECE = 1 << 20
"""Entries moved at once while it grows."""


class IdIndex:
    """Finds the handle of an id by half of its hash (uint64, evenly spread); the caller compares the rest."""

    def __init__(self) -> None:
        self._allocate(1 << 12)
        self._base = 0

    @property
    def size_bytes(self) -> int:
        """Memory of the slots."""
        return self._keys.nbytes + self._low.nbytes

    def find(self, keys: Halves, after: Handles | None = None) -> tuple[Handles, Handles]:
        """int64[m] handles, ABSENT where there is none, and int64[m] slots that hold them.

        `after`: slots that an earlier search gave, behind which this one looks: two ids may share a key.
        """
        keys = _without_zero(keys)
        slots = (keys & self._mask).astype(np.int64) if after is None else (after + 1) & int(self._mask)
        handles = np.full(len(keys), ABSENT, np.int64)
        found = np.full(len(keys), ABSENT, np.int64)
        left = np.arange(len(keys))
        while len(left):
            here = slots[left]
            held = self._keys[here]
            alike = np.flatnonzero(held == keys[left])
            known = self._whole(self._low[here[alike]])
            alive = known >= self._base
            hit = left[alike[alive]]
            handles[hit], found[hit] = known[alive], slots[hit]
            going = held != 0
            going[alike[alive]] = False
            left = left[going]
            slots[left] = (slots[left] + 1) & int(self._mask)
        return handles, found

    def insert(self, keys: Halves, handles: Handles) -> None:
        """Adds entries, also where a key is there already."""
        self._make_room(len(keys))
        keys = _without_zero(keys)
        slots = (keys & self._mask).astype(np.int64)
        left = np.arange(len(keys))
        while len(left):
            here = slots[left]
            free = (self._keys[here] == 0) | (self._whole(self._low[here]) < self._base)
            _, first = np.unique(here[free], return_index=True)
            taking = np.flatnonzero(free)[first]
            new, at = left[taking], here[taking]
            self._filled += int(np.count_nonzero(self._keys[at] == 0))
            self._keys[at], self._low[at] = keys[new], handles[new].astype(np.uint32)
            staying = np.ones(len(left), np.bool_)
            staying[taking] = False
            left = left[staying]
            slots[left] = (slots[left] + 1) & int(self._mask)

    def replace(self, slot: int, handle: int) -> None:
        """The entry in `slot`, as `find` gave it, leads to another handle."""
        self._low[slot] = handle & 0xFFFFFFFF

    def forget_below(self, base: int) -> None:
        """Entries of lower handles are dead from now on."""
        self._base = base

    def _allocate(self, capacity: int) -> None:
        self._keys = np.zeros(capacity, np.uint64)
        self._low = np.zeros(capacity, np.uint32)
        self._mask = np.uint64(capacity - 1)
        self._filled = 0

    def _whole(self, low: npt.NDArray[np.uint32]) -> Handles:
        """Handles within 2**31 of the base, of their low halves."""
        away = (low - np.uint32(self._base & 0xFFFFFFFF)).view(np.int32)
        return np.asarray(self._base + away.astype(np.int64))

    def _make_room(self, more: int) -> None:
        if self._filled + more <= FULLEST * len(self._keys):
            return
        keys, low, whole = self._keys, self._low, self._whole
        alive = (keys != 0) & (whole(low) >= self._base)
        capacity = 1 << 12
        while int(np.count_nonzero(alive)) + more > FULLEST * 0.9 * capacity:
            capacity *= 2
        self._allocate(capacity)
        for begin in range(0, len(keys), PIECE):
            piece = np.flatnonzero(alive[begin : begin + PIECE]) + begin
            self.insert(keys[piece], whole(low[piece]))


def _without_zero(keys: Halves) -> Halves:
    """A key of zero would look like an empty slot."""
    return np.where(keys == 0, np.uint64(1), keys)
