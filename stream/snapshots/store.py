"""The snapshots of one state folder: weights in, folders by number of messages out; pins, choice, pruning.

A name is the number of messages, zero-padded, of the present history; `earlier-K-NUMBER` is a snapshot of
a history that was left (started afresh, or gone back to an older checkpoint). `pinned/NAME` is an
empty file for each pinned snapshot; `in-use` names the one that readers were told to take; `current` is a
symbolic link to the one that they take, told or not.
"""

from __future__ import annotations

import fcntl
import os
import re
from collections.abc import Collection, Iterator
from contextlib import contextmanager
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import numpy as np

from stream.durable import make_folder, move_folder, os_errors, point, remove_folder, write_file
from stream.errors import BadData, InputMissing
from stream.manifest import read_manifest
from stream.retention import Retention
from stream.snapshots.layout import About, Snapshot, check_format, read_snapshot, write_snapshot
from stream.weights import Weights

__all__ = ["SnapshotEntry", "Snapshots"]

_NAME = re.compile("(?:earlier-([0-9]{1,9})-)?([0-9]{15,20})")


@dataclass(frozen=True, slots=True)
class SnapshotEntry:
    """A snapshot in the list. Where its manifest cannot be read, `manifest` is empty and `trouble` says why.

    `in_use`: readers were told to take this one.
    """

    name: str
    path: Path
    messages: int
    size_bytes: int
    pinned: bool
    in_use: bool
    manifest: dict[str, Any]
    trouble: str | None


def _same(path: Path, weights: Weights, about: About) -> bool:
    """Whether the snapshot at `path` is whole and tells of the same weights, by the same program."""
    try:
        found = read_snapshot(path)
    except (BadData, InputMissing):
        return False
    there = found.weights
    return (
        replace(found.about, settings={}) == replace(about, settings={})
        and (there.learned, there.intercept, there.names, there.fingerprint)
        == (weights.learned, weights.intercept, weights.names, weights.fingerprint)
        and all(
            np.array_equal(getattr(there, name), getattr(weights, name))
            for name in ("addresses", "values", "messages")
        )
    )


