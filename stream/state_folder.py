"""A path in, the state folder held under it out: LOCK, checkpoints/, snapshots/, rejects/, journal."""

from __future__ import annotations

import fcntl
import os
import re
import socket
from pathlib import Path
from types import TracebackType

from stream.durable import make_folder, os_errors, remove_folder, remove_leftovers
from stream.errors import TryLater
from stream.journal import FILE_NAME

__all__ = ["StateFolder"]


class StateFolder:
    """The state folder, held for as long as this object is open: one process at a time.

    Opening makes what is missing (folders 0700, files 0600), takes the lock and removes what a killed
    writer left. Raises TryLater naming pid and host of the holder, NoPermission, CannotCreate,
    FileTrouble. The lock goes with the process, however it ends.
    """

    def __init__(self, path: Path) -> None:
        self.path = path
        self.checkpoints = path / "checkpoints"
        self.snapshots = path / "snapshots"
        self.rejects = path / "rejects"
        self.journal = path / FILE_NAME
        make_folder(path)
        self._lock = _take_lock(path / "LOCK")
        try:
            for folder in (self.checkpoints, self.snapshots, self.rejects):
                make_folder(folder)
            for folder in (path, self.checkpoints, self.snapshots):
                remove_leftovers(folder)
        except BaseException:
            self.close()
            raise

    def used(self) -> bool:
        """Whether there is a checkpoint, whole or broken or set aside, or a journal."""
        with os_errors("read", self.checkpoints):
            names = (path.name for path in self.checkpoints.rglob("*") if path.is_dir())
            return self.journal.exists() or any(re.match(r"\d", name) for name in names)

    def clear(self) -> None:
        """Removes all checkpoints, rejects and the journal; snapshots stay."""
        for folder in (self.checkpoints, self.rejects):
            remove_folder(folder)
            make_folder(folder)
        with os_errors("remove", self.journal):
            self.journal.unlink(missing_ok=True)

    def close(self) -> None:
        """Lets the folder go."""
        if self._lock >= 0:
            os.close(self._lock)
            self._lock = -1

    def __enter__(self) -> StateFolder:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.close()


def _take_lock(path: Path) -> int:
    """The descriptor that holds the lock; `path` then holds `pid host`."""
    with os_errors("lock", path):
        descriptor = os.open(path, os.O_RDWR | os.O_CREAT | os.O_CLOEXEC, 0o600)
        try:
            try:
                fcntl.flock(descriptor, fcntl.LOCK_EX | fcntl.LOCK_NB)
            except BlockingIOError:
                pid, _, host = os.read(descriptor, 1024).decode("utf-8", "replace").strip().partition(" ")
                raise TryLater(
                    f"{path.parent} is in use by process {pid or '(unknown)'} on host {host or '(unknown)'}: "
                    "stop that one or wait, or use another state.folder"
                ) from None
            os.ftruncate(descriptor, 0)
            os.pwrite(descriptor, f"{os.getpid()} {socket.gethostname()}\n".encode(), 0)
        except BaseException:
            os.close(descriptor)
            raise
    return descriptor
