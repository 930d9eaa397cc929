"""A topic of a Kafka cluster comes in; blocks of raw messages go out, partition by partition.

A position is {"cluster", "topic", "topic_id", "partitions": {"0": {"next", "last", "digest"}, ...}}: by what
the topic is known again, and for each partition the next offset to read, the offset of the last record given
out and a digest of it (null before the first).
"""

from __future__ import annotations

import time
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from types import MappingProxyType
from typing import Literal

import numpy as np

from stream.errors import BadSettings, Unavailable
from stream.message import Block, Position
from stream.settings.checks import START
from stream.settings.models import Feed
from stream.topics.access import Secrets
from stream.topics.lanes import Lane, Last
from stream.topics.opening import CURE, Gap, gap_refused, opened_at, opened_new
from stream.topics.reading import Order, Reader, is_stalled

__all__ = ["Health", "TopicSource"]

WAIT_S = 0.25
CLOSE_S = 8.0
NOTHING = np.zeros(0, np.int64)


@dataclass(frozen=True, slots=True)
class Health:
    """How reading goes. Seconds by the monotonic clock.

    `since_contact_s`: since the cluster answered last, None before it ever did; `lags`: end minus next
    offset by partition, None where the end is not known yet; `stalled`: partitions that do not move though
    their logs grow; `trouble`: why the cluster could not be reached, while it cannot.
    """

    since_contact_s: float | None
    lags: Mapping[int, int | None]
    stalled: tuple[int, ...]
    reconnects: int
    trouble: str | None


