"""Simulated records in, records of a topic out; the key is the id, so that an outcome follows its message."""

from __future__ import annotations

import time
from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING

from stream.errors import BadSettings, Unavailable

if TYPE_CHECKING:
    from simulator.courier import FeedBlock
    from simulator.faults import Records
    from simulator.log_file import FileSink
    from stream.settings import Settings
    from stream.topics import Publisher

__all__ = ["TopicSink", "cluster_of"]

PATIENCE_S = 60.0


def cluster_of(config: Path | None, servers: Sequence[str], topic: str) -> Settings:
    """Settings whose feed is this topic, on these servers or on those of the settings file.

    Raises what stream.settings.load does; what is wrong with an option is told by its name.
    """
    from stream.settings import load

    names = [name.strip() for text in servers for name in text.split(",")]
    kind = ["feed.kind=topic", f"feed.topic={topic}", *([f"feed.servers={names}"] if names else [])]
    try:
        return load(config, kind)
    except BadSettings as error:
        told = (
            str(error).replace("--set feed.servers:", "--servers:").replace("--set feed.topic:", "--topic:")
        )
        raise BadSettings(told) from None


class TopicSink:
    """Hands records to a publisher; implements simulator.writing.Sink. True probabilities go to `files`.

    Brokers that went away are waited for, a minute at most. Raises what the publisher raises.
    """

    def __init__(self, publisher: Publisher, topic: str, outcome_topic: str | None, files: FileSink) -> None:
        self._publisher, self._topic, self._outcome_topic = publisher, topic, outcome_topic
        self._files = files
        self._answered = False
        self.late_outcomes = outcome_topic is not None

    def messages(self, records: Records) -> None:
        """Takes the next messages."""
        self._send(self._topic, records)

    def outcomes(self, records: Records) -> None:
        """Takes the next late outcomes."""
        assert self._outcome_topic is not None
        self._send(self._outcome_topic, records)

    def probabilities(self, block: FeedBlock, rows: slice) -> None:
        """Takes the true probabilities of messages that are on their way."""
        self._files.probabilities(block, rows)

    def flush(self) -> None:
        """Returns when everything is acknowledged."""
        self._publisher.flush(PATIENCE_S)

    def _send(self, topic: str, records: Records) -> None:
        for number, value in zip(records.number.tolist(), records.values, strict=True):
            self._send_one(topic, b"h%09d" % number, value)

    def _send_one(self, topic: str, key: bytes, value: bytes) -> None:
        """Tries again while brokers are away that were there."""
        deadline = time.monotonic() + PATIENCE_S
        while True:
            try:
                self._publisher.send(topic, key, value, {})
                self._answered = True
                return
            except Unavailable:
                if not self._answered or time.monotonic() > deadline:
                    raise
