"""Patterns of log files and marks of files that were read come in; where those files are now goes out.

A file is known by its beginning (`sha256` of its first `of_bytes` bytes, decompressed), under whatever name.
"""

from __future__ import annotations

import re
from collections.abc import Iterable, Iterator, Mapping, Sequence
from contextlib import suppress
from pathlib import Path
from typing import Any

from stream.errors import BadData, InputMissing
from stream.sources.files import LogFile, matching_files
from stream.sources.lines import HEAD_BYTES, digest_of
from stream.sources.opening import open_stream

__all__ = ["Recognition", "copy_of", "has_more", "is_blank"]

Mark = Mapping[str, Any]

ROTATED = re.compile(r"[.-][0-9][0-9T:._-]*(\.gz|\.zst)?")
"""What a file gets behind its name when it is moved out of the way."""


def has_more(path: Path, offset: int) -> bool:
    """Whether a plain file holds anything but blanks behind an offset."""
    if path.suffix in (".gz", ".zst") or _size(path) <= offset:
        return False
    try:
        with path.open("rb") as file:
            file.seek(offset)
            return bool(file.read(HEAD_BYTES).strip())
    except OSError:
        return False


def is_blank(path: Path) -> bool:
    """Whether a file holds nothing but a few blanks."""
    head = _head(path)
    return len(head) < HEAD_BYTES and not head.strip()


def copy_of(own: Path, mark: Mark, size: int) -> Path | None:
    """What was moved aside from `own`, begins like the mark and has at least `size` bytes (plain files)."""
    for path in _moved_aside(own):
        if _known(path, [mark]) is not None and (path.suffix in (".gz", ".zst") or _size(path) >= size):
            return path
    return None


class Recognition:
    """The files of a log on disk, known by their beginnings."""

    def __init__(self, patterns: Sequence[str], folder: Path) -> None:
        self.patterns = patterns
        self._folder = folder

    def matching(self) -> list[LogFile]:
        """Files that match now and are not empty, sorted; none where one is just being renamed."""
        try:
            files = matching_files(self.patterns, self._folder)
        except InputMissing:
            return []
        return [file for file in files if _size(file.path)]

    def known(self, path: Path, marks: Iterable[Mark]) -> Mark | None:
        """The mark that a file begins like; None for a file that was not read."""
        return _known(path, marks)

    def find(self, mark: Mark) -> Path | None:
        """Where the file of a mark is now: under its name, else under another that matches or follows it."""
        own = self._folder / str(mark["name"])
        matching = (file.path for file in self.matching())
        for path in (own, *matching, *_moved_aside(own)):
            if self.known(path, [mark]) is not None:
                return path
        return None

    def missed(self, own: Path, since_ns: int, marks: Sequence[Mark]) -> list[str]:
        """Names of files that were moved aside from `own` after `since_ns` and that no mark knows."""
        return [
            path.name
            for path in _moved_aside(own)
            if _written_ns(path) > since_ns and not is_blank(path) and self.known(path, marks) is None
        ]


def _known(path: Path, marks: Iterable[Mark]) -> Mark | None:
    head = _head(path)
    digests: dict[int, str] = {}
    for mark in marks:
        length = mark["of_bytes"]
        if 0 < length <= len(head):
            if length not in digests:
                digests[length] = digest_of(head[:length])
            if digests[length] == mark["sha256"]:
                return mark
    return None


def _moved_aside(own: Path) -> Iterator[Path]:
    with suppress(OSError):
        for path in sorted(own.parent.iterdir()):
            if path.name.startswith(own.name) and ROTATED.fullmatch(path.name[len(own.name) :]):
                yield path


def _head(path: Path) -> bytes:
    """The first bytes of a file; none where it went away or cannot be unpacked."""
    try:
        stream = open_stream(str(path), path)
    except InputMissing:
        return b""
    try:
        return stream.read(HEAD_BYTES)[:HEAD_BYTES]
    except BadData:
        return b""
    finally:
        stream.close()


def _size(path: Path) -> int:
    try:
        return path.stat().st_size
    except OSError:
        return 0


def _written_ns(path: Path) -> int:
    try:
        return path.stat().st_mtime_ns
    except OSError:
        return 0
