"""Rejected messages in, a file to repair and replay them from out; and back, for who looks into it.

One JSON object a line in rejects.jsonl: number (1, 2, ... over the whole run), file or topic, partition,
offset, reason, detail, and the original as `line`, or `line_base64` where it is not UTF-8, with `cut` where
it is only the beginning. The number is what a resumed run cuts the file back by, so a file that was repaired
and removed in between is no trouble.
"""

from __future__ import annotations

import base64
import math
import mmap
import os
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

import msgspec

from stream.durable import make_folder, os_errors
from stream.errors import BedloadError
from stream.message import Block, Reject

__all__ = ["FILE_NAME", "KeptReject", "RejectFile", "kept_rejects"]

FILE_NAME = "rejects.jsonl"
KEPT_BYTES = 64 * 1024
PENDING_BYTES = 1 << 20


class KeptReject(msgspec.Struct):
    """A rejected message as it is kept; the original is `line` or, where that is no UTF-8, `line_base64`."""

    number: int
    file: str
    partition: int
    offset: int
    reason: str
    detail: str
    line: str | None = None
    line_base64: str | None = None
    cut: bool = False


def kept_rejects(folder: Path) -> Iterator[KeptReject]:
    """The rejects kept in `folder`, oldest first; a record that is just being written is passed over.

    A run that is alive may still take the last ones back, to write them again. Raises NoPermission,
    FileTrouble.
    """
    path = folder / FILE_NAME
    with os_errors("read", path):
        if not path.exists():
            return
        with path.open("rb") as file:
            for record in file:
                try:
                    yield msgspec.json.decode(record, type=KeptReject)
                except msgspec.MsgspecError:
                    continue


class RejectFile:
    """Rejects of one run in `folder`/rejects.jsonl (0600, folder 0700), made at the first reject.

    `count`: those that the run had so far; the file is cut back to them. Raises CannotCreate, NoPermission,
    FileTrouble.
    """

    def __init__(self, folder: Path, count: int) -> None:
        self.path = folder / FILE_NAME
        self.where = str(self.path)
        self._pending = bytearray()
        self._file: int | None = None
        self._fault: BedloadError | None = None
        self._cut_back(count)

    def put(self, number: int, block: Block, reject: Reject) -> None:
        """Takes one reject; written now and then, at the latest at `sync`."""
        line = block.value(reject.row)
        record: dict[str, Any] = {
            "number": number,
            "file": block.topic,
            "partition": block.partition,
            "offset": int(block.offsets[reject.row]),
            "reason": reject.reason,
            "detail": reject.detail,
        }
        kept = line[:KEPT_BYTES]
        try:
            record["line"] = kept.decode()
        except UnicodeDecodeError:
            record["line_base64"] = base64.b64encode(kept).decode()
        if reject.reason == "line_too_long" or len(line) > KEPT_BYTES:
            record["cut"] = True
        self._pending += msgspec.json.encode(record) + b"\n"
        if len(self._pending) >= PENDING_BYTES:
            self._put_down()

    def sync(self) -> None:
        """Returns when everything added is on disk. Once it failed it fails for good: a second fsync may
        report success for what the first one lost."""
        self._put_down()
        if self._file is not None:
            with self._trouble("sync"):
                os.fsync(self._file)

    def close(self) -> None:
        """Writes what is waiting, if writing has not failed before, and releases the file."""
        if self._fault is None:
            self._put_down()
        if self._file is not None:
            os.close(self._file)
            self._file = None

    def _put_down(self) -> None:
        """Writes what is waiting; makes the file at the first time."""
        if self._fault is not None:
            raise self._fault
        if not self._pending:
            return
        if self._file is None:
            make_folder(self.path.parent)
            with self._trouble("create"):
                self._file = _open_to_append(self.path)
        with self._trouble("write"):
            waiting = bytes(self._pending)
            while waiting:
                waiting = waiting[os.write(self._file, waiting) :]
        self._pending.clear()

    @contextmanager
    def _trouble(self, action: str) -> Iterator[None]:
        try:
            with os_errors(action, self.path):
                yield
        except BedloadError as fault:
            self._fault = fault
            raise

    def _cut_back(self, count: int) -> None:
        """Drops what the file holds past the first `count` rejects, and a record torn by a crash."""
        with os_errors("cut back", self.path):
            if not self.path.exists() or not self.path.stat().st_size:
                return
            with self.path.open("r+b") as file:
                with mmap.mmap(file.fileno(), 0, access=mmap.ACCESS_READ) as content:
                    size = end = len(content)
                    while end:
                        start = content.rfind(b"\n", 0, end - 1) + 1
                        if _number(content[start:end]) <= count:
                            break
                        end = start
                if end < size:
                    file.truncate(end)
                    os.fsync(file.fileno())


def _open_to_append(path: Path) -> int:
    """Descriptor of the file, made 0600 where it is missing, its name synced."""
    flags = os.O_WRONLY | os.O_APPEND | os.O_CREAT | os.O_CLOEXEC | os.O_NOFOLLOW
    descriptor = os.open(path, flags, 0o600)
    folder = os.open(path.parent, os.O_RDONLY | os.O_DIRECTORY | os.O_CLOEXEC)
    try:
        os.fsync(folder)
    finally:
        os.close(folder)
    return descriptor


class _Numbered(msgspec.Struct):
    number: int


def _number(record: bytes) -> float:
    """The number of a record; infinite for one that is not whole."""
    try:
        return msgspec.json.decode(record, type=_Numbered).number if record.endswith(b"\n") else math.inf
    except msgspec.MsgspecError:
        return math.inf
