"""A path to write in; nothing out, or why no file may be made there, with the cure."""

from __future__ import annotations

import os
from pathlib import Path

from stream.errors import CannotCreate, NoPermission

__all__ = ["check_output"]


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
