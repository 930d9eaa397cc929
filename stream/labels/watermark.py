"""Event times of the partitions of two feeds in, the time that all of them have reached out."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from enum import Enum
from typing import Any

__all__ = ["Feed", "Watermark"]


class Feed(Enum):
    """The two feeds of a join."""

    MESSAGES = "messages"
    OUTCOMES = "outcomes"


class Watermark:
    """The lowest event time over all partitions of both feeds; each partition stands at the latest it gave.

    A feed that has ended holds nothing back, nor does a partition that is `idle`, until it gives something
    again. Whether one is idle is said from outside, so that it can be written down and followed.
    """

    def __init__(self) -> None:
        self._times: dict[Feed, dict[int, int | None]] = {feed: {} for feed in Feed}
        self._idle: set[tuple[Feed, int]] = set()
        self._ended: set[Feed] = set()
        self.latest: int | None = None

    def expect(self, feed: Feed, partitions: Iterable[int]) -> None:
        """Partitions that are read from now on; one that has given nothing yet holds everything back."""
        for partition in partitions:
            self._times[feed].setdefault(partition, None)

    def reach(self, feed: Feed, partition: int, time: int) -> None:
        """A partition gave something of that event time."""
        known = self._times[feed].get(partition)
        if known is None or time > known:
            self._times[feed][partition] = time
        self._idle.discard((feed, partition))
        if self.latest is None or time > self.latest:
            self.latest = time

    def idle(self, feed: Feed, partition: int) -> None:
        """A partition gave nothing for so long that the others shall not wait for it."""
        self._idle.add((feed, partition))

    def end(self, feed: Feed) -> None:
        """A feed gives nothing more. It is no state: a log may have grown when it is opened again."""
        self._ended.add(feed)

    def time(self) -> int | None:
        """What is earlier than this has been seen; None where nothing can be said.

        When both feeds have ended, that is all that was given, up to the last moment of them.
        """
        if len(self._ended) == len(Feed):
            return None if self.latest is None else self.latest + 1
        lowest: int | None = None
        for feed in Feed:
            if feed in self._ended:
                continue
            if not self._times[feed]:
                return None
            for partition, time in self._times[feed].items():
                if (feed, partition) in self._idle:
                    continue
                if time is None:
                    return None
                lowest = time if lowest is None else min(lowest, time)
        return lowest

    def behind(self) -> tuple[Feed, int] | None:
        """The partition that holds the others back, to be read next; None where none does."""
        held = [
            (time is not None, time or 0, feed.value, partition)
            for feed in Feed
            if feed not in self._ended
            for partition, time in self._times[feed].items()
            if (feed, partition) not in self._idle
        ]
        if not held:
            return None
        _, _, feed, partition = min(held)
        return Feed(feed), partition

    def state(self) -> dict[str, Any]:
        """As JSON types."""
        return {
            "latest": self.latest,
            **{
                feed.value: [
                    [partition, time, (feed, partition) in self._idle]
                    for partition, time in sorted(self._times[feed].items())
                ]
                for feed in Feed
            },
        }

    def restore(self, saved: Mapping[str, Any]) -> None:
        """Goes on from what `state` gave."""
        self.latest = saved["latest"]
        for feed in Feed:
            self._times[feed] = {partition: time for partition, time, _ in saved[feed.value]}
            self._idle |= {(feed, partition) for partition, _, idle in saved[feed.value] if idle}
