"""Waiting rows in, the bytes of a segment out; and back, column by column.

A segment holds up to ROWS rows side by side. Little-endian: u32 rows, u32 crc32 of the columns, then the
columns of `DTYPE` one after the other, then the payloads. It is cut so that it fills its pages: every full
one takes as many, so that freed places fit the next.
"""

from __future__ import annotations

import struct
import zlib
from collections.abc import Sequence
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
import numpy.typing as npt

from stream.errors import BadData

__all__ = ["ROWS", "Columns", "Segment", "WaitingRow", "columns_of", "payload_of", "row_of", "thin"]

ROWS = 256
"""Rows that a segment has room for; handle = segment * ROWS + row."""
SIZE = 8 * 4096 - 16
"""Bytes of a full segment: eight pages of the database but its header."""
HEAD = struct.Struct("<II")
TIME, HALF, PLACE = struct.Struct("<q"), struct.Struct("<Q"), struct.Struct("<I")
ROW_BYTES = 4 * TIME.size + 2 * PLACE.size


class WaitingRow(NamedTuple):
    """A message that waits: event time in ms, partition and offset, both halves of its hashed id, payload."""

    time: int
    partition: int
    offset: int
    low: int
    high: int
    payload: bytes


@dataclass(frozen=True, slots=True)
class Columns:
    """n rows: `times` and `offsets` int64[n], `low` and `high` uint64[n], `partitions` int64[n]."""

    times: npt.NDArray[np.int64]
    low: npt.NDArray[np.uint64]
    high: npt.NDArray[np.uint64]
    offsets: npt.NDArray[np.int64]
    partitions: npt.NDArray[np.int64]

    def __len__(self) -> int:
        return len(self.times)


class Segment:
    """Rows that are collected until they fill one."""

    def __init__(self) -> None:
        self.rows: list[WaitingRow] = []
        self._size = HEAD.size

    def __len__(self) -> int:
        return len(self.rows)

    def takes(self, row: WaitingRow) -> bool:
        """Whether there is room; a first row is always taken."""
        size = self._size + ROW_BYTES + len(row.payload)
        return not self.rows or (size <= SIZE and len(self.rows) < ROWS)

    def add(self, row: WaitingRow) -> None:
        """Takes one more row."""
        self.rows.append(row)
        self._size += ROW_BYTES + len(row.payload)

    def pack(self) -> bytes:
        """The bytes of the segment."""
        ends = np.cumsum([len(row.payload) for row in self.rows], dtype=np.int64)
        columns = _packed(
            [row.time for row in self.rows],
            np.array([row.low for row in self.rows], np.uint64),
            np.array([row.high for row in self.rows], np.uint64),
            [row.offset for row in self.rows],
            [row.partition for row in self.rows],
            ends,
        )
        return b"".join((_head(len(self.rows), columns), columns, *(row.payload for row in self.rows)))


def columns_of(data: bytes | memoryview, place: str, *, checked: bool = False) -> Columns:
    """Copies of the columns of a packed segment.

    `checked`: compare the sum; raises BadData naming `place`.
    """
    rows, crc = HEAD.unpack_from(data)
    end = HEAD.size + ROW_BYTES * rows
    if len(data) < end or (checked and zlib.crc32(data[HEAD.size : end]) != crc):
        raise BadData(f"{place} is damaged: its columns do not have the sum that was stored with them")
    at = HEAD.size

    def column(dtype: str) -> npt.NDArray[np.generic]:
        nonlocal at
        values = np.frombuffer(data, dtype, rows, at)
        at += values.nbytes
        return values

    times, low, high, offsets = column("<i8"), column("<u8"), column("<u8"), column("<i8")
    partitions = column("<u4")
    return Columns(
        times.astype(np.int64),
        low.astype(np.uint64),
        high.astype(np.uint64),
        offsets.astype(np.int64),
        partitions.astype(np.int64),
    )


def row_of(data: bytes | memoryview, row: int) -> WaitingRow:
    """One row of a packed segment, without its payload."""
    rows, _ = HEAD.unpack_from(data)
    at, wide, narrow = HEAD.size + 8 * row, 8 * rows, HEAD.size + 32 * rows + 4 * row
    return WaitingRow(
        TIME.unpack_from(data, at)[0],
        PLACE.unpack_from(data, narrow)[0],
        TIME.unpack_from(data, at + 3 * wide)[0],
        HALF.unpack_from(data, at + wide)[0],
        HALF.unpack_from(data, at + 2 * wide)[0],
        b"",
    )


def payload_of(data: bytes | memoryview, row: int) -> bytes:
    """A copy of the payload of one row."""
    rows, _ = HEAD.unpack_from(data)
    ends, first = HEAD.size + 36 * rows, HEAD.size + ROW_BYTES * rows
    begin = PLACE.unpack_from(data, ends + 4 * row - 4)[0] if row else 0
    return bytes(data[first + begin : first + PLACE.unpack_from(data, ends + 4 * row)[0]])


def thin(columns: Columns) -> bytes:
    """The same segment without payloads, for rows that are only remembered."""
    c = columns
    packed = _packed(c.times, c.low, c.high, c.offsets, c.partitions, np.zeros(len(c), np.int64))
    return _head(len(c), packed) + packed


def _packed(
    times: Sequence[int] | npt.NDArray[np.int64],
    low: npt.NDArray[np.uint64],
    high: npt.NDArray[np.uint64],
    offsets: Sequence[int] | npt.NDArray[np.int64],
    partitions: Sequence[int] | npt.NDArray[np.int64],
    ends: npt.NDArray[np.int64],
) -> bytes:
    columns = (
        np.asarray(times, "<i8"),
        low.astype("<u8"),
        high.astype("<u8"),
        np.asarray(offsets, "<i8"),
        np.asarray(partitions, "<u4"),
        ends.astype("<u4"),
    )
    return b"".join(column.tobytes() for column in columns)


def _head(rows: int, columns: bytes) -> bytes:
    return HEAD.pack(rows, zlib.crc32(columns))