class TopicSource:
    """The messages of a topic. Implements stream.message.LiveSource; `health` may be asked from any thread.

    `start`, `seek`: wait for the cluster, however long it takes, and raise Unavailable when `stopping` gives
    True meanwhile. `unavailable_after_s`: so long after the cluster's last answer Unavailable is raised;
    without it the source waits for ever: `read` returns empty blocks. `on_gap`: what `seek` and `read` do
    where messages were removed before they were read.

    Raises what stream.topics.access.Secrets raises, and from any method that reads: BadSettings (another
    topic or log than before; messages gone), InputMissing (no such topic), NoPermission, BadData (a batch is
    broken), Unavailable.
    """

    def __init__(
        self,
        feed: Feed,
        secrets: Secrets,
        *,
        on_gap: Literal["refuse", "skip"] = "refuse",
        unavailable_after_s: float | None = None,
        stopping: Callable[[], bool] = lambda: False,
    ) -> None:
        secrets.options()
        self._feed = feed
        self._skip_gaps = on_gap == "skip"
        self._unavailable_after_s = unavailable_after_s
        self._stopping = stopping
        self._reader = Reader(feed, secrets.options)
        self._began_s = time.monotonic()
        self._next: dict[int, int] = {}
        self._last: dict[int, Last] = {}
        self._gaps: list[Gap] = []
        self._turn: list[int] = []  # partitions, the one that waited longest first

    def start(self) -> None:
        """Goes to where feed.start says."""
        if self._feed.start is None:
            raise BadSettings(f"feed.start is missing: {START}")
        self._last = {}
        self._open(Order(lambda client, identity: opened_new(self._feed, client, identity)))

    def seek(self, position: Position) -> None:
        """Goes to a position, once cluster, topic and log proved to be what they were.

        Whether the last record of a partition is still the same shows at the first `read` that would go on
        behind it, and that raises BadSettings too.
        """
        if position["topic"] != self._feed.topic:
            raise BadSettings(
                f"feed.topic is {self._feed.topic}, but what was read came from topic "
                f"{position['topic']}. {CURE}"
            )
        feed, skip = self._feed, self._skip_gaps
        self._last = {
            int(partition): Last(at["last"], at["digest"])
            for partition, at in position["partitions"].items()
            if at["last"] is not None
        }
        self._open(Order(lambda client, identity: opened_at(feed, client, identity, position, skip)))

    def read(self, limit: int) -> Block:
        """Up to `limit` messages of one partition, each in its turn; an empty block where none came."""
        reader = self._reader
        reader.start()
        deadline = time.monotonic() + WAIT_S
        with reader.lock:
            while True:
                self._raise_if_spoiled()
                for partition in self._in_turn():
                    lane = reader.lanes[partition]
                    if lane.at_gap:
                        self._pass_over(lane)
                        return self._empty(partition)
                    block = self._take(lane, limit)
                    if block is not None:
                        self._turn.remove(partition)
                        self._turn.append(partition)
                        return block
                self._raise_if_over()
                if not reader.lock.wait(deadline - time.monotonic()) and time.monotonic() >= deadline:
                    return self._empty(0)

    def read_range(self, partition: int, first: int, last: int, limit: int) -> Block:
        """Up to `limit` messages of `partition` with first <= offset < last.

        An empty block before the next offset is at `last` says that the broker has not sent them yet.
        """
        if self._next.get(partition) != first:
            self.place(partition, first)
        reader = self._reader
        reader.start()
        deadline = time.monotonic() + WAIT_S
        with reader.lock:
            while True:
                self._raise_if_spoiled()
                lane = reader.lanes[partition]
                block = self._take(lane, limit, last)
                if lane.reached >= last:
                    self._next[partition] = last
                if block is not None or self._next[partition] == last:
                    return block or self._empty(partition)
                if lane.at_gap:
                    raise self._gap_in_range(lane)
                self._raise_if_over()
                if not reader.lock.wait(deadline - time.monotonic()) and time.monotonic() >= deadline:
                    return self._empty(partition)

    def place(self, partition: int, offset: int) -> None:
        """The next `read` of `partition` begins at `offset`, as after reading up to it."""
        if self._next.get(partition) == offset:
            return
        with self._reader.lock:
            lane = self._reader.lanes.get(partition)
            if lane is None:
                self._reader.lanes[partition] = Lane(partition, offset, moved_s=time.monotonic())
            elif not max(lane.floor, self._next.get(partition, 0)) <= offset <= (lane.ahead or -1):
                lane.place(offset)
            self._next[partition] = offset
            if partition in self._last and self._last[partition].offset >= offset:
                del self._last[partition]

    def next_offsets(self) -> Mapping[int, int]:
        """The next offset of each partition that was read or placed; a view, not a copy."""
        return MappingProxyType(self._next)

    def gaps(self) -> list[Gap]:
        """Ranges (partition, from, to) that were passed over because they are gone for good, told once."""
        gaps, self._gaps = self._gaps, []
        return gaps

    def position(self) -> Position:
        """Next message to read of each partition that was read or placed; see the top of this file."""
        identity = self._reader.identity
        partitions = {}
        for partition in sorted(self._next):
            last = self._last.get(partition)
            partitions[str(partition)] = {
                "next": self._next[partition],
                "last": None if last is None else last.offset,
                "digest": None if last is None else last.digest,
            }
        return {
            "cluster": None if identity is None else identity.cluster,
            "topic": self._feed.topic,
            "topic_id": None if identity is None else identity.topic_id,
            "partitions": partitions,
        }

    def at_end(self) -> bool:
        """Whether all that was there when `start` or `seek` returned has been read."""
        with self._reader.lock:
            lanes = self._reader.lanes.values()
            return all(lane.until is None or lane.reached >= lane.until for lane in lanes)

    def fraction_read(self) -> float | None:
        """None: a topic has no end."""
        return None

    def commit(self, position: Position) -> None:
        """Commits a position that is in a durable checkpoint to feed.group; a failure is logged, no more."""
        with self._reader.lock:
            self._reader.commit = {int(p): at["next"] for p, at in position["partitions"].items()}
            self._reader.lock.notify_all()

    def health(self) -> Health:
        """How reading goes; from any thread."""
        with self._reader.lock:
            reader, now = self._reader, time.monotonic()
            lanes = reader.lanes.values()
            return Health(
                None if reader.contact_s is None else now - reader.contact_s,
                {x.partition: None if x.end is None else max(x.end - x.reached, 0) for x in lanes},
                tuple(sorted(x.partition for x in lanes if x.stalls or is_stalled(x))),
                reader.reconnects,
                reader.trouble,
            )

    def close(self) -> None:
        """Ends the connection, after a commit that is still to be made."""
        self._reader.close(CLOSE_S)

    def _open(self, order: Order) -> None:
        """Waits until the reader has opened what was asked for."""
        reader = self._reader
        with reader.lock:
            reader.order = order
            reader.adds_partitions = True
            reader.lock.notify_all()
        reader.start()
        with reader.lock:
            while order.opened is None:
                self._raise_if_spoiled()
                self._raise_if_over()
                if self._stopping():
                    raise Unavailable(f"stopped while waiting for the cluster: {reader.trouble}")
                reader.lock.wait(WAIT_S)
            if order.error is not None:
                raise order.error
            self._gaps = list(order.opened.gaps)
            self._next = {p: lane.floor for p, lane in order.opened.lanes.items() if not lane.fresh}
            self._turn = []

    def _in_turn(self) -> list[int]:
        lanes = self._reader.lanes
        if len(self._turn) != len(lanes):
            self._turn = [p for p in self._turn if p in lanes] + [p for p in lanes if p not in self._turn]
        return self._turn

    def _take(self, lane: Lane, limit: int, last: int | None = None) -> Block | None:
        taken = lane.take(limit, last)
        if taken is None:
            return None
        block, after, end = taken
        self._next[lane.partition] = after if last is None else min(after, last)
        self._last[lane.partition] = end
        if not lane.held_bytes:
            self._reader.lock.notify_all()
        return block

    def _pass_over(self, lane: Lane) -> None:
        """Goes on where the log begins now; raises BadSettings where gaps are refused."""
        gap = self._gap_of(lane)
        if not self._skip_gaps:
            raise gap_refused(self._feed, [gap])
        partition, _, start = gap
        self._gaps.append(gap)
        self._next[partition] = start
        lane.place(start)
        self._reader.lock.notify_all()

    def _gap_in_range(self, lane: Lane) -> BadSettings | Unavailable:
        """The error for a part of a range that was read before and is gone: it cannot be passed over here."""
        refused = gap_refused(self._feed, [self._gap_of(lane)])
        return Unavailable(f"{refused}; starting again passes over it") if self._skip_gaps else refused

    def _gap_of(self, lane: Lane) -> Gap:
        assert lane.log_start is not None
        return lane.partition, self._next.get(lane.partition, lane.floor), lane.log_start

    def _raise_if_spoiled(self) -> None:
        if self._reader.error is not None and self._reader.spoiled:
            raise self._reader.error

    def _raise_if_over(self) -> None:
        """Raises what ended the reader, and Unavailable after too long without an answer."""
        reader = self._reader
        if reader.error is not None:
            raise reader.error
        since = time.monotonic() - (self._began_s if reader.contact_s is None else reader.contact_s)
        if self._unavailable_after_s is not None and since > self._unavailable_after_s:
            raise Unavailable(
                f"{', '.join(self._feed.servers)} has not answered for {since:,.0f} s, longer than "
                f"worker.unavailable_after_s = {self._unavailable_after_s:g} ({reader.trouble}); "
                "see to the brokers and the network, and start again"
            )

    def _empty(self, partition: int) -> Block:
        return Block(str(self._feed.topic), partition, b"", NOTHING, NOTHING, NOTHING)
