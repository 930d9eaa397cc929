"""Rejected and scored messages in, records to topics out: sent once the journal has their order for good."""

from __future__ import annotations

import time
from collections import deque
from collections.abc import Callable, Mapping
from typing import Any, Protocol

import msgspec
import numpy as np
import numpy.typing as npt

from stream.decoding import Decoder
from stream.errors import Unavailable
from stream.exact import sigmoid
from stream.message import Block, Reject
from stream.settings import Settings

__all__ = ["Outbox", "Publisher"]

WAITING = 1 << 14
"""Records that wait at most: what is sent together costs one sync of the journal."""
WAITING_S = 0.5
FLUSH_S = 5.0
"""Less than the ten seconds in which a worker that is told to stop has to have ended."""


class Publisher(Protocol):
    """Writes records to topics."""

    def send(self, topic: str, key: bytes | None, value: bytes, headers: Mapping[str, bytes]) -> None:
        """Puts a record on its way; raises Unavailable where it could not be taken yet."""
        ...

    def flush(self, timeout_s: float) -> None:
        """Returns once all that was taken is acknowledged; raises Unavailable where that takes longer."""
        ...

    def close(self) -> None:
        """Lets the brokers go."""
        ...


class Score(msgspec.Struct):
    """What is sent of a scored message; `snapshot`: the newest one when it was scored."""

    id: Any
    probability: float
    margin: float
    topic: str
    partition: int
    offset: int
    snapshot: str | None


class Outbox:
    """Dead letters and scores of a worker. Implements stream.rejects.RejectSink.

    `connect` makes the publisher when it is first needed. `make_durable` is called before anything is sent,
    so that no reader sees a score that a resumed run would not give again. `snapshot` names the newest one.

    While the brokers are away records wait: `full` then says that no more may be added. After
    `unavailable_after_s` of that Unavailable is raised, without it never but by `sync`. `trouble`: why they
    take no records, while they take none. Raises what the publisher raises.
    """

    def __init__(
        self,
        settings: Settings,
        connect: Callable[[], Publisher],
        make_durable: Callable[[], None],
        snapshot: Callable[[], str | None],
        clock: Callable[[], float] = time.monotonic,
    ) -> None:
        self.where = f"topic {settings.rejects.topic}"
        self._rejects, self._scores = settings.rejects.topic, settings.scores.topic
        self._give_up_after_s = settings.worker.unavailable_after_s
        self._connect, self._make_durable = connect, make_durable
        self._snapshot, self._clock = snapshot, clock
        self._publisher: Publisher | None = None
        self._waiting: deque[tuple[str, bytes | None, bytes, Mapping[str, bytes]]] = deque()
        self._send_at = clock() + WAITING_S
        self._away_since: float | None = None
        self.trouble: str | None = None
        self._encoder = msgspec.json.Encoder()
        only_id = settings.model_copy(update={"fields": (), "crosses": ()})
        self._ids = Decoder(only_id, ids=True, labels=False) if settings.message.id else None

    @property
    def full(self) -> bool:
        """Whether so much waits that nothing more may be learned before it is gone."""
        return len(self._waiting) >= WAITING

    def put(self, number: int, block: Block, reject: Reject) -> None:
        """A dead letter: key and value as they came; where they came from and why they went as headers."""
        assert self._rejects is not None
        message = block.message(reject.row)
        headers = {
            "number": str(number),
            "topic": message.topic,
            "partition": str(message.partition),
            "offset": str(message.offset),
            "reason": reject.reason,
            "detail": reject.detail,
        }
        encoded = {name: text.encode("utf-8", "replace") for name, text in headers.items()}
        self._waiting.append((self._rejects, message.key, message.value, encoded))

    def scored(self, block: Block, rows: npt.NDArray[np.int64], margins: npt.NDArray[np.float64]) -> None:
        """A score for each of `rows` of the block, whose margins these are."""
        assert self._scores is not None
        ids = self._ids_of(block)
        snapshot = self._snapshot()
        offsets = block.offsets[rows].tolist()
        for row, margin, offset in zip(rows.tolist(), margins.tolist(), offsets, strict=True):
            score = Score(
                ids.get(row), sigmoid(margin), margin, block.topic, block.partition, offset, snapshot
            )
            self._waiting.append((self._scores, None, self._encoder.encode(score), {}))

    def keep_up(self) -> None:
        """Sends what waits, where it is much or has waited long; after each block, and now and then."""
        if self.full or self._clock() >= self._send_at:
            self._attempt(self._send)

    def try_sync(self) -> bool:
        """Whether everything is acknowledged; False where the brokers are away and may come back."""
        return self._attempt(self.sync)

    def sync(self) -> None:
        """Returns once everything is acknowledged; raises Unavailable where it is not within seconds."""
        self._send()
        if self._publisher is not None:
            self._publisher.flush(FLUSH_S)

    def close(self) -> None:
        """Lets the brokers go; what still waits is in no checkpoint and will come again."""
        if self._publisher is not None:
            self._publisher.close()
            self._publisher = None

    def _attempt(self, call: Callable[[], None]) -> bool:
        try:
            call()
        except Unavailable as away:
            self.trouble = str(away)
            now = self._clock()
            self._away_since = now if self._away_since is None else self._away_since
            if self._give_up_after_s is not None and now - self._away_since >= self._give_up_after_s:
                raise
            return False
        self._away_since = self.trouble = None
        return True

    def _send(self) -> None:
        self._send_at = self._clock() + WAITING_S
        if not self._waiting:
            return
        self._make_durable()
        if self._publisher is None:
            self._publisher = self._connect()
        while self._waiting:
            self._publisher.send(*self._waiting[0])
            self._waiting.popleft()

    def _ids_of(self, block: Block) -> dict[int, Any]:
        """Ids by row, of the messages that have one that can be read."""
        if self._ids is None:
            return {}
        examples, _ = self._ids.decode(block)
        return dict(zip(examples.rows.tolist(), examples.ids, strict=True))
