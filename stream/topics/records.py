"""Batches of records as a broker stores them come in; chunks of values, one a line, go out.

The layout of a record (Kafka protocol guide, "Record"): length, attributes, time delta, offset delta, key
length, key, value length, value, headers; lengths and deltas as zigzag varints, -1 for null.
"""

from __future__ import annotations

import hashlib
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from stream.errors import BadData
from stream.kernel import kernel
from stream.message import Block, Int64s, Message

__all__ = ["Batch", "Chunk", "Single", "chunk_of", "unpacked"]

LEAST_RECORD_BYTES = 7
LINE_FEED, CARRIAGE_RETURN = 10, 13


@dataclass(frozen=True, slots=True)
class Batch:
    """The records of one batch, decompressed but packed. `append_time_ms`: the time of all of them, or -1."""

    data: bytes | bytearray
    count: int
    base_offset: int
    base_time_ms: int
    append_time_ms: int

    def __len__(self) -> int:
        return len(self.data)


@dataclass(frozen=True, slots=True)
class Single:
    """One record on its own, of a message format that came before batches."""

    offset: int
    time_ms: int
    key: bytes | None
    value: bytes | None


@dataclass(frozen=True, slots=True)
class Chunk:
    """Records of one partition that have a value, m of them, side by side.

    `data`: keys and values as they came; `values`, `keys`: int64[2, m], first byte and size of each in it
    (size -1: none); `buffer`, `starts`, `ends`: as in a Block; `times`: int64[m], epoch ms, -1 for none.
    `after`: the offset to ask for next.
    """

    topic: str
    partition: int
    data: bytes
    values: Int64s
    keys: Int64s
    offsets: Int64s
    times: Int64s
    buffer: bytes
    starts: Int64s
    ends: Int64s
    after: int

    def __len__(self) -> int:
        return len(self.offsets)

    @property
    def held_bytes(self) -> int:
        """What it takes in memory, about."""
        return len(self.data) + len(self.buffer) + 64 * len(self)

    def block(self, start: int, stop: int) -> Block:
        """Records `start` to `stop`."""
        return Block(
            self.topic,
            self.partition,
            self.buffer,
            self.starts[start:stop],
            self.ends[start:stop],
            self.offsets[start:stop],
            lambda row: self.message(start + row),
        )

    def message(self, row: int) -> Message:
        """Record `row` as it came."""
        time_ms = int(self.times[row])
        value = self._part(self.values, row)
        assert value is not None
        return Message(
            self.topic,
            self.partition,
            int(self.offsets[row]),
            None if time_ms < 0 else time_ms,
            self._part(self.keys, row),
            value,
        )

    def digest(self, row: int) -> str:
        """By what record `row` is known again."""
        message = self.message(row)
        key = b"" if message.key is None else message.key
        return hashlib.sha256(b"%d %b %b" % (len(key), key, message.value)).hexdigest()[:16]

    def _part(self, places: Int64s, row: int) -> bytes | None:
        first, size = places[:, row].tolist()
        return None if size < 0 else self.data[first : first + size]


def chunk_of(
    topic: str, partition: int, found: Sequence[Batch | Single], first: int, after: int, most: int
) -> Chunk:
    """Records with offsets from `first` on, laid out.

    `after`: the offset to ask for next. Of a value over `most` bytes the buffer has the first most + 1. Line
    feeds in a value become carriage returns there: both are blanks in JSON, and no JSON text may hold either.
    Records without a value are left out. Raises BadData where the layout of a batch is broken.
    """
    singles = [record for record in found if isinstance(record, Single)]
    if singles:
        data, table = _listed(singles)
    else:
        batches = [batch for batch in found if isinstance(batch, Batch)]
        data, table = unpacked(batches, f"topic {topic} partition {partition}")
    table = table[:, (table[0] >= first) & (table[3] >= 0)]
    buffer, starts, ends = _laid_out(data, table[2], table[3], most)
    return Chunk(
        topic, partition, data, table[2:4], table[4:6], table[0], table[1], buffer, starts, ends, after
    )


