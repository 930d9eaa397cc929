"""Kernels of the table: addresses in, slots out; rows moved when the table grows or forgets.

Rows are those of `stream.coordinate`, as uint64[slots, 4].

Linear probing from a home slot that grows with the mixed address, so that clusters of rows keep
their order whatever the capacity and a growing table is spread out in place, from its end. There is
no wrap-around: SPARE slots follow the last home.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from stream.kernel import kernel, small

__all__ = ["DEAD", "KEY", "admit", "find", "mix", "place", "respread", "unmix"]

Rows = npt.NDArray[np.uint64]
Addresses = npt.NDArray[np.uint64]
Secret = npt.NDArray[np.uint64]

KEY = 0
DEAD = np.uint64(2)
EMPTY = np.uint64(0)
ONE = np.uint64(1)
M63 = np.uint64(0x7FFFFFFFFFFFFFFF)
S29, S32 = np.uint64(29), np.uint64(32)
ABSENT = -1
"""Slot of a coordinate without state."""


@small
def mix(address: np.uint64, secret: Secret) -> np.uint64:
    """A bijection of 63 bits drawn by `secret`: xor word, two odd multipliers, their inverses."""
    word = ((address ^ secret[0]) * secret[1]) & M63
    word ^= word >> S32
    word = (word * secret[2]) & M63
    return word ^ (word >> S32)


@small
def unmix(word: np.uint64, secret: Secret) -> np.uint64:
    """The address that `mix` made `word` of."""
    word ^= word >> S32
    word = (word * secret[4]) & M63
    word ^= word >> S32
    return ((word * secret[3]) & M63) ^ secret[0]


@small
def home(key: np.uint64, capacity: np.uint64) -> int:
    """First slot to look at: the top 32 bits of the key, scaled to the capacity (< 2**32)."""
    return np.int64(((key >> S32) * capacity) >> S32)


@small
def seek(rows: Rows, capacity: np.uint64, key: np.uint64) -> int:
    """The slot that holds `key`, or -1 - s where s is the empty slot at which it would go."""
    slot = home(key, capacity)
    while True:
        held = rows[slot, KEY]
        if held == key:
            return slot
        if held == EMPTY:
            return -1 - slot
        slot += 1


@kernel
def find(
    rows: Rows,
    capacity: np.uint64,
    secret: Secret,
    addresses: Addresses,
    first: int,
    last: int,
    slots: npt.NDArray[np.int64],
) -> None:
    """slots[e] = slot of addresses[e], or -1 without state, for first <= e < last."""
    for e in range(first, last):
        slot = seek(rows, capacity, (mix(addresses[e], secret) << ONE) | ONE)
        slots[e] = slot if slot >= 0 else ABSENT


@small
def seen(filter_: npt.NDArray[np.uint8], address: np.uint64) -> int:
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
    rows: Rows,
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
    for example in range(first, last):
        begin = row_ptr[example]
        end = row_ptr[example + 1]
        labelled = labels[example] >= 0
        new = 0
        for e in range(begin, end):
            slot = seek(rows, capacity, (mix(addresses[e], secret) << ONE) | ONE)
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
            slot = -1 - seek(rows, capacity, key)
            if slot >= len(rows) - 1:
                raise MemoryError("a cluster of rows ran over the end of the table")
            rows[slot, 0] = key
            rows[slot, 1] = EMPTY
            rows[slot, 2] = EMPTY
            rows[slot, 3] = EMPTY
            slots[e] = slot
            counts[0] += 1
            room -= 1
    return last


@kernel
def place(rows: Rows, capacity: np.uint64, secret: Secret, addresses: Addresses, state: Rows) -> None:
    """Puts new coordinates with state uint64[k, 3] into the table; the room must be there."""
    for i in range(len(addresses)):
        key = (mix(addresses[i], secret) << ONE) | ONE
        slot = -1 - seek(rows, capacity, key)
        rows[slot, 0] = key
        for column in range(3):
            rows[slot, column + 1] = state[i, column]


@kernel
def respread(rows: Rows, used: int, capacity: np.uint64) -> int:
    """Puts every row of rows[:used] where `capacity` (not less than before) wants it, in place; drops DEAD ones.

    Works cluster by cluster from the end: a row's new home is never before its cluster, and all
    behind the cluster has been dealt with. Returns the number of rows dropped.
    """
    dropped = 0
    cluster = np.empty((64, 4), np.uint64)
    end = used
    while end > 0:
        if rows[end - 1, KEY] == EMPTY:
            end -= 1
            continue
        begin = end - 1
        while begin > 0 and rows[begin - 1, KEY] != EMPTY:
            begin -= 1
        if end - begin > len(cluster):
            cluster = np.empty((2 * (end - begin), 4), np.uint64)
        for slot in range(begin, end):
            for column in range(4):
                cluster[slot - begin, column] = rows[slot, column]
            rows[slot, KEY] = EMPTY
        for i in range(end - begin):
            key = cluster[i, KEY]
            if key == DEAD:
                dropped += 1
                continue
            slot = -1 - seek(rows, capacity, key)
            for column in range(4):
                rows[slot, column] = cluster[i, column]
        end = begin
    return dropped


@kernel
def unmixed(rows: Rows, used: int, secret: Secret, addresses: Addresses, slots: npt.NDArray[np.int64]) -> None:
    """addresses[i], slots[i] of the i-th row in use, in slot order. Shapes: uint64[live], int64[live]."""
    i = 0
    for slot in range(used):
        key = rows[slot, KEY]
        if key != EMPTY:
            addresses[i] = unmix(key >> ONE, secret)
            slots[i] = slot
            i += 1
