"""All that is needed to go on learning in, a folder that survives a crash out; and back."""

from __future__ import annotations

import re
from collections.abc import Callable, Collection, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy.typing as npt

from stream.arrays_file import Arrays, Rows, read_array_folder, write_array_folder
from stream.durable import make_folder, move_folder, os_errors, remove_folder
from stream.errors import BadData, BadSettings, InputMissing
from stream.manifest import read_manifest, verify_folder
from stream.retention import Retention

__all__ = ["Checkpoint", "CheckpointEntry", "Checkpoints"]

FORMAT = "bedload checkpoint"
FORMAT_VERSION = 1


@dataclass(frozen=True, slots=True)
class Checkpoint:
    """A checkpoint that was read whole; `moved_aside` has a line for each broken one passed over."""

    path: Path
    messages: int
    arrays: dict[str, npt.NDArray[Any]]
    about: dict[str, Any]
    moved_aside: tuple[str, ...]


@dataclass(frozen=True, slots=True)
class CheckpointEntry:
    """A checkpoint in the list; `trouble` is None where it is whole, else what is wrong with it."""

    name: str
    path: Path
    messages: int
    size_bytes: int
    trouble: str | None


class Checkpoints:
    """The checkpoints of one state folder, of which `keep` stay: the newest (>= 1), and some by time.

    Those whose names `pinned` gives stay too. Only for who holds the state folder. Equal content gives equal
    bytes under an equal name.
    """

    def __init__(
        self, folder: Path, keep: int | Retention, pinned: Callable[[], Collection[str]] = tuple
    ) -> None:
        self.folder = folder
        self._keep = keep if isinstance(keep, Retention) else Retention(keep)
        self._pinned = pinned

    def write(
        self, messages: int, arrays: Arrays, about: Mapping[str, Any], rows: Rows | None = None
    ) -> Path:
        """Writes the state after `messages` messages, then removes those that do not stay.

        `about`: JSON types only, without clock, host or pid. Arrays are not copied; `rows`: further ones
        that are made meanwhile. Raises
        CannotCreate, NoPermission or FileTrouble; what was there is then still there.
        """
        make_folder(self.folder)
        manifest = {
            "format": FORMAT,
            "format_version": FORMAT_VERSION,
            "messages": messages,
            "about": dict(about),
        }
        path = write_array_folder(self.folder, f"{messages:015d}", arrays, manifest, rows=rows)
        paths = self._paths()
        staying = self._keep.staying(paths)
        pinned = self._pinned()
        for old in paths:
            if old != path and old not in staying and old.name not in pinned:
                remove_folder(old)
        return path

    def newest(self) -> Checkpoint | None:
        """The newest checkpoint that is whole; broken ones that are newer move to `broken/`.

        None where there never was one. Raises BadData where there are only broken ones, BadSettings where a
        later program wrote it.
        """
        moved: list[str] = []
        for path in self._paths():
            try:
                manifest, arrays = read_array_folder(path)
                _check_format(path, manifest)
            except BadData as error:
                moved.append(f"{error}; moved to {move_folder(path, self.folder / 'broken', path.name)}")
                continue
            return Checkpoint(path, manifest["messages"], arrays, manifest["about"], tuple(moved))
        broken = self.folder / "broken"
        if moved or (broken.is_dir() and any(broken.iterdir())):
            found = "; ".join(moved) or f"all are in {broken}"
            raise BadData(
                f"{self.folder}: no whole checkpoint is left, and learning does not start from nothing "
                f"unasked ({found}). Put back a copy, or begin again in another state.folder"
            )
        return None

    def newest_manifest(self) -> tuple[Path, dict[str, Any]] | None:
        """Path and manifest of the newest checkpoint whose manifest is whole; for who only reads."""
        for path in self._paths():
            try:
                manifest = read_manifest(path)
            except (BadData, InputMissing):  # broken, or removed this moment
                continue
            _check_format(path, manifest)
            return path, manifest
        return None

    def list(self) -> tuple[CheckpointEntry, ...]:
        """All checkpoints, newest first, each one read and verified; nothing is moved."""
        entries = []
        for path in self._paths():
            trouble = None
            try:
                _check_format(path, verify_folder(path))
            except (BadData, BadSettings) as error:
                trouble = str(error)
            with os_errors("read", path):
                size = sum(file.stat().st_size for file in path.iterdir())
            entries.append(CheckpointEntry(path.name, path, int(path.name), size, trouble))
        return tuple(entries)

    def restore(self, name: str) -> tuple[Path, tuple[Path, ...]]:
        """Makes the checkpoint `name` (its folder's name, or its number of messages) the newest.

        Later ones move to `later/`. Returns its path and where those are now. Raises InputMissing for a
        name that is not there, BadData for a broken checkpoint (nothing is moved then).
        """
        paths = self._paths()
        wanted = int(name) if re.fullmatch("[0-9]{1,20}", name) else -1
        chosen = next((path for path in paths if int(path.name) == wanted), None)
        if chosen is None:
            known = ", ".join(path.name for path in paths) or "none"
            raise InputMissing(f"{self.folder}: no checkpoint {name!r}; there are: {known}")
        _check_format(chosen, verify_folder(chosen))
        later = [path for path in paths if int(path.name) > wanted]
        return chosen, tuple(move_folder(path, self.folder / "later", path.name) for path in later)

    def _paths(self) -> tuple[Path, ...]:
        """Newest first."""
        if not self.folder.is_dir():
            return ()
        with os_errors("read", self.folder):
            found = [p for p in self.folder.iterdir() if re.fullmatch("[0-9]{15,20}", p.name)]
        return tuple(sorted(found, key=lambda path: int(path.name), reverse=True))


def _check_format(path: Path, manifest: Mapping[str, Any]) -> None:
    if manifest.get("format") != FORMAT:
        raise BadData(f"{path}: expected format {FORMAT!r}, found {manifest.get('format')!r}")
    if manifest["format_version"] != FORMAT_VERSION:
        raise BadSettings(
            f"{path}: expected format_version {FORMAT_VERSION}, found {manifest['format_version']}: "
            "go on with the program version that wrote it, or begin again in another state.folder"
        )
