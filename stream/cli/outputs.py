"""A path to write in; nothing out, or why no file may be made there, with the cure."""

from __future__ import annotations

import os
from pathlib import Path

from stream.errors import CannotCreate, NoPermission

__all__ = ["check_folder", "check_output"]


def check_output(path: Path, option: str = "--out", *, new: bool = False) -> None:
    """Raises CannotCreate without a folder for `path`, or where it is there and must be `new`; NoPermission
    where its folder may not be written. Pipes and devices are always fine."""
    cure = f"give another {option}"
    if path.exists() and not path.is_dir() and not path.is_file():
        return
    if not path.parent.is_dir():
        raise CannotCreate(f"{path}: there is no folder {path.parent}: make it, or {cure}")
    if path.is_dir():
        raise CannotCreate(f"{path} is a folder: {cure}")
    if new and path.exists():
        raise CannotCreate(f"{path} is there already: take it away, or {cure}")
    if not os.access(path.parent, os.W_OK | os.X_OK):
        raise NoPermission(f"{path}: the folder {path.parent} may not be written by this user: {cure}")


def check_folder(path: Path, option: str = "--out") -> None:
    """Raises CannotCreate where something else than a folder is at `path` or above it, NoPermission where the
    nearest folder that is there may not be written."""
    there = next(place for place in (path, *path.absolute().parents) if place.exists())
    if not there.is_dir():
        raise CannotCreate(f"{there} is no folder: give another {option}")
    if not os.access(there, os.W_OK | os.X_OK):
        raise NoPermission(f"the folder {there} may not be written by this user: give another {option}")
