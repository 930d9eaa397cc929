"""One log file that may grow, be renamed or emptied comes in; its lines and what became of it go out."""

from __future__ import annotations

import os
from pathlib import Path
from typing import Any

from stream.errors import BadSettings
from stream.message import Block
from stream.sources.lines import HEAD_BYTES, LineReader, digest_of
from stream.sources.opening import PlainStream, open_stream
from stream.sources.recognising import copy_of

__all__ = ["CURE", "GrowingFile", "Overwritten"]

QUIET_S = 2.0
CURE = "Put the log back as it was, or begin again with another state folder"


class Overwritten(BadSettings):
    """A file is not what was read of it any more. What was given out before is sound."""


class GrowingFile:
    """A file that is being read. `given`: whether a message of it was read; `offset`: the next to read."""

    def __init__(self, name: str, path: Path, partition: int, max_line_bytes: int) -> None:
        self.name, self.path = name, path
        stream = open_stream(name, path)
        self._plain = stream if isinstance(stream, PlainStream) else None
        self.reader = LineReader(
            name, stream, max_line_bytes, partition=partition, live=self._plain is not None
        )
        self.offset = 0
        self.given = False
        self._head = b""
        self._seen = (-1, 0.0)  # size, and when it was first seen

    def read(self, limit: int, before: int | None = None) -> Block:
        """As LineReader; raises BadSettings where the file is not what it was when reading began."""
        block = self.reader.read(limit, before)
        self._check()
        if len(block):
            self.given = True
            self.offset = self.reader.offset
            self._know_head()
        return block

    def skip_to(self, offset: int, given: bool) -> None:
        """Goes to an offset; raises BadSettings where the file is shorter."""
        if not self.reader.skip_to(offset):
            raise BadSettings(
                f"{self.path} is shorter than the {offset:,} bytes that were read of it. {CURE}"
            )
        self.offset = offset
        self.given = given
        self._know_head()

    def mark(self, size: int | None) -> dict[str, Any]:
        """The file in a position."""
        head = self._head
        return {"name": self.name, "sha256": digest_of(head), "of_bytes": len(head), "size": size}

    def written_ns(self) -> int:
        """When it was written to last, by its own time."""
        own = self.status()
        return self.path.stat().st_mtime_ns if own is None else own.st_mtime_ns

    def status(self) -> os.stat_result | None:
        """Of the open file, whatever its name is by now; None for a compressed one."""
        return None if self._plain is None else os.fstat(self._plain.fileno())

    def is_renamed(self, home: Path) -> bool:
        """Whether another file is at `home`, where this one was."""
        own = self.status()
        if own is None:
            return self.path != home and home.exists()
        try:
            there = os.stat(home)
        except OSError:
            return False
        return (own.st_dev, own.st_ino) != (there.st_dev, there.st_ino)

    def is_quiet(self, clock: float, now: float) -> bool:
        """Whether nothing was written for QUIET_S, by the file's own time or as seen from here."""
        own = self.status()
        if own is None or now - own.st_mtime >= QUIET_S:
            return True
        if own.st_size != self._seen[0]:
            self._seen = (own.st_size, clock)
        return clock - self._seen[1] >= QUIET_S

    def grew(self) -> bool:
        """Whether something was written behind the offset."""
        own = self.status()
        if own is None or self._plain is None or own.st_size <= self.offset:
            return False
        more = os.pread(self._plain.fileno(), min(own.st_size - self.offset, HEAD_BYTES), self.offset)
        return bool(more.strip())

    def close(self) -> None:
        """Releases the file."""
        self.reader.close()

    def _know_head(self) -> None:
        wanted = min(HEAD_BYTES, self.offset)
        if len(self._head) >= wanted:
            return
        if self._plain is not None:
            self._head = os.pread(self._plain.fileno(), wanted, 0)
        else:
            self._head = self.reader.head[:wanted]

    def _check(self) -> None:
        """What was read stays where it was: else lines may be lost, or come twice."""
        if self._plain is None:
            return
        size = os.fstat(self._plain.fileno()).st_size
        if size < self.offset or os.pread(self._plain.fileno(), len(self._head), 0) != self._head:
            copy = copy_of(self.path, self.mark(None), self.offset)
            cure = (
                "put back the file with all that it held, or begin again with another state folder"
                if copy is None
                else f"{copy.name} begins like it and holds all that was read: start again, and that is read "
                "to its end first"
            )
            raise Overwritten(
                f"{self.name} was emptied or written over while it was followed: {self.offset:,} bytes were "
                f"read, {size:,} are there. Lines written just before may be lost, so nothing more is "
                f"learned. Let logs be rotated by renaming; {cure}"
            )
