"""Sums of files in, manifest.json out; and back: a folder in, its manifest out, or BadData naming the damage.

A manifest is JSON with sorted keys and one space of indent, so that equal content gives equal bytes. It
holds the size, crc32c and sha256 of every other file of its folder, and `manifest_sha256`: the
sha256 of its own bytes with the 64 digits of that value taken as zeros.
"""

from __future__ import annotations

import errno
import hashlib
import json
import os
import re
import stat
from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from io import FileIO
from pathlib import Path
from typing import Any

import crc32c

from stream.errors import BadData, BedloadError, CannotCreate, FileTrouble, InputMissing, NoPermission

__all__ = [
    "MANIFEST",
    "PIECE",
    "FileSum",
    "canonical_json",
    "manifest_bytes",
    "open_plain",
    "os_trouble",
    "read_manifest",
    "verify_file",
    "verify_folder",
]

MANIFEST = "manifest.json"
PIECE = 4 << 20
"""Bytes read, summed or written at once: small enough to stay in cache between the two."""

_OWN_SUM = re.compile(rb'\n "manifest_sha256": "([0-9a-f]{64})"')
_FULL = {errno.ENOSPC, errno.EDQUOT, errno.EFBIG}
_REFUSED = {errno.EACCES, errno.EPERM, errno.EROFS}


def os_trouble(error: OSError, action: str, path: Path) -> BedloadError:
    """The error of ours that stands for an OSError while doing `action` ("write", "read") to `path`."""
    said = f"cannot {action} {path}: {error.strerror or error}"
    if error.errno in _FULL:
        return CannotCreate(f"{said}; what was there before is kept: free some space and start again")
    if error.errno in _REFUSED:
        return NoPermission(f"{said}; it takes a folder that this user may read and write")
    if error.errno in (errno.ENOENT, errno.ENOTDIR):
        return InputMissing(f"{said}; check the path")
    return FileTrouble(f"{said}; what was there before is kept: check the disk and start again")


class FileSum:
    """Size, crc32c and sha256 of bytes that pass in pieces."""

    __slots__ = ("_crc", "_sha", "size")

    def __init__(self) -> None:
        self.size = 0
        self._crc = 0
        self._sha = hashlib.sha256()

    def update(self, piece: memoryview) -> None:
        """Takes the next bytes."""
        self.size += piece.nbytes
        self._crc = crc32c.crc32c(piece, self._crc)
        self._sha.update(piece)

    def as_json(self) -> dict[str, Any]:
        """The sums as a manifest holds them: `size` in bytes, the others in lower-case hex."""
        return {"size": self.size, "crc32c": f"{self._crc:08x}", "sha256": self._sha.hexdigest()}


def canonical_json(value: Any) -> bytes:
    """JSON with sorted keys, ASCII only, one line a value, ending in a line end.

    Raises ValueError for NaN and infinity, TypeError for what JSON has no type for.
    """
    return json.dumps(value, sort_keys=True, indent=1, ensure_ascii=True, allow_nan=False).encode() + b"\n"


def manifest_bytes(about: Mapping[str, Any], sums: Mapping[str, dict[str, Any]]) -> bytes:
    """The manifest of a folder whose files have these sums; `files` and `manifest_sha256` are ours."""
    taken = {"files", "manifest_sha256"} & about.keys()
    if taken:
        raise ValueError(f"a manifest writes {', '.join(sorted(taken))} itself")
    blank = canonical_json({**about, "files": dict(sums), "manifest_sha256": "0" * 64})
    return _with_sum(blank, hashlib.sha256(blank).hexdigest().encode())


def _with_sum(text: bytes, digits: bytes) -> bytes:
    """The manifest `text` with the digits of its own sum replaced."""
    return _OWN_SUM.sub(b'\n "manifest_sha256": "' + digits + b'"', text)


def read_manifest(folder: Path) -> dict[str, Any]:
    """The manifest of `folder`, its own sum checked; the other files are not looked at.

    Raises InputMissing without the folder, BadData where the manifest is missing or damaged.
    """
    path = folder / MANIFEST
    if not folder.is_dir():
        raise InputMissing(f"there is no folder {folder}")
    text = b"".join(bytes(piece) for piece in _pieces_of(path))
    found = _OWN_SUM.findall(text)
    if len(found) != 1:
        raise BadData(f"{path}: expected one manifest_sha256 line, found {len(found)}; {_CURE}")
    computed = hashlib.sha256(_with_sum(text, b"0" * 64)).hexdigest()
    if computed != found[0].decode():
        raise BadData(f"{path}: expected sha256 {found[0].decode()}, found {computed}; {_CURE}")
    manifest = json.loads(text)
    for name in manifest["files"]:
        if name in ("", ".", "..", MANIFEST) or "/" in name:
            raise BadData(f"{path}: {name!r} is no name of a file beside it; {_CURE}")
    return dict(manifest)


def verify_folder(folder: Path) -> dict[str, Any]:
    """The manifest of `folder`, every file that it names read and compared with its sums.

    Raises BadData naming the file, what was expected and what was found.
    """
    manifest = read_manifest(folder)
    for name, expected in sorted(manifest["files"].items()):
        verify_file(folder / name, expected)
    return manifest


def verify_file(path: Path, expected: Mapping[str, Any], found: FileSum | None = None) -> None:
    """Compares a file with the sums that a manifest has for it; reads it unless `found` is given."""
    if found is None:
        found = FileSum()
        for piece in _pieces_of(path):
            found.update(piece)
    for what, value in found.as_json().items():
        if value != expected[what]:
            raise BadData(f"{path}: expected {what} {expected[what]}, found {value}; {_CURE}")


@contextmanager
def open_plain(path: Path) -> Iterator[FileIO]:
    """Opens a plain file that should be there, for reading, unbuffered.

    Raises BadData where a disk cannot give its bytes back, or where `path` is missing or no plain file.
    """
    try:
        descriptor = os.open(path, os.O_RDONLY | os.O_CLOEXEC | os.O_NOFOLLOW | os.O_NONBLOCK)
        with FileIO(descriptor) as file:
            if not stat.S_ISREG(os.fstat(descriptor).st_mode):
                raise BadData(f"{path}: expected a plain file, found something else; {_CURE}")
            yield file
    except OSError as error:
        if error.errno in (errno.ENOENT, errno.ENOTDIR, errno.EIO, errno.EISDIR, errno.ELOOP):
            raise BadData(f"{path}: expected a file, found: {error.strerror}; {_CURE}") from error
        raise os_trouble(error, "read", path) from error


def _pieces_of(path: Path) -> Iterator[memoryview]:
    """The bytes of a plain file, piece by piece in one buffer that is used again."""
    with open_plain(path) as file:
        buffer = memoryview(bytearray(min(PIECE, os.fstat(file.fileno()).st_size) + 1))
        while got := file.readinto(buffer):
            yield buffer[:got]


_CURE = "it is damaged or incomplete and cannot be used: take an older one, or a copy"
