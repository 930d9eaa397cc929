"""Records for other topics come in, dead letters and scores; acknowledged ones go out.

Every replica in step must have a record before it counts, and each is written once however often it is sent.
"""

from __future__ import annotations

import threading
import time
from collections.abc import Mapping
from contextlib import suppress
from functools import partial
from typing import Any

from stream.errors import FileTrouble, Unavailable
from stream.settings.models import Feed
from stream.topics.access import Secrets
from stream.topics.client import Away, close_producer, open_producer, translated

__all__ = ["Publisher"]

WAITING_BYTES = 32 << 20
RECORD_BYTES = 1 << 10
LARGEST_BYTES = 1 << 30
SEND_S = 2.0
CLOSE_S = 2.0


class Publisher:
    """Writes to topics of the cluster of `feed`, which are never made. For one thread.

    `topics` tells in errors which these are. Connects when it is made. Raises Unavailable where the cluster
    does not answer, NoPermission, BadSettings, and what stream.topics.access.Secrets raises.
    """

    def __init__(
        self, feed: Feed, secrets: Secrets, topics: str = "the topics of rejects.topic and scores.topic"
    ) -> None:
        self._feed, self._topics = feed, topics
        try:
            self._producer: Any = open_producer(feed, secrets.options(), LARGEST_BYTES)
        except Away as away:
            raise self._unavailable(str(away)) from None
        self._changed = threading.Condition()
        self._waiting = 0
        self._waiting_bytes = 0
        self._fault: str | None = None

    def send(self, topic: str, key: bytes | None, value: bytes, headers: Mapping[str, bytes]) -> None:
        """Puts a record on its way; waits seconds while much is under way.

        Raises Unavailable where it could not be taken. After FileTrouble, which says that a record
        was refused, every later call raises it again: what was refused is lost, and nothing that relies on
        it may become durable.
        """
        size = len(key or b"") + len(value) + sum(len(k) + len(v) for k, v in headers.items()) + RECORD_BYTES
        self._wait(lambda: self._waiting_bytes == 0 or self._waiting_bytes + size <= WAITING_BYTES, SEND_S)
        with self._changed:
            self._waiting += 1
            self._waiting_bytes += size
        try:
            with translated(self._feed):
                future = self._producer.send(topic, value=value, key=key, headers=list(headers.items()))
        except Away as away:
            self._done(topic, size, None)
            raise self._unavailable(f"topic {topic}: {away}") from None
        except BaseException:
            self._done(topic, size, None)
            raise
        future.add_callback(lambda _: self._done(topic, size, None))
        future.add_errback(partial(self._done, topic, size))

    def flush(self, timeout_s: float) -> None:
        """Returns when everything sent is acknowledged.

        Raises Unavailable where that takes longer than `timeout_s` (what is under way stays so, and a later
        call may succeed), FileTrouble where a record was refused.
        """
        self._wait(lambda: self._waiting == 0, timeout_s)

    def close(self) -> None:
        """Ends the connection; what is not acknowledged within seconds is given up."""
        with suppress(Unavailable, FileTrouble):
            self.flush(CLOSE_S)
        close_producer(self._producer)

    def _wait(self, holds: Any, timeout_s: float) -> None:
        deadline = time.monotonic() + timeout_s
        with self._changed:
            self._changed.wait_for(lambda: self._fault is not None or holds(), deadline - time.monotonic())
            self._raise_fault()
            if not holds():
                raise self._unavailable(f"{self._waiting:,} records not acknowledged in {timeout_s:g} s")

    def _done(self, topic: str, size: int, error: BaseException | None) -> None:
        """On whatever thread the library has."""
        with self._changed:
            self._waiting -= 1
            self._waiting_bytes -= size
            if error is not None and self._fault is None:
                self._fault = f"topic {topic}: {type(error).__name__}"
            self._changed.notify_all()

    def _raise_fault(self) -> None:
        if self._fault is not None:
            raise FileTrouble(
                f"{self._fault}: {', '.join(self._feed.servers)} refused a record; look at the topic's "
                "limits and this user's rights, and start again"
            )

    def _unavailable(self, why: str) -> Unavailable:
        return Unavailable(
            f"{', '.join(self._feed.servers)}: {why}; see to the brokers and whether "
            f"{self._topics} are there: they are never made"
        )
