"""Stored things with the times at which they were written in; which of them stay, out."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from pathlib import Path

from stream.durable import os_errors

__all__ = ["Retention"]

HOUR_S, DAY_S = 3600, 86_400


@dataclass(frozen=True, slots=True)
class Retention:
    """What stays: the newest `newest`, and the last of each of the latest `hourly` hours and `daily` days.

    Hours and days are those of UTC, and where nothing was written they do not count. A clock that jumps may
    let other old ones stay, never fewer of the newest.
    """

    newest: int
    hourly: int = 0
    daily: int = 0

    def staying(self, paths: Sequence[Path]) -> set[Path]:
        """Of `paths`, newest first, those that stay; the time is that of the folder on disk."""
        if not self.hourly and not self.daily:
            return set(paths[: self.newest])
        times = [_written_at(path) for path in paths]
        chosen = set(range(min(self.newest, len(paths))))
        chosen.update(_last_of_each(times, HOUR_S, self.hourly), _last_of_each(times, DAY_S, self.daily))
        return {paths[at] for at in chosen}


def _last_of_each(times: Sequence[float], length_s: int, most: int) -> Iterable[int]:
    """Which of the times, newest first, are the last of their hour or day, for the latest `most` of those."""
    last: dict[int, int] = {}
    for at, time in enumerate(times):
        last.setdefault(int(time // length_s), at)
    return [last[slot] for slot in sorted(last, reverse=True)[:most]]


def _written_at(path: Path) -> float:
    with os_errors("read", path):
        return path.stat().st_mtime
