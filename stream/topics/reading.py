"""A topic comes in on a thread of its own, ahead of whoever learns; lanes of chunks go out under one lock.

Fetching, decompressing and unpacking overlap with learning, whose kernels release the interpreter. What is
ahead is bounded: a lane that holds its share of AHEAD_BYTES is not fetched.
"""

from __future__ import annotations

import logging
import random
import threading
import time
from collections.abc import Callable, Mapping, Sequence
from contextlib import suppress
from typing import Any

from stream.errors import BadSettings, InputMissing, Unavailable
from stream.settings.models import Feed
from stream.topics.client import Away, Client, Fetched, Identity, OutOfRange
from stream.topics.lanes import Lane
from stream.topics.opening import Opened, check_identity
from stream.topics.records import Chunk, chunk_of

__all__ = ["Order", "Reader"]

AHEAD_BYTES = 32 << 20
LEAST_AHEAD_BYTES = 1 << 20
POLL_S = 0.25
LOOK_S = 2.0
MISSING_S = 10.0
STALLED_S = 30.0
RECONNECT_S = 20.0
BACKOFF_S = (0.2, 10.0)
MOST_STALLS = 3
log = logging.getLogger(__name__)


class Order:
    """Lanes to be opened by `run` once the cluster answers; `error` where it may not be."""

    def __init__(self, run: Callable[[Client, Identity], Opened]) -> None:
        self.run = run
        self.opened: Opened | None = None
        self.error: Exception | None = None


