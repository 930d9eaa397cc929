"""Which messages were read in which order: ranges of partitions in, an append-only file out; and back.

A line of text of 32 bytes, then records of 32 bytes, little-endian:

    kind       u8   1: read, 2: gap passed over, 3: start; three zero bytes follow
    partition  u32
    from, to   i64  next offsets: messages with from <= offset < to; a start has both alike
    number     u32  0, 1, 2, ... and round again
    sum        u32  crc32c of the 28 bytes before

A record is written before anything of its messages is learned. Between partitions there is no other order
than this one, so a run that follows the file learns the same again, to the bit.
"""

from __future__ import annotations

import os
import struct
from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from dataclasses import dataclass
from enum import IntEnum
from pathlib import Path
from typing import BinaryIO

import crc32c

from stream.durable import make_folder, os_errors, write_file
from stream.errors import BadData, BedloadError

__all__ = ["FILE_NAME", "Journal", "Kind", "Mark", "Span", "spans_after"]

FILE_NAME = "journal"
HEADER = b"bedload order journal 1".ljust(31) + b"\n"
BODY = struct.Struct("<B3xIqqI")
SUM = struct.Struct("<I")
SIZE = BODY.size + SUM.size
PIECE = 1 << 20


class Kind(IntEnum):
    """What a record says of its range."""

    READ = 1
    GAP = 2
    START = 3


@dataclass(frozen=True, slots=True)
class Span:
    """A record: messages of `partition` with first <= offset < last."""

    kind: Kind
    partition: int
    first: int
    last: int


@dataclass(frozen=True, slots=True)
class Mark:
    """A place in the journal: after so many records, whose bytes have this crc32c together."""

    records: int = 0
    crc: int = 0

    @classmethod
    def from_json(cls, saved: Mapping[str, int]) -> Mark:
        """What `to_json` gave."""
        return cls(saved["records"], saved["crc"])

    def to_json(self) -> dict[str, int]:
        """As a checkpoint holds it."""
        return {"records": self.records, "crc": self.crc}

    def after(self, record: bytes) -> Mark:
        """The place behind one more record."""
        return Mark(self.records + 1, crc32c.crc32c(record, self.crc))


def spans_after(path: Path, mark: Mark) -> Iterator[tuple[Span, Mark]]:
    """Each whole record behind `mark` with the place behind it, up to the first that is not whole.

    Raises BadData where what lies before `mark` is not what was there, InputMissing without a file.
    """
    with os_errors("read", path), path.open("rb") as file:
        if file.read(len(HEADER)) != HEADER:
            raise BadData(f"{path} is no order journal of this version: it does not begin with {HEADER!r}")
        _check_before(path, file, mark)
        while piece := file.read(PIECE):
            for start in range(0, len(piece), SIZE):
                record = piece[start : start + SIZE]
                span = _parsed(record, mark.records)
                if span is None:
                    return
                mark = mark.after(record)
                yield span, mark


class Journal:
    """The order journal in `folder`, opened to be written on; for who holds the state folder.

    Made (0600) where it is missing. What lies behind the last whole record, torn by a crash, is cut off:
    `cut_bytes`. `mark`: the end. Raises BadData where the file does not hold the records up to `known`, the
    mark of the checkpoint that is gone on from; CannotCreate, NoPermission, FileTrouble.
    """

    def __init__(self, folder: Path, known: Mark) -> None:
        self.path = folder / FILE_NAME
        self._fault: BedloadError | None = None
        self._synced = True
        _make_if_missing(self.path, known)
        self.mark = known
        for _, mark in spans_after(self.path, known):
            self.mark = mark
        with os_errors("open", self.path):
            self._file = os.open(self.path, os.O_WRONLY | os.O_APPEND | os.O_CLOEXEC | os.O_NOFOLLOW)
        self.cut_bytes = self._cut_at(self.mark)

    def append(self, *spans: Span) -> None:
        """Writes records at the end: safe from a kill at once, from a power cut after `sync`."""
        records = []
        mark = self.mark
        for span in spans:
            records.append(_record(span, mark.records))
            mark = mark.after(records[-1])
        self._synced = False
        with self._trouble("write"):
            data = b"".join(records)
            while data:
                data = data[os.write(self._file, data) :]
        self.mark = mark

    def sync(self) -> None:
        """Returns when everything appended is on disk. Once it failed it fails for good."""
        if self._synced:
            return
        with self._trouble("sync"):
            os.fsync(self._file)
        self._synced = True

    def cut_back(self, mark: Mark) -> None:
        """Drops the records behind `mark`: what they say was never made durable and will not be followed."""
        self._cut_at(mark)
        self.mark = mark

    def close(self) -> None:
        """Releases the file."""
        if self._file >= 0:
            os.close(self._file)
            self._file = -1

    def _cut_at(self, mark: Mark) -> int:
        end = len(HEADER) + SIZE * mark.records
        with os_errors("cut back", self.path):
            past = os.fstat(self._file).st_size - end
            if past > 0:
                os.ftruncate(self._file, end)
                os.fsync(self._file)
        return max(past, 0)

    @contextmanager
    def _trouble(self, action: str) -> Iterator[None]:
        if self._fault is not None:
            raise self._fault
        try:
            with os_errors(action, self.path):
                yield
        except BedloadError as fault:
            self._fault = fault
            raise


def _make_if_missing(path: Path, known: Mark) -> None:
    """Writes the header where there is no file yet, or where a crash left less than a header."""
    with os_errors("read", path):
        size = path.stat().st_size if path.exists() else 0
    if size >= len(HEADER):
        return
    if known.records:
        raise BadData(
            f"{path} is missing or empty, but the checkpoint was made after {known.records:,} "
            "records of it, and without them nobody can tell in which order was learned. Put the file "
            "back from a copy, or begin again with another state folder"
        )
    make_folder(path.parent)
    write_file(path, HEADER)


def _check_before(path: Path, file: BinaryIO, mark: Mark) -> None:
    """Reads the records before `mark` and compares their sum."""
    left, crc = SIZE * mark.records, 0
    while left:
        piece = file.read(min(PIECE, left))
        if not piece:
            break
        left -= len(piece)
        crc = crc32c.crc32c(piece, crc)
    if left or crc != mark.crc:
        what = "has fewer records" if left else "has other records"
        raise BadData(
            f"{path} {what} than the {mark.records:,} that the checkpoint was made after. Put the file "
            "back from a copy, or begin again with another state folder"
        )


def _record(span: Span, number: int) -> bytes:
    body = BODY.pack(span.kind, span.partition, span.first, span.last, number & 0xFFFFFFFF)
    return body + SUM.pack(crc32c.crc32c(body))


def _parsed(record: bytes, number: int) -> Span | None:
    """The span of a record; None where it is not whole or not the one of that number."""
    if len(record) < SIZE or SUM.unpack_from(record, BODY.size)[0] != crc32c.crc32c(record[: BODY.size]):
        return None
    kind, partition, first, last, found = BODY.unpack_from(record)
    if found != number & 0xFFFFFFFF or kind not in Kind.__members__.values() or first > last:
        return None
    return Span(Kind(kind), partition, first, last)