class Snapshots:
    """The snapshots in `folder`; of those neither pinned nor in use `keep` stay when pruned: the newest
    (>= 1), and some by time.

    Readers need no lock: what has a name is whole and never changes. Writing and pruning are for who
    holds the state folder; pinning and choosing may happen beside it.
    """

    def __init__(self, folder: Path, keep: int | Retention) -> None:
        self.folder = folder
        self._keep = keep if isinstance(keep, Retention) else Retention(keep)
        self._pins = folder / "pinned"
        self._in_use = folder / "in-use"
        self._current = folder / "current"

    def write(self, messages: int, weights: Weights, about: About) -> Path:
        """Writes the weights after `messages` messages, then prunes.

        One that is there already with the same weights and metrics stays, whatever settings it names: nothing
        was learned since. Else snapshots at this number or beyond are of a history that was left, and become
        `earlier-K-NUMBER`. Raises CannotCreate, NoPermission, FileTrouble.
        """
        make_folder(self.folder)
        path = self.folder / f"{messages:015d}"
        if not _same(path, weights, about):
            write_snapshot(path, messages, weights, about, lambda: self.retire_after(messages - 1))
        self._point()
        self.prune()
        return path

    def load(self, name: str | None = None) -> Snapshot:
        """The snapshot `name`; without a name the one in use, else the newest that is whole.

        Raises InputMissing where there is none, BadData where it (or all of them) cannot be used.
        """
        name = name or self.in_use()
        if name:
            return read_snapshot(self.find(name))
        passed_over: list[str] = []
        for found in self._names():
            try:
                return replace(read_snapshot(self.folder / found), passed_over=tuple(passed_over))
            except BadData as error:
                passed_over.append(str(error))
        if passed_over:
            raise BadData(f"{self.folder}: no snapshot is whole: {'; '.join(passed_over)}")
        raise InputMissing(
            f"{self.folder}: there is no snapshot yet; `bedload work` leaves one every "
            "worker.snapshot_every_s and at its stop, `bedload replay` at its end"
        )

    def find(self, name: str) -> Path:
        """The folder of a snapshot by its name, or by its number without the zeros. Raises InputMissing."""
        names = self._names()
        wanted = f"{int(name):015d}" if re.fullmatch("[0-9]{1,20}", name) else name
        if wanted not in names:
            known = ", ".join(names[:5]) + (" ..." if len(names) > 5 else "") if names else "none"
            raise InputMissing(f"{self.folder}: no snapshot {name!r}; newest first there are: {known}")
        return self.folder / wanted

    def list(self) -> tuple[SnapshotEntry, ...]:
        """All snapshots, newest first. Manifests are verified, arrays are not: that is `check`."""
        pinned, in_use = self.pinned(), self.in_use()
        entries = []
        for name in self._names():
            path, manifest, trouble = self.folder / name, {}, None
            try:
                manifest = read_manifest(path)
                check_format(path, manifest)
            except BadData as error:
                trouble = str(error)
            with os_errors("read", path):
                size = sum(file.stat().st_size for file in path.iterdir())
            number = int(name.rpartition("-")[2])
            entries.append(
                SnapshotEntry(name, path, number, size, name in pinned, name == in_use, manifest, trouble)
            )
        return tuple(entries)

    def check(self) -> tuple[tuple[str, str | None], ...]:
        """Reads every snapshot whole, newest first: its name, and what is wrong with it or None."""
        report = []
        for name in self._names():
            trouble = None
            try:
                read_snapshot(self.folder / name)
            except BadData as error:
                trouble = str(error)
            report.append((name, trouble))
        return tuple(report)

    def pin(self, name: str) -> None:
        """Keeps a snapshot from being pruned."""
        make_folder(self._pins)
        with self._still():
            name = self.find(name).name
            write_file(self._pins / name, b"")

    def unpin(self, name: str) -> None:
        """Lets a snapshot be pruned again."""
        name = self.find(name).name
        with os_errors("unpin", self._pins / name):
            (self._pins / name).unlink(missing_ok=True)

    def pinned(self) -> set[str]:
        """Names of the pinned snapshots."""
        if not self._pins.is_dir():
            return set()
        with os_errors("read", self._pins):
            return {path.name for path in self._pins.iterdir()} & set(self._names())

    def use(self, name: str | None) -> None:
        """Makes `load` take this snapshot until told otherwise; None: the newest whole one again.

        It is read first: BadData for one that is not whole.
        """
        if name is None:
            with os_errors("write", self._in_use):
                self._in_use.unlink(missing_ok=True)
            self._point()
            return
        with self._still():
            path = self.find(name)
            read_snapshot(path)
            write_file(self._in_use, path.name.encode() + b"\n")
        self._point()

    def in_use(self) -> str | None:
        """Name of the snapshot that readers were told to take; None: the newest whole one."""
        if not self._in_use.exists():
            return None
        with os_errors("read", self._in_use):
            name = self._in_use.read_bytes().decode("ascii", "replace").strip()
        if not _NAME.fullmatch(name):
            raise BadData(f"{self._in_use}: expected the name of a snapshot, found {name!r}; use one again")
        return name

    def prune(self) -> tuple[str, ...]:
        """Removes what is older than the newest to keep and does not stay by time, but never a pinned one or
        the one in use.

        Those that cannot be read do not count as kept. Returns the names removed.
        """
        with self._still():
            loose = [entry for entry in self.list() if not entry.pinned and not entry.in_use]
            whole = [entry for entry in loose if not entry.trouble]
            if len(whole) < self._keep.newest:
                return ()
            staying = self._keep.staying([entry.path for entry in whole])
            older = loose[loose.index(whole[self._keep.newest - 1]) + 1 :]
            removed = [entry for entry in older if entry.path not in staying]
            for entry in removed:
                remove_folder(entry.path)
        return tuple(entry.name for entry in removed)

    def retire_after(self, messages: int) -> tuple[tuple[str, str], ...]:
        """Renames the present history's snapshots beyond `messages` to `earlier-K-NUMBER`, K unused so far.

        They sort before the present history from then on, and stay pinned or in use if they were. For
        going back to an older checkpoint, and with -1 for starting afresh. Returns old and new names.
        """
        names = self._names()
        histories = [int(match[1] or 0) for match in map(_NAME.fullmatch, names) if match]
        label = f"earlier-{1 + max(histories, default=0)}-"
        leaving = [name for name in reversed(names) if name.isdecimal() and int(name) > messages]
        renamed = tuple((name, label + name) for name in leaving)
        if renamed:
            self._point(without=leaving)  # so that it does not lead to a name that is gone
            with self._still():
                for old, new in renamed:
                    self._rename(old, new)
            self._point()
        return renamed

    def _point(self, without: Collection[str] = ()) -> None:
        """Makes `current` lead to the snapshot in use, else to the newest whose manifest is whole.

        Never to one of `without`. Where the one in use is broken, and where no other is there, it stays.
        """
        chosen = self.in_use()
        if chosen in without:
            chosen = None
        whole = [entry.name for entry in self.list() if not entry.trouble and entry.name not in without]
        found = [name for name in whole if chosen in (None, name)]
        if not found or (self._current.is_symlink() and os.readlink(self._current) == found[0]):
            return
        if self._current.is_dir() and not self._current.is_symlink():  # a state copied without its links
            remove_folder(self._current)
        point(self._current, found[0])

    def _rename(self, old: str, new: str) -> None:
        """Renames a snapshot with its pin; killed half-way, it is pinned under the name that it has."""
        pinned, in_use = old in self.pinned(), old == self.in_use()
        if pinned:
            write_file(self._pins / new, b"")
        move_folder(self.folder / old, self.folder, new)
        if in_use:
            write_file(self._in_use, new.encode() + b"\n")
        if pinned:
            with os_errors("unpin", self._pins / old):
                (self._pins / old).unlink()

    @contextmanager
    def _still(self) -> Iterator[None]:
        """Nobody else pins, chooses, renames or prunes meanwhile."""
        with os_errors("lock", self.folder):
            descriptor = os.open(self.folder, os.O_RDONLY | os.O_DIRECTORY | os.O_CLOEXEC)
            try:
                fcntl.flock(descriptor, fcntl.LOCK_EX)
                yield
            finally:
                os.close(descriptor)

    def _names(self) -> tuple[str, ...]:
        """Newest first: the present history, then earlier ones, the last of them first."""
        if not self.folder.is_dir():
            return ()
        with os_errors("read", self.folder):
            matches = [match for match in (_NAME.fullmatch(p.name) for p in self.folder.iterdir()) if match]
        matches.sort(key=lambda m: (m[1] is None, int(m[1] or 0), int(m[2])), reverse=True)
        return tuple(match[0] for match in matches)
