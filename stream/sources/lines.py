"""The bytes of one log file come in; blocks of whole lines with their offsets go out."""

from __future__ import annotations

import hashlib

import numpy as np
import numpy.typing as npt

from stream.errors import BedloadError
from stream.message import Block, Int64s
from stream.sources.files import STANDARD_INPUT
from stream.sources.opening import ByteStream, PlainStream

__all__ = ["HEAD_BYTES", "LineReader", "digest_of", "empty_block"]

CHUNK_BYTES = 512 * 1024
HEAD_BYTES = 4096
BYTE_ORDER_MARK = b"\xef\xbb\xbf"
JSON_BLANKS = b" \t\r"
NO_LINES = np.zeros(0, np.int64)


def digest_of(beginning: bytes) -> str:
    """sha256 of the beginning of a file, by which it is known again."""
    return hashlib.sha256(beginning).hexdigest()


def empty_block(topic: str) -> Block:
    """A block without messages."""
    return Block(topic, 0, b"", NO_LINES, NO_LINES, NO_LINES)


class LineReader:
    """Cuts a stream of bytes into lines, a chunk at a time.

    Lines end in LF or CRLF; the last one need not. Blank lines are no messages. Of a line over
    `max_line_bytes` only its first max_line_bytes + 1 bytes are given, so that it can be told and
    is never held whole when it is larger than a chunk. A byte order mark at the start is skipped.

    A `live` one is of a file that may grow: its unfinished last line waits, until `finish`.

    `offset`: where the message after the last one given begins, in decompressed bytes.
    `head`: the first bytes of the file, up to HEAD_BYTES (3 of standard input).
    """

    def __init__(
        self, name: str, stream: ByteStream, max_line_bytes: int, *, partition: int = 0, live: bool = False
    ) -> None:
        self.name = name
        self.live = live
        self.offset = 0
        self._partition = partition
        self._stream = stream
        self._max = max_line_bytes
        self._base = 0  # offset of the chunk in the file
        self._chunk = b""
        self._ends = NO_LINES  # line feeds in the chunk
        self._next = 0  # index into _ends
        self._at = 0  # where the next line begins in the chunk
        self._ended = False
        self._fault: BedloadError | None = None
        self._scratch = np.empty(0, np.bool_)
        head_bytes = len(BYTE_ORDER_MARK) if name == STANDARD_INPUT else HEAD_BYTES  # a pipe may be slow
        while len(self._chunk) < head_bytes and not self._ended and self._fault is None:
            self._fill()
        self._ends = self._line_feeds(0)
        self.head = self._chunk[:head_bytes]
        if self.head.startswith(BYTE_ORDER_MARK):
            self._at = len(BYTE_ORDER_MARK)

    def read(self, limit: int, before: int | None = None) -> Block:
        """Up to `limit` lines that begin before an offset; an empty block at the end of what is there.

        Raises what the stream raises.
        """
        while before is None or self._base + self._at < before:
            if self._next < len(self._ends):
                block = self._cut(limit, before)
                if len(block):
                    return block
            elif len(self._chunk) - self._at > self._max + 1:
                return self._long_line()
            elif self._fault is not None:
                raise self._fault
            elif not self._ended:
                self._fill()
            elif self.live:
                self._ended = False
                break
            elif self._at < len(self._chunk):
                self._ends, self._next = np.array([len(self._chunk)]), 0
            else:
                break
        return empty_block(self.name)

    def finish(self) -> None:
        """The file will not grow any more: its last line is one, though it has no end."""
        self.live = False

    def skip_to(self, offset: int) -> bool:
        """Goes to a byte offset at or past the head; False where the file is shorter than that."""
        if isinstance(self._stream, PlainStream):
            self._base, self._chunk, self._ended = offset, b"", False
            if not self._stream.skip_to(offset):
                return False
        while offset > self._base + len(self._chunk) and not self._ended:
            self._base += len(self._chunk)
            self._chunk = self._stream.read(CHUNK_BYTES)
            self._ended = not self._chunk
        self.offset = offset
        self._at = offset - self._base
        if self._at > len(self._chunk):
            return False
        self._ends, self._next = self._line_feeds(self._at), 0
        return True

    def bytes_done(self) -> int:
        """How far the file on disk was read, compressed bytes for a compressed one."""
        waiting = len(self._chunk) - self._at if isinstance(self._stream, PlainStream) else 0
        return self._stream.bytes_on_disk - waiting

    def close(self) -> None:
        """Releases the file."""
        self._stream.close()

    def _fill(self) -> None:
        """Moves the unfinished line to the front and reads on behind it.

        What it reads doubles with a line that is longer than a chunk, so that no byte is copied often.
        """
        rest = self._chunk[self._at :]
        try:
            chunk = self._stream.read(max(CHUNK_BYTES, len(rest)), rest)
        except BedloadError as fault:
            self._fault = fault
            return
        self._base += self._at
        self._at = 0
        self._chunk = chunk
        self._ends, self._next = self._line_feeds(len(rest)), 0
        self._ended = len(chunk) == len(rest)

    def _cut(self, limit: int, before: int | None) -> Block:
        """The next `limit` lines of the chunk, without the blank ones."""
        feeds = self._ends[self._next : self._next + limit]
        starts = np.empty_like(feeds)
        starts[0] = self._at
        starts[1:] = feeds[:-1] + 1
        if before is not None:
            starts = starts[: np.searchsorted(starts, before - self._base)]
            feeds = feeds[: len(starts)]
        self._next += len(feeds)
        self._at = min(int(feeds[-1]) + 1, len(self._chunk))
        data = np.frombuffer(self._chunk, np.uint8)
        ends = feeds - ((feeds > starts) & (data[feeds - 1] == ord("\r")))
        kept = self._kept(data, starts, ends)
        if kept is not None:
            feeds, starts, ends = feeds[kept], starts[kept], ends[kept]
        if len(feeds):
            self.offset = self._base + min(int(feeds[-1]) + 1, len(self._chunk))
        np.minimum(ends, starts + (self._max + 1), out=ends)
        return Block(self.name, self._partition, self._chunk, starts, ends, starts + self._base)

    def _kept(
        self, data: npt.NDArray[np.uint8], starts: Int64s, ends: Int64s
    ) -> npt.NDArray[np.bool_] | None:
        """Which lines are not blank; None for all. One over the limit counts as not blank: how much of it
        lies in the chunk must not decide."""
        suspects = np.flatnonzero(data[starts] <= ord(" "))
        if not len(suspects):
            return None
        kept = ends > starts
        for row in suspects[kept[suspects]]:
            line = self._chunk[starts[row] : ends[row]]
            kept[row] = len(line) > self._max or bool(line.strip(JSON_BLANKS))
        return kept

    def _long_line(self) -> Block:
        """The beginning of a line that is over the limit and goes on past the chunk; skips the rest.

        Nothing while the line has no end in a file that may grow.
        """
        value = self._chunk[self._at : self._at + self._max + 1]
        start = self._base + self._at
        feed = -1
        while feed < 0 and self._chunk:
            self._base += len(self._chunk)
            self._chunk = self._stream.read(CHUNK_BYTES)
            feed = self._chunk.find(b"\n")
        if feed < 0 and self.live:
            self.skip_to(start)
            return empty_block(self.name)
        self._ended = not self._chunk
        self._at = feed + 1
        self._ends, self._next = self._line_feeds(self._at), 0
        self.offset = self._base + self._at
        return Block(
            self.name, self._partition, value, np.array([0]), np.array([len(value)]), np.array([start])
        )

    def _line_feeds(self, start: int) -> Int64s:
        """Positions of the line feeds in the chunk from `start` on, ascending.

        Looks at eight bytes at a time first: numpy's search for true values costs a cycle an element.
        """
        data = np.frombuffer(self._chunk, np.uint8)[start:]
        padded = (len(data) + 7) // 8 * 8
        if padded > len(self._scratch):
            self._scratch = np.empty(padded, np.bool_)
        is_feed = self._scratch[:padded]
        np.equal(data, ord("\n"), out=is_feed[: len(data)])
        is_feed[len(data) :] = False
        words = np.flatnonzero(is_feed.view(np.uint64) != 0)
        inside = np.flatnonzero(is_feed.reshape(-1, 8)[words])
        return np.asarray(words[inside >> 3] * 8 + (inside & 7) + start, np.int64)
