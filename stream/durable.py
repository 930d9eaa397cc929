"""Files and folders in memory in, files and folders on disk out that survive a crash at any instant.

Each is written under a temporary name on the same file system, synced, renamed, and the folder that holds
it synced. Who looks at the final name sees the old content or the new, whole. When a write
raises, the old one is still there; nothing is synced twice after a failure, because a second fsync can
report success for bytes that the first one lost: the temporary is dropped and the next write makes a new one.
"""

from __future__ import annotations

import os
import secrets
import shutil
import tempfile
from collections.abc import Callable, Iterator, Mapping
from contextlib import contextmanager, suppress
from pathlib import Path
from typing import TYPE_CHECKING, Any

from stream.errors import BadData, CannotCreate
from stream.manifest import MANIFEST, PIECE, FileSum, manifest_bytes, os_trouble, verify_folder

if TYPE_CHECKING:
    from typing_extensions import Buffer

__all__ = [
    "Content",
    "Sink",
    "make_folder",
    "move_folder",
    "os_errors",
    "point",
    "remove_folder",
    "remove_leftovers",
    "write_file",
    "write_folder",
]

_WRITING = ".writing-"
_REPLACED = ".replaced-"
_REMOVING = ".removing-"


class Sink:
    """Where a content function writes: an open file, summed as it is written."""

    __slots__ = ("_descriptor", "sum")

    def __init__(self, descriptor: int) -> None:
        self._descriptor = descriptor
        self.sum = FileSum()

    def place(self, at: int, data: Buffer) -> None:
        """Writes all of `data` (contiguous) from byte `at` on; `sum_placed` must follow."""
        view = memoryview(data)
        if view.nbytes:
            view = view.cast("B")
            while view:
                written = os.pwrite(self._descriptor, view, at)
                at, view = at + written, view[written:]

    def sum_placed(self) -> None:
        """Reads what was placed behind all that was written, and sums it."""
        buffer = memoryview(bytearray(PIECE))
        while got := os.preadv(self._descriptor, [buffer], self.sum.size):
            self.sum.update(buffer[:got])

    def write(self, data: Buffer) -> None:
        """Writes all of `data` (contiguous), piece by piece, without a copy."""
        view = memoryview(data)
        if not view.nbytes:
            return
        view = view.cast("B")
        for start in range(0, len(view), PIECE):
            piece = view[start : start + PIECE]
            self.sum.update(piece)
            while piece:
                piece = piece[os.write(self._descriptor, piece) :]


Content = bytes | Callable[[Sink], None]
"""What goes into a file: its bytes, or a function that writes them."""


@contextmanager
def os_errors(action: str, path: Path) -> Iterator[None]:
    """Turns an OSError of the block into the error of ours that fits, naming `action` and `path`."""
    try:
        yield
    except OSError as error:
        raise os_trouble(error, action, path) from error


def make_folder(folder: Path) -> None:
    """Makes `folder` (0700) and what is missing above it; one that exists is left as it is."""
    with os_errors("create", folder):
        missing = [folder, *folder.parents]
        for path in reversed(missing):
            if path.is_file():
                raise CannotCreate(f"{path} is a file: a folder is wanted there; name another place")
            if not path.is_dir():
                os.mkdir(path, 0o700)
                _sync_folder(path.parent)


def write_folder(
    parent: Path,
    name: str,
    files: Mapping[str, Content],
    manifest: Mapping[str, Any],
    make_way: Callable[[], object] | None = None,
) -> Path:
    """Writes `parent/name` with `files` and a manifest of their sums; returns its path.

    `parent` exists. A folder that is there already with the same content stays; else `make_way` is called
    when all is ready to be renamed, and what is still at `parent/name` then is replaced. Folder 0700,
    files 0600. Raises CannotCreate (disk full), NoPermission, FileTrouble; `parent/name` is then what it
    was before.
    """
    target = parent / name
    with os_errors("write", target):
        temporary = Path(tempfile.mkdtemp(prefix=_WRITING, dir=parent))
        try:
            sums = {}
            for file, content in sorted(files.items()):
                sums[file] = _write_new(temporary / file, content).as_json()
            text = manifest_bytes(manifest, sums)
            _write_new(temporary / MANIFEST, text)
            _sync_folder(temporary)
            if _holds(target, text):
                _sync_folder(parent)
                shutil.rmtree(temporary)
            else:
                if make_way is not None:
                    make_way()
                _put_in_place(temporary, target)
        except BaseException:
            shutil.rmtree(temporary, ignore_errors=True)
            raise
    return target


