"""Waiting rows and what became of each in, a database in the state folder out, and back at any kept moment.

Rows are only appended, many to a segment; what became of a row is one byte in memory that is written when
a moment is kept. Each kept moment has a number, which a checkpoint stores, and leaves undo records: the bytes
as they were before. Opening at a number takes back everything later, so a store that is ahead of its
checkpoint after a crash agrees with it. It is never behind: `keep` returns when all is on disk, and the
checkpoint is written after that.

    segments   number -> packed rows (stream.labels.segments), thin once all of them are settled
    fates      number -> a byte a row, as of the newest kept moment
    scores     number -> f64 a row, given when it arrived; written over where it arrives again
    undo       moment, number -> those bytes before that moment
    moments    moment -> JSON: how many segments there were, and the first that was not forgotten, not settled
    about      "format", and "thin": below it every segment is thin

The database itself has no sums, so each value has one: segments of their columns (their payloads see to
themselves), the others four bytes before them.
"""

from __future__ import annotations

import json
import os
import struct
import zlib
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from pathlib import Path
from typing import Any

import lmdb
import numpy as np
import numpy.typing as npt

from stream.durable import make_folder, os_errors
from stream.errors import BadData, BedloadError, CannotCreate, FileTrouble
from stream.labels.segments import ROWS, Columns, Segment, WaitingRow, columns_of, payload_of, row_of, thin

__all__ = ["WaitingStore"]

NUMBER = struct.Struct(">Q")
UNDO = struct.Struct(">QQ")
SUM = struct.Struct(">I")
TABLES = (b"segments", b"fates", b"scores", b"undo", b"moments", b"about")
END = b"\xff" * 17
FORMAT = b"bedload waiting rows 1"
MOST_BYTES = 1 << 40
"""Size that the file may grow to; addresses only, the disk is taken as rows come."""
DAMAGE = (lmdb.CorruptedError, lmdb.InvalidError, lmdb.PageNotFoundError, lmdb.VersionMismatchError)
COMMITTED_EVERY = 1024
"""Segments held back in memory (32 KiB each) until they are written, though no moment is kept."""


