"""Kernels of the table: addresses in, slots out; rows moved when the table grows or forgets.

Rows are those of `stream.coordinate`, as the flat uint64[4 * slots] `cells`.

Linear probing from a home slot that grows with the mixed address, so that clusters of rows keep
their order whatever the capacity and a growing table is spread out in place, from its end. There is
no wrap-around: SPARE slots follow the last home.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from stream.coordinate import CELLS, FIRST, LEAST, SECOND, TOUCH, row_of
from stream.kernel import kernel, prefetch, small

__all__ = ["DEAD", "admit", "find", "mix", "place", "respread", "unmix"]

Cells = npt.NDArray[np.uint64]
Addresses = npt.NDArray[np.uint64]
Secret = npt.NDArray[np.uint64]

DEAD = np.uint64(2)
EMPTY = np.uint64(0)
ONE = np.uint64(1)
M63 = np.uint64(0x7FFFFFFFFFFFFFFF)
S29, S32 = np.uint64(29), np.uint64(32)
AHEAD = 24
"""How many entries before its turn an address is prefetched (measured: 16 to 48 do as well)."""
ABSENT = -1
"""Slot of a coordinate without state."""


@small
def mix(address: np.uint64, secret: Secret) -> np.uint64:
    """A bijection of 63 bits drawn by `secret`: xor word, three odd multipliers, their inverses.

    Two multipliers do not do: they take addresses that differ in their top bits only to a progression,
    which for some secrets lies in clumps.
    """
    word: np.uint64 = ((address ^ secret[0]) * secret[1]) & M63
    word ^= word >> S32
    word = (word * secret[2]) & M63
    word ^= word >> S32
    word = (word * secret[3]) & M63
    return word


@small
def unmix(word: np.uint64, secret: Secret) -> np.uint64:
    """The address that `mix` made `word` of."""
    word = (word * secret[6]) & M63
    word ^= word >> S32
    word = (word * secret[5]) & M63
    word ^= word >> S32
    word = ((word * secret[4]) & M63) ^ secret[0]
    return word


@small
def home(key: np.uint64, capacity: np.uint64) -> np.int64:
    """First slot to look at: the top 32 bits of the key, scaled to the capacity (< 2**32)."""
    return np.int64(((key >> S32) * capacity) >> S32)


@small
def seek(cells: Cells, capacity: np.uint64, key: np.uint64) -> np.int64:
    """The slot that holds `key`, or -1 - s where s is the empty slot at which it would go."""
    slot = home(key, capacity)
    while True:
        held = cells[row_of(slot)]
        if held == key:
            return slot
        if held == EMPTY:
            return -1 - slot
        slot += 1


@small
def prefetch_home(cells: Cells, capacity: np.uint64, address: np.uint64, secret: Secret) -> None:
    """Asks for the line of an address that will be looked up soon."""
    prefetch(cells, row_of(home(mix(address, secret) << ONE, capacity)))


@kernel
def find(
    cells: Cells,
    capacity: np.uint64,
    secret: Secret,
    addresses: Addresses,
    first: int,
    last: int,
    slots: npt.NDArray[np.int64],
) -> None:
    """slots[e] = slot of addresses[e], or -1 without state, for first <= e < last."""
    for e in range(first, last):
        prefetch_home(cells, capacity, addresses[min(e + AHEAD, last - 1)], secret)
        slot = seek(cells, capacity, (mix(addresses[e], secret) << ONE) | ONE)
        slots[e] = slot if slot >= 0 else ABSENT


@small
def seen(filter_: npt.NDArray[np.uint8], address: np.uint64) -> np.int64:
    """Counts one more sighting of `address`; returns how many there were, at least.

    A counting filter with two places and conservative update (only the lesser is raised), so that
    the count is never too low. Places depend on the address alone: the filter is state.
    """
    size = np.uint64(len(filter_))
    word = address * np.uint64(0x9E3779B97F4A7C15)
    word ^= word >> S29
    word *= np.uint64(0xBF58476D1CE4E5B9)
    one = np.int64(((word >> S32) * size) >> S32)
    two = np.int64(((word & np.uint64(0xFFFFFFFF)) * size) >> S32)
    count = min(filter_[one], filter_[two])
    if count < 255:
        count += 1
        filter_[one] = max(filter_[one], count)
        filter_[two] = max(filter_[two], count)
    return np.int64(count)


@kernel
def admit(
    cells: Cells,
    capacity: np.uint64,
    secret: Secret,
    addresses: Addresses,
    row_ptr: npt.NDArray[np.int64],
    labels: npt.NDArray[np.int8],
    first: int,
    last: int,
    slots: npt.NDArray[np.int64],
    filter_: npt.NDArray[np.uint8],
    admit_after: int,
    room: int,
    counts: npt.NDArray[np.int64],
    refuse: bool,
) -> int:
    """Finds the slots of examples first to last - 1, giving state to new coordinates of labelled ones.

    Before an example that may need more than `room` rows it stops (with `refuse` it goes on, and
    coordinates beyond the room are refused); returns the example to go on with.
    counts int64[2] += rows added, coordinates refused. An unlabelled example adds nothing and counts
    no sighting.
    """
    stop = row_ptr[last] - 1
    keys = slots.view(np.uint64)  # until each becomes a slot
    for e in range(row_ptr[first], row_ptr[last]):
        keys[e] = (mix(addresses[e], secret) << ONE) | ONE
    for example in range(first, last):
        begin = row_ptr[example]
        end = row_ptr[example + 1]
        labelled = labels[example] >= 0
        new = 0
        for e in range(begin, end):
            prefetch(cells, row_of(home(keys[min(e + AHEAD, stop)], capacity)))
            slot = seek(cells, capacity, keys[e])
            slots[e] = slot
            if slot < 0:
                new += 1
                if not labelled:
                    slots[e] = ABSENT
        if new == 0 or not labelled:
            continue
        if new > room and not refuse:
            return example
        for e in range(begin, end):
            if slots[e] >= 0:
                continue
            slots[e] = ABSENT
            if admit_after > 1 and seen(filter_, addresses[e]) < admit_after:
                continue
            if room <= 0:
                counts[1] += 1
                continue
            key = (mix(addresses[e], secret) << ONE) | ONE
            slot = -1 - seek(cells, capacity, key)
            if CELLS * (slot + 1) >= len(cells):
                raise MemoryError("a cluster of rows ran over the end of the table")
            row = row_of(slot)
            cells[row] = key
            for cell in range(1, CELLS):
                cells[row + np.uint64(cell)] = EMPTY
            slots[e] = slot
            counts[0] += 1
            room -= 1
    return last


@kernel
def place(
    cells: Cells, capacity: np.uint64, secret: Secret, addresses: Addresses, state: npt.NDArray[np.uint64]
) -> None:
    """Puts new coordinates with state uint64[k, 3] into the table; the room must be there."""
    for i in range(len(addresses)):
        key = (mix(addresses[i], secret) << ONE) | ONE
        slot = -1 - seek(cells, capacity, key)
        row = row_of(slot)
        cells[row] = key
        for cell in range(1, CELLS):
            cells[row + np.uint64(cell)] = state[i, cell - 1]


@kernel
def respread(cells: Cells, used: int, capacity: np.uint64) -> int:
    """Puts every row of the first `used` slots where `capacity` wants it, in place, and drops DEAD ones.

    `capacity` is not less than before. Works cluster by cluster from the end: a row's new home is never
    before its cluster, and all behind the cluster has been dealt with. Returns the number of rows dropped.
    """
    dropped = 0
    cluster = np.empty((64, CELLS), np.uint64)
    end = used
    while end > 0:
        if cells[row_of(end - 1)] == EMPTY:
            end -= 1
            continue
        begin = end - 1
        while begin > 0 and cells[row_of(begin - 1)] != EMPTY:
            begin -= 1
        if end - begin > len(cluster):
            cluster = np.empty((2 * (end - begin), CELLS), np.uint64)
        for slot in range(begin, end):
            for cell in range(CELLS):
                cluster[slot - begin, cell] = cells[row_of(slot) + np.uint64(cell)]
            cells[row_of(slot)] = EMPTY
        for i in range(end - begin):
            key = cluster[i, 0]
            if key == DEAD:
                dropped += 1
                continue
            free = row_of(-1 - seek(cells, capacity, key))
            for cell in range(CELLS):
                cells[free + np.uint64(cell)] = cluster[i, cell]
        end = begin
    return dropped


@kernel
def unmixed(
    cells: Cells, used: int, secret: Secret, addresses: Addresses, slots: npt.NDArray[np.int64]
) -> None:
    """addresses[i], slots[i] of the i-th row in use, in slot order. Shapes: uint64[live], int64[live]."""
    i = 0
    for slot in range(used):
        key = cells[row_of(slot)]
        if key != EMPTY:
            addresses[i] = unmix(key >> ONE, secret)
            slots[i] = slot
            i += 1


@kernel
def addresses_at(cells: Cells, secret: Secret, slots: npt.NDArray[np.int64], addresses: Addresses) -> None:
    """addresses[i] = address of the row in slots[i]."""
    for i in range(len(slots)):
        addresses[i] = unmix(cells[row_of(slots[i])] >> ONE, secret)


@kernel
def keys_in_use(cells: Cells, used: int, keys: npt.NDArray[np.uint64]) -> None:
    """keys[i] = key of the i-th row in use, in slot order; `keys` is uint64[live + 1]: the last is lost."""
    i = np.uint64(0)
    for slot in range(used):  # no branch: this is all that learning waits for when a checkpoint begins
        key = cells[row_of(slot)]
        keys[i] = key
        i += np.uint64(key != EMPTY)


@kernel
def unmix_keys(keys: npt.NDArray[np.uint64], secret: Secret) -> None:
    """Keys become their addresses, in place."""
    for i in range(len(keys)):
        keys[i] = unmix(keys[i] >> ONE, secret)


@kernel
def gather(
    cells: Cells,
    capacity: np.uint64,
    secret: Secret,
    addresses: Addresses,
    limit: np.uint64,
    state: npt.NDArray[np.uint64],
) -> None:
    """state[:, i] = cells 1 to 3 of the row of addresses[i], uint64[3, k], as they were before `limit`.

    A row that is missing, or was touched at `limit` or later, or never, comes out as zeros. While a learner
    is at work on the same rows, what is read of one that it changes may be torn.
    """
    last = len(addresses) - 1
    for i in range(len(addresses)):
        prefetch_home(cells, capacity, addresses[min(i + AHEAD, last)], secret)
        slot = seek(cells, capacity, (mix(addresses[i], secret) << ONE) | ONE)
        for cell in range(3):
            state[cell, i] = EMPTY
        if slot < 0:
            continue
        row = row_of(slot)
        word = cells[row + TOUCH]
        if word - LEAST < limit:
            state[0, i] = cells[row + FIRST]
            state[1, i] = cells[row + SECOND]
            state[2, i] = word
