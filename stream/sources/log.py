"""Patterns of log files come in; blocks of raw messages go out, in order, from any position that was left.

A position is {"files": [{"name", "sha256", "of_bytes", "size"}, ...], "offset": next byte}: the files read
or begun so far, the last of them the current one, each known by a digest of its first `of_bytes` bytes;
`size` is the length on disk of a file read to its end, null for the current one. It depends on how many
messages were read and on nothing else.
"""

from __future__ import annotations

import os
from collections.abc import Sequence
from pathlib import Path
from typing import Any

from stream.errors import BadSettings
from stream.message import Block, Position
from stream.sources.files import STANDARD_INPUT, LogFile, matching_files
from stream.sources.lines import LineReader, digest_of, empty_block
from stream.sources.opening import open_stream, trouble

__all__ = ["LogSource", "read_head"]

CURE = "Put the log back as it was, or start again from its beginning with a fresh state folder"


class LogSource:
    """The messages of a log: JSON Lines files, sorted by name, each read once (see docs/message-format.md).

    Implements stream.message.Source. Raises InputMissing (no file matches), BadData (a damaged
    compressed file, after the messages before the damage), NoPermission, FileTrouble.
    """

    def __init__(self, paths: Sequence[str], folder: Path, max_line_bytes: int) -> None:
        self._files = matching_files(paths, folder)
        self._max_line_bytes = max_line_bytes
        self._sizes = [_size_on_disk(file) for file in self._files]
        self._marks: list[dict[str, Any]] = []  # of files opened so far
        self._reader: LineReader | None = None
        self._reached = 0  # files that the position holds
        self._offset = 0

    def read(self, limit: int) -> Block:
        """Up to `limit` messages of one file; an empty block at the end of the log."""
        while True:
            if self._reader is None:
                if len(self._marks) == len(self._files):
                    return empty_block(self._files[-1].name)
                self._open_next()
            assert self._reader is not None
            block = self._reader.read(limit)
            if len(block):
                self._reached = len(self._marks)
                self._offset = self._reader.offset
                return block
            self._marks[-1]["size"] = self._reader.bytes_done()
            self._close_reader()

    def position(self) -> Position:
        """Next message to read; see the top of this file."""
        marks = [dict(mark) for mark in self._marks[: self._reached]]
        if marks:
            marks[-1]["size"] = None
        return {"files": marks, "offset": self._offset}

    def seek(self, position: Position) -> None:
        """Goes to a position, once every file before it proved to be as it was.

        Raises BadSettings: a file is missing, changed, has grown after it was read to its end, or is
        new and sorts before the position; or the log is standard input.
        """
        marks: list[dict[str, Any]] = position["files"]
        if any(name == STANDARD_INPUT for name in [m["name"] for m in marks] + [self._files[0].name]):
            raise BadSettings(
                "standard input cannot be resumed: what was read from it is gone. Save the messages to "
                "a file and name that in feed.paths, or start again with a fresh state folder"
            )
        self._close_reader()
        self._marks = []
        for mark in marks:
            self._check_name(mark["name"])
            self._open_next()
            assert self._reader is not None
            self._check_content(mark, self._reader.head)
            if mark is not marks[-1]:
                self._marks[-1]["size"] = mark["size"]
                self._close_reader()
        self._reached = len(marks)
        self._offset = position["offset"]
        if self._reader is not None and not self._reader.skip_to(self._offset):
            raise BadSettings(
                f"{marks[-1]['name']} is shorter than the {self._offset:,} bytes that were read of it. {CURE}"
            )

    def fraction_read(self) -> float | None:
        """Share of the bytes on disk read so far, 0 to 1; None for standard input."""
        if self._files[0].name == STANDARD_INPUT:
            return None
        begun = len(self._marks)
        if self._reader is None:
            done = sum(self._sizes[:begun])
        else:
            done = sum(self._sizes[: begun - 1]) + self._reader.bytes_done()
        total = sum(self._sizes)
        return min(done / total, 1.0) if total else 1.0

    def close(self) -> None:
        """Releases the file that is open."""
        self._close_reader()

    def _open_next(self) -> None:
        file = self._files[len(self._marks)]
        self._reader = LineReader(file.name, open_stream(file.name, file.path), self._max_line_bytes)
        head = self._reader.head
        self._marks.append(
            {"name": file.name, "sha256": digest_of(head), "of_bytes": len(head), "size": None}
        )

    def _close_reader(self) -> None:
        if self._reader is not None:
            self._reader.close()
            self._reader = None

    def _check_name(self, expected: str) -> None:
        """The next file must be the one that was read there."""
        names = [file.name for file in self._files]
        if expected not in names:
            raise BadSettings(
                f"{expected} was read before the position to resume from, but no pattern of feed.paths "
                f"matches it now. {CURE}"
            )
        found = names[len(self._marks)]
        if found != expected:
            raise BadSettings(
                f"{found} is new and sorts before {expected}, which was read already, so it would be passed "
                f"over. Give it a name that sorts after every file read so far. {CURE}"
            )

    def _check_content(self, mark: dict[str, Any], head: bytes) -> None:
        """The file that is open must begin as it did, and one that was finished must not have grown."""
        name, begun = mark["name"], mark["of_bytes"]
        if digest_of(head[:begun]) != mark["sha256"]:
            raise BadSettings(
                f"{name} is not the file that was read: its first {begun:,} bytes have changed. {CURE}"
            )
        size = self._sizes[len(self._marks) - 1]
        if mark["size"] is not None and size != mark["size"]:
            raise BadSettings(
                f"{name} had {mark['size']:,} bytes when it was read to its end and has {size:,} now; what "
                f"was added would be passed over. Move it to a file that sorts last. {CURE}"
            )


def read_head(path: str, messages: int, max_line_bytes: int = 1 << 20) -> list[bytes]:
    """The first `messages` lines of a log file, decompressed; "-" is standard input.

    Raises what LogSource raises.
    """
    reader = LineReader(path, open_stream(path, Path(path)), max_line_bytes)
    lines: list[bytes] = []
    try:
        while len(lines) < messages:
            block = reader.read(messages - len(lines))
            if not len(block):
                break
            lines.extend(block.value(row) for row in range(len(block)))
    finally:
        reader.close()
    return lines


def _size_on_disk(file: LogFile) -> int:
    try:
        return 0 if file.name == STANDARD_INPUT else os.stat(file.path).st_size
    except OSError as error:
        raise trouble(file.name, error) from None
