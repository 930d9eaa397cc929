"""Glob patterns and a folder come in; the log files that they match go out, sorted, each with its name."""

from __future__ import annotations

import glob
import os
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

from stream.errors import BadSettings, InputMissing

__all__ = ["STANDARD_INPUT", "LogFile", "matching_files"]

STANDARD_INPUT = "-"


@dataclass(frozen=True, slots=True)
class LogFile:
    """One file of a log. `name` is what positions and rejects call it: relative to the folder of
    the patterns wherever it can be, so that the same log elsewhere has the same names."""

    name: str
    path: Path


def matching_files(patterns: Sequence[str], folder: Path) -> list[LogFile]:
    """The files that `patterns` (relative to `folder`) match, sorted by name, each once.

    Raises BadSettings (no pattern; "-" among others; a name that is not UTF-8) and InputMissing
    (a pattern that matches no file).
    """
    if not patterns:
        raise BadSettings('feed.paths is empty; give at least one pattern, for example ["log/*.jsonl"]')
    if STANDARD_INPUT in patterns:
        if len(patterns) > 1:
            raise BadSettings('feed.paths mixes "-" (standard input) with files; give one or the other')
        return [LogFile(STANDARD_INPUT, Path(STANDARD_INPUT))]
    found: dict[str, Path] = {}
    for pattern in patterns:
        names = _matches(pattern, folder)
        if not names:
            raise InputMissing(
                f"feed.paths: no file matches {pattern!r} in {folder}; correct the pattern or the folder"
            )
        for name in names:
            found[_portable(name, folder)] = folder / name
    return [LogFile(name, found[name]) for name in sorted(found)]


def _matches(pattern: str, folder: Path) -> list[str]:
    """Names below `folder`; a file whose name is the pattern itself counts before any globbing."""
    if os.path.lexists(folder / pattern):
        names = [pattern]
    else:
        names = glob.glob(pattern, root_dir=folder, recursive=True)
    return [name for name in names if not (folder / name).is_dir()]


def _portable(name: str, folder: Path) -> str:
    path = Path(os.path.normpath(name))
    base = Path(os.path.abspath(folder))
    if path.is_absolute() and path.is_relative_to(base):
        path = path.relative_to(base)
    try:
        path.as_posix().encode()
    except UnicodeEncodeError:
        raise BadSettings(f"feed.paths: the file name {name!r} is not UTF-8; rename the file") from None
    return path.as_posix()