def _write_new(path: Path, content: Content) -> FileSum:
    descriptor = os.open(path, os.O_RDWR | os.O_CREAT | os.O_EXCL | os.O_CLOEXEC, 0o600)
    try:
        sink = Sink(descriptor)
        if callable(content):
            content(sink)
        else:
            sink.write(content)
        os.fsync(descriptor)
    finally:
        os.close(descriptor)
    return sink.sum


def _sync_folder(folder: Path) -> None:
    descriptor = os.open(folder, os.O_RDONLY | os.O_DIRECTORY | os.O_CLOEXEC)
    try:
        os.fsync(descriptor)
    finally:
        os.close(descriptor)


def _holds(folder: Path, manifest: bytes) -> bool:
    """Whether `folder` is whole and has exactly this manifest."""
    try:
        if (folder / MANIFEST).read_bytes() != manifest:
            return False
        verify_folder(folder)
    except (OSError, BadData):
        return False
    return True


def _put_in_place(temporary: Path, target: Path) -> None:
    """Renames `temporary` to `target`; one that is there waits beside it until that is durable."""
    old = target.with_name(_REPLACED + target.name)
    try:
        if target.exists():
            shutil.rmtree(old, ignore_errors=True)
            os.rename(target, old)
        os.rename(temporary, target)
        _sync_folder(target.parent)
    except BaseException:
        with suppress(OSError):
            if not temporary.exists():
                os.rename(target, temporary)
            if old.exists() and not target.exists():
                os.rename(old, target)
        raise
    shutil.rmtree(old, ignore_errors=True)


def write_file(path: Path, content: Content) -> None:
    """Writes one file (0600) in place of what is at `path`; who reads it sees the old or the new, whole.

    Raises CannotCreate (disk full, or `path` is no plain file), InputMissing without its folder,
    NoPermission, FileTrouble.
    """
    with os_errors("write", path):
        target = path.resolve()
        if target.exists() and not target.is_file():
            raise CannotCreate(f"cannot write {path}: it exists and is no plain file; name another")
        temporary = target.with_name(_WRITING + secrets.token_hex(8))
        try:
            _write_new(temporary, content)
            os.rename(temporary, target)
            _sync_folder(target.parent)
        except BaseException:
            with suppress(OSError):
                temporary.unlink()
            raise


def point(link: Path, name: str) -> None:
    """Makes the symbolic link `link` lead to `name` beside it; who follows it finds the old or the new.

    Raises CannotCreate, NoPermission, FileTrouble.
    """
    with os_errors("write", link):
        temporary = link.with_name(_WRITING + secrets.token_hex(8))
        try:
            os.symlink(name, temporary)
            os.rename(temporary, link)
            _sync_folder(link.parent)
        except BaseException:
            with suppress(OSError):
                temporary.unlink()
            raise


def move_folder(folder: Path, into: Path, name: str) -> Path:
    """Moves `folder` into the folder `into` (made if missing), as `name`, or name-2, name-3 where taken."""
    make_folder(into)
    with os_errors("move", folder):
        target, copy = into / name, 1
        while target.exists():
            copy += 1
            target = into / f"{name}-{copy}"
        os.rename(folder, target)
        _sync_folder(into)
        _sync_folder(folder.parent)
    return target


def remove_folder(folder: Path) -> None:
    """Removes `folder` and all in it. Killed half-way it is gone from its name, not damaged under it."""
    with os_errors("remove", folder):
        doomed = folder.with_name(f"{_REMOVING}{folder.name}-{secrets.token_hex(8)}")
        os.rename(folder, doomed)
        shutil.rmtree(doomed)


def remove_leftovers(parent: Path) -> list[str]:
    """Takes out of `parent` what a killed writer left under temporary names; returns those names.

    A folder that was about to be replaced goes back to its name. Only for who holds the state folder.
    """
    seen = []
    with os_errors("clean", parent):
        for path in sorted(parent.iterdir()):
            if not path.name.startswith((_WRITING, _REPLACED, _REMOVING)):
                continue
            seen.append(path.name)
            home = path.with_name(path.name.removeprefix(_REPLACED))
            if path.name.startswith(_REPLACED) and not home.exists():
                os.rename(path, home)
            elif path.is_dir() and not path.is_symlink():
                shutil.rmtree(path)
            else:
                path.unlink()
        if seen:
            _sync_folder(parent)
    return seen