class WaitingStore:
    """The waiting rows of one state folder, as they were at the kept moment `moment` (0: none yet).

    A row has a handle, segment * ROWS + its place there; handles ascend with appending. `fates`: what became
    of it, see `fate` and `settle`. For who holds the state folder. Raises BadData where the database is
    missing, damaged or has no such moment, CannotCreate, NoPermission, FileTrouble.
    """

    def __init__(self, folder: Path, moment: int = 0) -> None:
        self.folder = folder
        self._open_database(moment)
        self.moment = moment
        with self._trouble("read"):
            said = self._go_back_to(moment)
        self.first: int = said["first"]
        """The first segment that is not forgotten."""
        self._next: int = said["next"]
        self._settled: int = said["settled"]
        self._gathering = Segment()
        self._dirty: set[int] = set()
        self._scores: dict[int, npt.NDArray[np.float64]] = {}  # what is not written yet
        self._read_scores: tuple[int, npt.NDArray[np.float64]] = (-1, np.empty(0))
        self._uncommitted = 0
        self._floor = self.first
        self._fates = np.zeros(max(1 << 16, 2 * (self._next - self.first) * ROWS), np.uint8)

    @property
    def next_handle(self) -> int:
        """Handle that a next row would get."""
        return self._next * ROWS + len(self._gathering)

    @property
    def first_handle(self) -> int:
        """The lowest handle that is not forgotten."""
        return self.first * ROWS

    def append(self, row: WaitingRow, fate: int) -> int:
        """Takes a row; returns its handle."""
        if not self._gathering.takes(row):
            self._seal()
        handle = self._next * ROWS + len(self._gathering)
        self._gathering.add(row)
        self._make_room(handle)
        self.settle(handle, fate)
        return handle

    def fate(self, handle: int) -> int:
        """What became of a row."""
        return int(self._fates[handle - self._floor * ROWS])

    def fates_of(self, segment: int) -> npt.NDArray[np.uint8]:
        """uint8[ROWS], those of one segment; a view."""
        at = (segment - self._floor) * ROWS
        return self._fates[at : at + ROWS]

    def settle(self, handle: int, fate: int) -> None:
        """Notes what became of a row."""
        self._fates[handle - self._floor * ROWS] = fate
        self._dirty.add(handle // ROWS)

    def columns(self, segment: int) -> Columns:
        """The rows of a segment, without their payloads."""
        return columns_of(self._data(segment), self._place(segment))

    def row(self, handle: int) -> WaitingRow:
        """One row without its payload."""
        segment, at = divmod(handle, ROWS)
        if segment == self._next:
            return self._gathering.rows[at]
        return row_of(self._data(segment), at)

    def payload(self, handle: int) -> bytes:
        """The payload of a row that was not settled when the oldest kept moment was."""
        return self.payloads(handle // ROWS, [handle % ROWS])[0]

    def payloads(self, segment: int, rows: Sequence[int]) -> list[bytes]:
        """The payloads of some rows of a segment, as `payload`."""
        if segment == self._next:
            return [self._gathering.rows[row].payload for row in rows]
        data = self._data(segment)
        return [payload_of(data, row) for row in rows]

    def settle_all(self, segment: int, rows: npt.NDArray[np.int64], fates: npt.NDArray[np.uint8]) -> None:
        """Notes what became of some rows of a segment."""
        if len(rows):
            self.fates_of(segment)[rows] = fates
            self._dirty.add(segment)

    def note_score(self, handle: int, score: float) -> None:
        """Notes the score that a row was given."""
        segment, at = divmod(handle, ROWS)
        if segment not in self._scores:
            self._scores[segment] = self._written_scores(segment)
        self._scores[segment][at] = score

    def score_of(self, handle: int) -> float:
        """The score of a row that was not settled when the oldest kept moment was; NaN without one."""
        segment, at = divmod(handle, ROWS)
        scores = self._scores.get(segment)
        if scores is not None:
            return float(scores[at])
        if self._read_scores[0] != segment:  # rows of a segment are mostly asked for together
            self._read_scores = segment, self._written_scores(segment)
        return float(self._read_scores[1][at])

    def _written_scores(self, segment: int) -> npt.NDArray[np.float64]:
        found = self._transaction.get(NUMBER.pack(segment), db=self._tables[b"scores"])
        if found is None:
            return np.full(ROWS, np.nan)
        return np.frombuffer(self._checked(found, f"scores of segment {segment}"), "<f8").astype(np.float64)

    def _data(self, segment: int) -> bytes | memoryview:
        if segment == self._next:
            return self._gathering.pack()
        try:
            data: memoryview | None = self._transaction.get(NUMBER.pack(segment), db=self._segments)
        except lmdb.Error as error:
            raise self._named(error, "read") from error
        if data is None:
            raise BadData(f"{self._place(segment)} is missing. {self._cure()}")
        return data

    def segments(self) -> Iterator[tuple[int, Columns, npt.NDArray[np.uint8]]]:
        """Every segment in order with columns, whose sums are checked, and fates; for who has just opened."""
        for segment in range(self.first, self._next):
            data = self._data(segment)
            with self._trouble("read"):
                fates = self._transaction.get(NUMBER.pack(segment), db=self._tables[b"fates"])
            if fates is None:
                raise BadData(f"{self._place(segment)} is incomplete. {self._cure()}")
            columns = columns_of(data, self._place(segment), checked=True)
            held = self.fates_of(segment)
            held[:] = np.frombuffer(self._checked(fates, f"what became of segment {segment}"), np.uint8)
            yield segment, columns, held[: len(columns)]

    def forget(self, first: int, settled: int) -> None:
        """Rows of segments below `first` are forgotten; below `settled` nobody wants a payload any more.

        The disk gets its room back once no kept moment needs them.
        """
        self.first, self._settled = first, settled

    def keep(self, moment: int) -> None:
        """Makes everything up to now durable as `moment`, for a checkpoint that is written after that.

        Moments ascend; the same one again is the same state.
        """
        if moment == self.moment and not len(self._gathering) and not self._dirty:
            return
        self._seal()
        with self._trouble("write"):
            fates, undo = self._tables[b"fates"], self._tables[b"undo"]
            for segment in sorted(self._dirty):
                if segment < self.first:
                    continue
                key = NUMBER.pack(segment)
                old = self._transaction.replace(key, _summed(self.fates_of(segment).tobytes()), db=fates)
                if old is not None:
                    self._transaction.put(UNDO.pack(moment, segment), old, db=undo)
            for segment, scores in sorted(self._scores.items()):
                value = _summed(scores.astype("<f8").tobytes())
                self._transaction.put(NUMBER.pack(segment), value, db=self._tables[b"scores"])
            self._scores.clear()
            self._read_scores = (-1, np.empty(0))
            said = json.dumps({"first": self.first, "next": self._next, "settled": self._settled})
            moments = self._tables[b"moments"]
            self._transaction.put(NUMBER.pack(moment), _summed(said.encode()), db=moments, append=True)
            self._commit()
        self.moment = moment
        self._dirty.clear()
        self._compact_fates()

    def drop_before(self, moment: int) -> None:
        """No checkpoint goes back behind `moment` any more: what only those needed is removed.

        To be called once the checkpoint that stores `moment` is durable.
        """
        with self._trouble("write"):
            said = self._moment(moment)
            if said is None:
                return
            self._delete(b"moments", b"", NUMBER.pack(moment))
            self._delete(b"undo", b"", UNDO.pack(moment + 1, 0))
            for table in (b"segments", b"fates"):
                self._delete(table, b"", NUMBER.pack(said["first"]))
            self._make_thin(said["first"], said["settled"])
            self._delete(b"scores", b"", NUMBER.pack(said["settled"]))
            self._commit()

    def close(self) -> None:
        """Releases the database; what was not kept is lost."""
        self._transaction.abort()
        self._environment.close()

    def _open_database(self, moment: int) -> None:
        path = self.folder / "data.mdb"
        with os_errors("read", path):
            there = path.is_file() and path.stat().st_size > 0
        if moment and not there:
            raise BadData(
                f"{path} is missing, but the checkpoint was made with waiting messages in it. {self._cure()}"
            )
        make_folder(self.folder)
        with self._trouble("open"):
            self._environment = lmdb.open(
                str(self.folder), map_size=MOST_BYTES, max_dbs=len(TABLES), mode=0o600, lock=False,
                readahead=False, meminit=False,
            )  # fmt: skip
            self._check_length(path)
            self._tables = {name: self._environment.open_db(name) for name in TABLES}
            self._segments = self._tables[b"segments"]
            self._begin()
            about = self._tables[b"about"]
            found = self._transaction.get(b"format", db=about)
            if found is None and not there:
                self._transaction.put(b"format", FORMAT, db=about)
            elif found is None or bytes(found) != FORMAT:
                raise BadData(f"{path} is no store of waiting messages of this version. {self._cure()}")
        if not there:
            _sync_folder(self.folder)

    def _check_length(self, path: Path) -> None:
        """Raises BadData where the file is shorter than it says: reading past its end would kill us."""
        pages, size = self._environment.info()["last_pgno"] + 1, self._environment.stat()["psize"]
        found = path.stat().st_size
        if found < pages * size:
            raise BadData(f"{path} has {found:,} bytes of {pages * size:,}. {self._cure()}")

    def _go_back_to(self, moment: int) -> dict[str, int]:
        """Takes back all that came after `moment`; what is said of it."""
        said = self._moment(moment) if moment else {"first": 0, "next": 0, "settled": 0}
        if said is None:
            raise BadData(
                f"{self.folder} has no moment {moment}, which the checkpoint was made at: it is of another "
                f"run, or older than the checkpoint. {self._cure()}"
            )
        later = list(self._items(b"undo", UNDO.pack(moment + 1, 0)))
        for key, fates in reversed(later):
            _, segment = UNDO.unpack(key)
            self._transaction.put(NUMBER.pack(segment), fates, db=self._tables[b"fates"])
        self._delete(b"undo", UNDO.pack(moment + 1, 0), END)
        self._delete(b"moments", NUMBER.pack(moment + 1), END)
        for table in (b"segments", b"fates", b"scores"):
            self._delete(table, NUMBER.pack(said["next"]), END)
        self._commit()
        return said

    def _seal(self) -> None:
        """Ends the segment that is being filled."""
        if not len(self._gathering):
            return
        with self._trouble("write"):
            self._transaction.put(
                NUMBER.pack(self._next), self._gathering.pack(), db=self._tables[b"segments"], append=True
            )
            self._gathering = Segment()
            self._next += 1
            self._uncommitted += 1
            if self._uncommitted >= COMMITTED_EVERY:
                self._commit()

    def _make_thin(self, first: int, settled: int) -> None:
        segments, about = self._tables[b"segments"], self._tables[b"about"]
        found = self._transaction.get(b"thin", db=about)
        if found is not None:
            first = max(first, NUMBER.unpack(self._checked(found, "the mark of thin segments"))[0])
        for segment in range(first, settled):
            key = NUMBER.pack(segment)
            data = self._transaction.get(key, db=segments)
            if data is not None:
                self._transaction.put(key, thin(columns_of(data, self._place(segment))), db=segments)
        self._transaction.put(b"thin", _summed(NUMBER.pack(max(first, settled))), db=about)

    def _make_room(self, handle: int) -> None:
        need = handle - self._floor * ROWS + ROWS
        if need > len(self._fates):
            fates = np.zeros(need + need // 4, np.uint8)
            fates[: len(self._fates)] = self._fates
            self._fates = fates

    def _compact_fates(self) -> None:
        """Gives the bytes of forgotten segments back once they are many."""
        gone = (self.first - self._floor) * ROWS
        if gone > len(self._fates) // 2:
            kept = self._fates[gone:]
            self._fates = np.concatenate((kept, np.zeros(1 << 16, np.uint8)))
            self._floor = self.first

    def _moment(self, moment: int) -> dict[str, int] | None:
        found = self._transaction.get(NUMBER.pack(moment), db=self._tables[b"moments"])
        return None if found is None else dict(json.loads(self._checked(found, f"moment {moment}")))

    def _items(self, table: bytes, first: bytes) -> Iterator[tuple[bytes, bytes]]:
        with self._transaction.cursor(self._tables[table]) as cursor:
            going = cursor.set_range(first)
            while going:
                yield bytes(cursor.key()), bytes(cursor.value())
                going = cursor.next()

    def _delete(self, table: bytes, first: bytes, last: bytes) -> None:
        """Removes first <= key < last."""
        with self._transaction.cursor(self._tables[table]) as cursor:
            going = cursor.set_range(first) if first else cursor.first()
            while going and bytes(cursor.key()) < last:
                going = cursor.delete()

    def _checked(self, value: memoryview, what: str) -> bytes:
        """A value without the sum before it."""
        data = bytes(value[SUM.size :])
        if SUM.unpack_from(value)[0] != zlib.crc32(data):
            raise BadData(f"{self.folder}: {what} is damaged. {self._cure()}")
        return data

    def _begin(self) -> None:
        self._transaction = self._environment.begin(write=True, buffers=True)

    def _commit(self) -> None:
        self._transaction.commit()
        self._uncommitted = 0
        self._begin()

    def _place(self, segment: int) -> str:
        return f"{self.folder}: segment {segment} of the waiting messages"

    def _cure(self) -> str:
        return (
            "Put the folder back from a copy made together with the checkpoint, or begin again in another "
            "state.folder"
        )

    @contextmanager
    def _trouble(self, action: str) -> Iterator[None]:
        try:
            yield
        except lmdb.Error as error:
            raise self._named(error, action) from error

    def _named(self, error: Any, action: str) -> BedloadError:
        said = f"cannot {action} {self.folder}: {error}"
        if isinstance(error, lmdb.MapFullError):
            return CannotCreate(f"{said}; {MOST_BYTES >> 30} GiB are its limit: take a shorter outcomes.wait")
        if isinstance(error, lmdb.DiskError):
            return CannotCreate(f"{said}; free some space and start again: the last checkpoint is whole")
        if isinstance(error, DAMAGE):
            return BadData(f"{said}; it is damaged. {self._cure()}")
        return FileTrouble(f"{said}; check the disk and start again: the last checkpoint is whole")


def _summed(data: bytes) -> bytes:
    return SUM.pack(zlib.crc32(data)) + data


def _sync_folder(folder: Path) -> None:
    with os_errors("sync", folder):
        descriptor = os.open(folder, os.O_RDONLY | os.O_DIRECTORY | os.O_CLOEXEC)
        try:
            os.fsync(descriptor)
        finally:
            os.close(descriptor)
