"""Hashed tokens of one row in, its entries out: equal addresses count within a field, add across fields."""

from __future__ import annotations

import math

import numpy as np
import numpy.typing as npt

from stream.exact import log1p
from stream.kernel import kernel, small

__all__ = [
    "COUNT",
    "LOG_COUNT",
    "MASK",
    "PRESENCE",
    "SMALLEST_MASK",
    "STAMP",
    "begin_row",
    "merge",
    "to_unit_length",
    "unite",
]

Int64s = npt.NDArray[np.int64]
Int32s = npt.NDArray[np.int32]
UInt64s = npt.NDArray[np.uint64]
Float32s = npt.NDArray[np.float32]

PRESENCE, COUNT, LOG_COUNT = 0, 1, 2
# places in `index_state`
MASK, STAMP = 0, 1
SMALLEST_MASK = 255
LAST_STAMP = 1 << 31
LARGEST = np.finfo(np.float32).max


@small
def begin_row(index: UInt64s, index_state: Int64s) -> None:
    """Makes the index empty for a row: a stamp of its own; after two billion rows places are cleared."""
    if index_state[STAMP] >= LAST_STAMP:
        index[:] = 0
        index_state[STAMP] = 0
    index_state[MASK] = SMALLEST_MASK
    index_state[STAMP] += 1


@kernel
def merge(
    tokens: int,
    starts: Int64s,
    lengths: Int32s,
    hashes: UInt64s,
    shift: np.uint64,
    value: int,
    row_begin: int,
    entries: int,
    index: UInt64s,
    index_state: Int64s,
    addresses: UInt64s,
    values: Float32s,
    text_starts: Int64s,
    text_lengths: Int32s,
) -> tuple[int, bool]:
    """Makes entries of the tokens of one field: equal addresses are counted, then valued.

    `index` maps an address to the row's entry: pairs (address, stamp << 32 | entry - row_begin); a place
    with an older stamp is free. An address that an earlier field of the row holds already becomes an entry of
    its own here; True in the result asks for `unite`. Returns (entries, collided).
    """
    field_begin = entries
    collided = False
    mask = index_state[MASK]
    stamp = np.uint64(index_state[STAMP])
    for t in range(tokens):
        if 2 * (entries - row_begin) >= mask:
            mask = 2 * mask + 1
            stamp += np.uint64(1)
            for e in range(row_begin, entries):
                _enter(index, mask, stamp, addresses[e], e - row_begin)
        address = hashes[t] >> shift
        e = _enter(index, mask, stamp, address, entries - row_begin) + row_begin
        if e < field_begin:
            collided = True
            e = field_begin
            while e < entries and addresses[e] != address:
                e += 1
        if e < entries:
            if value != PRESENCE:
                values[e] += np.float32(1.0)
        else:
            addresses[entries] = address
            values[entries] = np.float32(1.0)
            text_starts[entries] = starts[t]
            text_lengths[entries] = lengths[t]
            entries += 1
    if value == LOG_COUNT:
        for e in range(field_begin, entries):
            values[e] = np.float32(log1p(np.float64(values[e])))
    index_state[MASK] = mask
    index_state[STAMP] = np.int64(stamp)
    return entries, collided


@small
def _enter(index: UInt64s, mask: int, stamp: np.uint64, address: np.uint64, entry: int) -> int:
    """Entry that holds `address` already, else `entry`, which it now holds."""
    place = np.int64(address) & mask
    while True:
        tag = index[2 * place + 1]
        if tag >> np.uint64(32) != stamp:
            index[2 * place] = address
            index[2 * place + 1] = (stamp << np.uint64(32)) | np.uint64(entry)
            return entry
        if index[2 * place] == address:
            return int(np.int64(tag & np.uint64(0xFFFFFFFF)))
        place = (place + 1) & mask


@kernel
def unite(
    row_begin: int,
    entries: int,
    addresses: UInt64s,
    values: Float32s,
    text_starts: Int64s,
    text_lengths: Int32s,
) -> int:
    """Merges entries of one address into the first; values add. Returns where the entries end then."""
    kept = row_begin
    for e in range(row_begin, entries):
        same = row_begin
        while same < kept and addresses[same] != addresses[e]:
            same += 1
        if same < kept:
            values[same] = min(max(values[same] + values[e], -LARGEST), LARGEST)
        else:
            addresses[kept] = addresses[e]
            values[kept] = values[e]
            text_starts[kept] = text_starts[e]
            text_lengths[kept] = text_lengths[e]
            kept += 1
    return kept


@small
def to_unit_length(values: Float32s, begin: int, end: int) -> None:
    """Divides the values of a row by their Euclidean norm; a row of zeros stays."""
    total = 0.0
    for e in range(begin, end):
        total += np.float64(values[e]) * np.float64(values[e])
    if total > 0.0:
        norm = math.sqrt(total)
        for e in range(begin, end):
            values[e] = np.float32(values[e] / norm)
