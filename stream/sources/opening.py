"""A path comes in; its bytes go out piece by piece, decompressed, with faults named by file and place.

Memory stays bounded for files made to swell: compressed data is fed to the decompressor in pieces of
4 KiB, whose output is at most about 4 MiB (gzip) or 130 MiB (zstd, 128 KiB from each four-byte block).
"""

from __future__ import annotations

import os
import sys
import zlib
from collections.abc import Callable
from io import BufferedReader
from pathlib import Path
from typing import BinaryIO, Protocol, cast

from stream.errors import BadData, BedloadError, FileTrouble, InputMissing, NoPermission
from stream.sources.files import STANDARD_INPUT

__all__ = ["ByteStream", "CompressedStream", "PlainStream", "open_stream", "trouble"]

PIECE_BYTES = 4096


class ByteStream(Protocol):
    """Bytes in order. `bytes_on_disk`: how far the file itself was read (compressed bytes)."""

    bytes_on_disk: int

    def read(self, size: int, rest: bytes = b"") -> bytes:
        """`rest`, which is the last that was read, and about `size` bytes more; none more at the end."""
        ...

    def close(self) -> None:
        """Releases the file."""
        ...


class PlainStream:
    """A file as it is."""

    def __init__(self, name: str, file: BinaryIO) -> None:
        self._name = name
        self._file = file
        self.bytes_on_disk = 0

    def read(self, size: int, rest: bytes = b"") -> bytes:
        """`rest`, read once more (quicker than joining), and up to `size` more; raises FileTrouble."""
        try:
            if rest:
                self._file.seek(-len(rest), os.SEEK_CUR)
            data = self._file.read(size + len(rest))
        except OSError as error:
            raise trouble(self._name, error) from None
        self.bytes_on_disk += len(data) - len(rest)
        return data

    def fileno(self) -> int:
        """The descriptor of the open file, whatever its name is by now."""
        return self._file.fileno()

    def skip_to(self, offset: int) -> bool:
        """Goes to byte `offset`; False where the file is shorter than that."""
        if self._file.seek(0, os.SEEK_END) < offset:
            return False
        self.bytes_on_disk = self._file.seek(offset)
        return True

    def close(self) -> None:
        """Releases the file."""
        self._file.close()


class PipeStream:
    """Standard input or a named pipe: read once, from the beginning."""

    bytes_on_disk = 0

    def __init__(self, name: str, file: BufferedReader) -> None:
        self._name = name
        self._file = file

    def read(self, size: int, rest: bytes = b"") -> bytes:
        """`rest` and what has arrived, up to `size` bytes; waits for the first. Raises FileTrouble."""
        try:
            return rest + self._file.read1(size)
        except OSError as error:
            raise trouble(self._name, error) from None

    def close(self) -> None:
        """Releases the pipe; standard input stays open."""
        if self._file is not sys.stdin.buffer:
            self._file.close()


class _Frame(Protocol):
    """Decompressor of one gzip member or zstd frame."""

    @property
    def eof(self) -> bool: ...
    @property
    def unused_data(self) -> bytes: ...
    def decompress(self, data: bytes, /) -> bytes: ...


class CompressedStream:
    """A file of gzip members or zstd frames, one after the other.

    `new_frame` makes the decompressor of one, `faults` is what it raises, `padding` the byte that may
    stand between two and after the last. At a fault what was decompressed before it is handed out
    first; the next `read` raises BadData.
    """

    def __init__(
        self,
        name: str,
        file: BinaryIO,
        new_frame: Callable[[], _Frame],
        faults: type[Exception],
        padding: bytes = b"",
    ) -> None:
        self._name = name
        self._file = file
        self._new_frame = new_frame
        self._faults = faults
        self._padding = padding
        self._frame: _Frame | None = None
        self._input = b""
        self._fault: BedloadError | None = None
        self._produced = 0
        self.bytes_on_disk = 0

    def read(self, size: int, rest: bytes = b"") -> bytes:
        """`rest` and at least `size` bytes more, unless the end or a fault comes first."""
        parts = [rest]
        length = 0
        while length < size and self._fault is None:
            if not self._input:
                self._input = self._read_piece()
                self.bytes_on_disk += len(self._input)
            if not self._input:
                if self._frame is not None:
                    self._fault = self._bad("ends in the middle of its compressed data")
                break
            part = self._decompress()
            parts.append(part)
            length += len(part)
        if not length and self._fault is not None:
            raise self._fault
        self._produced += length
        return b"".join(parts)

    def _read_piece(self) -> bytes:
        try:
            return self._file.read(PIECE_BYTES)
        except OSError as error:
            raise trouble(self._name, error) from None

    def _decompress(self) -> bytes:
        """What the input at hand gives, up to the end of a frame."""
        if self._frame is None:
            self._input = self._input.lstrip(self._padding)
            if not self._input:
                return b""
            self._frame = self._new_frame()
        try:
            part = self._frame.decompress(self._input)
        except self._faults as fault:
            self._fault = self._bad(f"is damaged ({fault})")
            return b""
        ended = self._frame.eof
        self._input = self._frame.unused_data if ended else b""
        if ended:
            self._frame = None
        return part

    def _bad(self, what: str) -> BadData:
        return BadData(
            f"{self._name}: the file {what} near its byte {self.bytes_on_disk:,}, decompressed byte "
            f"{self._produced:,} or later; everything before was read. Replace the file by a whole one"
        )

    def close(self) -> None:
        """Releases the file."""
        self._file.close()


def open_stream(name: str, path: Path) -> ByteStream:
    """Opens `path` ("-": standard input) for reading; .gz and .zst are decompressed.

    Raises InputMissing, NoPermission or FileTrouble.
    """
    if name == STANDARD_INPUT:
        return PipeStream("standard input", cast(BufferedReader, sys.stdin.buffer))
    try:
        file = path.open("rb")
    except OSError as error:
        raise trouble(name, error) from None
    if path.suffix == ".gz":
        return CompressedStream(name, file, lambda: zlib.decompressobj(wbits=31), zlib.error, b"\0")
    if path.suffix == ".zst":
        import zstandard

        decompressor = zstandard.ZstdDecompressor()
        return CompressedStream(name, file, decompressor.decompressobj, zstandard.ZstdError)
    if not file.seekable():
        return PipeStream(name, file)
    return PlainStream(name, cast(BinaryIO, file.detach()))


def trouble(name: str, error: OSError) -> BedloadError:
    """The error of ours for an OSError while reading a file."""
    kind = {FileNotFoundError: InputMissing, PermissionError: NoPermission}.get(type(error), FileTrouble)
    return kind(f"{name}: cannot be read ({error.strerror or error}); check the file and its permissions")