class Reader:
    """The thread and what it shares. Whoever touches an attribute holds `lock`.

    `error`: why it ended; the caller raises it when the lanes are empty, at once where `spoiled` says that
    what they hold is not to be trusted. `contact_s`: when the cluster answered last, by the monotonic clock.
    A lane whose next offset was removed from the log says so and stays there: whoever takes from it decides.
    """

    def __init__(self, feed: Feed, options: Callable[[], Mapping[str, Any]]) -> None:
        self.lock = threading.Condition()
        self.lanes: dict[int, Lane] = {}
        self.identity: Identity | None = None
        self.contact_s: float | None = None
        self.trouble: str | None = None
        self.reconnects = 0
        self.error: Exception | None = None
        self.spoiled = False
        self.order: Order | None = None
        self.commit: Mapping[int, int] | None = None
        self.adds_partitions = False
        self._feed = feed
        self._options = options
        self._closing = False
        self._missing_since: float | None = None
        self._commit_after_s = 0.0
        self._assigned: set[int] = set()
        self._thread = threading.Thread(target=self._run, name="topic reader", daemon=True)

    def start(self) -> None:
        """Begins to read; nothing happens where it has begun."""
        if not self._thread.is_alive() and self.error is None and not self._closing:
            self._thread.start()

    def close(self, wait_s: float) -> None:
        """Ends the thread, after a commit that is still to be made."""
        with self.lock:
            self._closing = True
            self.lock.notify_all()
        if self._thread.is_alive():
            self._thread.join(wait_s)

    # ---- connections -------------------------------------------------------------------------------------

    def _run(self) -> None:
        pause_s = BACKOFF_S[0]
        while not self._closing:
            began = time.monotonic()
            client = None
            try:
                client = Client(self._feed, self._options())
                self._serve(client, self._identified(client))
            except Away as away:
                with self.lock:
                    self.trouble = str(away)
                    self.reconnects += 1
                    if self.contact_s is not None and self.contact_s > began:
                        pause_s = BACKOFF_S[0]
                    self.lock.wait_for(lambda: self._closing, pause_s * random.uniform(0.5, 1.0))
                pause_s = min(2 * pause_s, BACKOFF_S[1])
            except Exception as error:
                with self.lock:
                    self.error = error
                    self.lock.notify_all()
                return
            finally:
                if client is not None:
                    with suppress(Exception):
                        client.close()

    def _identified(self, client: Client) -> Identity:
        """What the cluster says of the topic, which it may learn of a little late."""
        deadline = time.monotonic() + MISSING_S
        while not self._closing:
            identity = client.identity()
            if identity is not None:
                self._missing_since = None
                self._check(identity)
                return identity
            if time.monotonic() > deadline:
                raise self._missing()
            client.ask_again()
            time.sleep(0.1)
        raise Away("closing")

    def _missing(self) -> InputMissing:
        return InputMissing(
            f"{', '.join(self._feed.servers)}: there is no topic {self._feed.topic}, or this user may "
            "not see it. Correct feed.topic, or make the topic; it is not made by reading"
        )

    def _check(self, identity: Identity) -> None:
        """Keeps what the topic is, and refuses another one."""
        with self.lock:
            if self.identity is not None:
                try:
                    check_identity(self._feed, identity, self.identity.cluster, self.identity.topic_id)
                except BadSettings:
                    self.spoiled = True
                    raise
            self.identity = identity
            self._contact()

    def _contact(self) -> None:
        self.contact_s = time.monotonic()
        self.trouble = None

    # ---- reading -----------------------------------------------------------------------------------------

    def _serve(self, client: Client, identity: Identity) -> None:
        """Reads until it is closed or the connection is lost."""
        with self.lock:
            self._assigned = set()
            for lane in self.lanes.values():
                lane.sought = False
                lane.moved_s = time.monotonic()
        looked_s = 0.0
        while not self._closing:
            self._obey(client, identity)
            if not self._prepare(client):
                with self.lock:
                    self.lock.wait(POLL_S)
            else:
                self._fetch(client)
            if time.monotonic() - looked_s > LOOK_S:
                identity = self._look(client, identity)
                looked_s = time.monotonic()
        self._commit(client)

    def _obey(self, client: Client, identity: Identity) -> None:
        """Opens lanes where that was asked for, and commits."""
        order = self.order
        if order is not None:
            try:
                opened = order.run(client, identity)
            except Away:
                raise
            except Exception as error:
                order.error = error
                opened = Opened({}, [])
            with self.lock:
                if self.order is order:
                    self.order = None
                    order.opened = opened
                    self.lanes.clear()
                    self.lanes.update(opened.lanes)
                    for lane in self.lanes.values():
                        lane.moved_s = time.monotonic()
                        lane.end = lane.until
                    self._contact()
                self.lock.notify_all()
        self._commit(client)

    def _commit(self, client: Client) -> None:
        """Commits what is to be; where that fails it is tried again later, for nothing relies on it."""
        offsets = self.commit
        if not offsets or self._feed.group is None or time.monotonic() < self._commit_after_s:
            return
        try:
            client.commit(self._feed.group, offsets)
        except Exception as error:
            self._commit_after_s = time.monotonic() + LOOK_S
            log.warning("offsets could not be committed to group %s yet: %s", self._feed.group, error)
            return
        with self.lock:
            if self.commit is offsets:
                self.commit = None

    def _prepare(self, client: Client) -> bool:
        """Tells the client what to fetch next; False where nothing is to be fetched for now."""
        with self.lock:
            share = max(LEAST_AHEAD_BYTES, AHEAD_BYTES // max(len(self.lanes), 1))
            held = [p for p, x in self.lanes.items() if x.held_bytes >= share or x.log_start is not None]
            for partition in held:
                self.lanes[partition].moved_s = time.monotonic()
            if len(held) == len(self.lanes):
                return False
            to_seek = {p: lane.fetch for p, lane in self.lanes.items() if not lane.sought}
            offsets = {p: lane.fetch for p, lane in self.lanes.items()}
            for lane in self.lanes.values():
                lane.sought = True
        if offsets.keys() != self._assigned:
            client.assign(offsets)
            self._assigned = set(offsets)
        else:
            for partition, offset in to_seek.items():
                client.seek(partition, offset)
        client.pause(held, [p for p in offsets if p not in held])
        return True

    def _fetch(self, client: Client) -> None:
        """One poll: what came goes to its lane."""
        with self.lock:
            turns = {p: lane.turn for p, lane in self.lanes.items() if lane.sought}
        try:
            found = client.poll(POLL_S)
        except OutOfRange as error:
            for partition, offset in error.offsets.items():
                self._out_of_range(client, partition, offset)
            return
        if found:
            identity = client.identity()
            if identity is not None:
                self._check(identity)
        chunks = [self._chunk(fetched) for fetched in found]
        behind = {} if found else {p: client.offset(p) for p in turns}
        with self.lock:
            for chunk in chunks:
                self._put(chunk.partition, turns, chunk.after, chunk)
            for partition, offset in behind.items():
                self._put(partition, turns, offset, None)
            if chunks:
                self._contact()
            self.lock.notify_all()

    def _chunk(self, fetched: Fetched) -> Chunk:
        """What came as a chunk, once the record before it proved to be what it was."""
        lane = self.lanes[fetched.partition]
        topic, most = str(self._feed.topic), self._feed.max_line_bytes
        check = lane.check
        if check is not None:
            before = chunk_of(topic, lane.partition, fetched.records, check.offset, fetched.after, most)
            if len(before) and before.offsets[0] == check.offset and before.digest(0) != check.digest:
                raise BadSettings(
                    f"topic {topic} partition {lane.partition}: offset {check.offset:,} holds another record "
                    "than the one that was read there: the log was cut back, or is another one. Begin again "
                    "with a fresh state folder"
                )
        return chunk_of(topic, lane.partition, fetched.records, lane.floor, fetched.after, most)

    def _put(self, partition: int, turns: Mapping[int, int], after: int, chunk: Chunk | None) -> None:
        lane = self.lanes.get(partition)
        if lane is None or lane.turn != turns.get(partition) or not lane.sought:
            return  # it was placed anew meanwhile
        if chunk is not None:
            lane.put(chunk)
            lane.check = None
        if after != lane.fetch:
            lane.fetch = after
            lane.moved_s = time.monotonic()
            lane.stalls = 0

    def _out_of_range(self, client: Client, partition: int, offset: int) -> None:
        start, end = client.starts([partition])[partition], client.ends([partition])[partition]
        with self.lock:
            lane = self.lanes.get(partition)
            if lane is None or lane.fetch != offset or not lane.sought:
                return
            lane.sought = False
            if lane.check is not None and lane.floor >= start:
                lane.check, lane.fetch = None, lane.floor
            elif offset > end:
                raise BadSettings(
                    f"topic {self._feed.topic} partition {partition} ends at offset {end:,}, but was read "
                    f"up to {offset:,}: the log was cut back. Begin again with a fresh state folder"
                )
            elif lane.fresh and offset < start:
                lane.place(start)
            elif offset < start:
                lane.log_start = start
            self.lock.notify_all()

    # ---- the look around ---------------------------------------------------------------------------------

    def _look(self, client: Client, identity: Identity) -> Identity:
        """Asks for the ends, and looks whether the topic and the connection are what they were."""
        try:
            ends = client.ends(sorted(self._assigned)) if self._assigned else {}
        except Away as away:
            with self.lock:
                self.trouble = str(away)
                if self.contact_s is not None and time.monotonic() - self.contact_s > RECONNECT_S:
                    raise
            return identity
        found = client.identity()
        self._check_presence(found)
        if found is not None:
            self._check(found)
            self._add_partitions(client, found)
        with self.lock:
            if ends:
                self._contact()
            for partition, end in ends.items():
                if partition in self.lanes:
                    self.lanes[partition].end = end
            stalled = [lane for lane in self.lanes.values() if is_stalled(lane)]
            for lane in stalled:
                lane.stalls += 1
        if stalled:
            self._restart(stalled)
        return found or identity

    def _check_presence(self, found: Identity | None) -> None:
        now = time.monotonic()
        if found is not None:
            self._missing_since = None
        elif self._missing_since is None:
            self._missing_since = now
        elif now - self._missing_since > MISSING_S:
            raise self._missing()

    def _add_partitions(self, client: Client, found: Identity) -> None:
        """Partitions that were added to the topic are read from their beginning."""
        if self._feed.partitions or not self.adds_partitions:
            return
        new = [p for p in found.partitions if p not in self.lanes]
        if new:
            starts = client.starts(new)
            with self.lock:
                for partition in new:
                    lane = Lane(partition, starts[partition], fresh=True, moved_s=time.monotonic())
                    self.lanes.setdefault(partition, lane)

    def _restart(self, stalled: Sequence[Lane]) -> None:
        """A partition that does not move though its log grows: the client has lost it; a new one may not."""
        told = ", ".join(f"{lane.partition} at offset {lane.fetch:,}" for lane in stalled)
        if any(lane.stalls > MOST_STALLS for lane in stalled):
            raise Unavailable(
                f"topic {self._feed.topic}: partitions do not move though their logs grow, and {MOST_STALLS} "
                f"new connections did not help: {told}. Look into the brokers' logs, and start again"
            )
        log.warning("partitions do not move though their logs grow; connecting anew: %s", told)
        raise Away(f"partitions do not move: {told}")


def is_stalled(lane: Lane) -> bool:
    """Whether there is more in the log and nothing came for a long time."""
    return lane.end is not None and lane.end > lane.fetch and time.monotonic() - lane.moved_s > STALLED_S