def unpacked(batches: Sequence[Batch], place: str) -> tuple[bytes, Int64s]:
    """The bytes of `batches`, and int64[6, m]: offset, time, first byte and size of value and key."""
    data = b"".join([batch.data for batch in batches])
    facts = np.array(
        [(len(b.data), b.count, b.base_offset, b.base_time_ms, b.append_time_ms) for b in batches], np.int64
    ).reshape(-1, 5)
    counts = facts[:, 1]
    if ((counts < 0) | (counts * LEAST_RECORD_BYTES > facts[:, 0])).any():
        raise _broken(place, int(facts[0, 2]))
    table = np.empty((6, int(counts.sum())), np.int64)
    done = _unpack(np.frombuffer(data, np.uint8), facts, table)
    if done < table.shape[1]:
        raise _broken(place, int(table[0, done - 1]) + 1 if done > 0 else int(facts[0, 2]))
    return data, table


def _broken(place: str, offset: int) -> BadData:
    return BadData(
        f"{place}: a batch at or behind offset {offset:,} has a right CRC and a broken layout; whoever wrote "
        "it is at fault. Start behind it, or have it removed from the topic"
    )


def _listed(records: Sequence[Single]) -> tuple[bytes, Int64s]:
    """As `unpacked`."""
    parts: list[bytes] = []
    rows = []
    at = 0
    for record in records:
        places = []
        for part in (record.value, record.key):
            places += [at, -1 if part is None else len(part)]
            if part is not None:
                parts.append(part)
                at += len(part)
        rows.append((record.offset, record.time_ms, *places))
    return b"".join(parts), np.array(rows, np.int64).reshape(-1, 6).T.copy()


def _laid_out(data: bytes, first: Int64s, size: Int64s, most: int) -> tuple[bytes, Int64s, Int64s]:
    sizes = np.minimum(size, most + 1)
    ends = np.cumsum(sizes + 1) - 1
    out = np.empty(int(sizes.sum()) + len(sizes), np.uint8)
    _lay_out(np.frombuffer(data, np.uint8), np.ascontiguousarray(first), sizes, out)
    return out.tobytes(), ends - sizes, ends


@kernel
def _unpack(data: npt.NDArray[np.uint8], facts: Int64s, table: Int64s) -> Any:
    """Fills the columns of `table`; returns how many were whole before one that was not, at most."""
    row = 0
    begin = np.int64(0)
    for batch in range(facts.shape[0]):
        end = begin + facts[batch, 0]
        at = begin
        last = np.int64(-1)
        for _ in range(facts[batch, 1]):
            length, at = _varint(data, at, end)
            if at < 0 or length < 0 or length > end - at:
                return row
            stop = at + length
            time, at = _varint(data, at + 1, stop)  # behind the attributes, of which none is in use
            delta, at = _varint(data, at, stop)
            key_size, key = _varint(data, at, stop)
            if at < 0 or key < 0 or key_size > stop - key or delta <= last:
                return row
            value_size, value = _varint(data, key + max(key_size, 0), stop)
            if value < 0 or value_size > stop - value:
                return row
            last = delta
            table[0, row] = facts[batch, 2] + delta
            table[1, row] = facts[batch, 3] + time if facts[batch, 4] < 0 else facts[batch, 4]
            table[2, row] = value
            table[3, row] = max(value_size, -1)
            table[4, row] = key
            table[5, row] = max(key_size, -1)
            row += 1
            at = stop
        if at != end:
            return row - 1
        begin = end
    return row


@kernel
def _varint(data: npt.NDArray[np.uint8], at: Any, end: Any) -> Any:
    """The number at `at` and the place behind it; -1 for the place where it does not end before `end`."""
    value = np.uint64(0)
    shift = np.uint64(0)
    while 0 <= at < end and shift < 70:
        byte = np.uint64(data[at])
        at += 1
        value |= (byte & np.uint64(0x7F)) << shift
        if byte < 0x80:
            return np.int64(value >> np.uint64(1)) ^ -np.int64(value & np.uint64(1)), at
        shift += np.uint64(7)
    return np.int64(0), np.int64(-1)


@kernel
def _lay_out(data: npt.NDArray[np.uint8], first: Int64s, sizes: Int64s, out: npt.NDArray[np.uint8]) -> None:
    at = 0
    for row in range(len(first)):
        begin, size = first[row], sizes[row]
        for i in range(size):
            byte = data[begin + i]
            out[at + i] = CARRIAGE_RETURN if byte == LINE_FEED else byte
        at += size
        out[at] = LINE_FEED
        at += 1
