"""A topic in memory with several partitions, and a publisher that writes down what it is given: no broker."""

import random
from collections.abc import Mapping

import numpy as np

from stream.errors import BadSettings, Unavailable
from stream.message import Block, Message


class MemoryTopic:
    """Implements stream.message.LiveSource over lists of values, one list a partition.

    Offsets count from 0 with every third one missing, as those of transaction markers are. Which partition
    a block comes from, and how long it is, is up to `seed`: between partitions there is no order.
    """

    def __init__(self, partitions, seed=0, *, start="earliest", on_gap="refuse"):
        self.partitions = partitions
        self.log_starts = dict.fromkeys(range(len(partitions)), 0)
        self.commits = []
        self._start = start
        self._on_gap = on_gap
        self._random = random.Random(seed)
        self._next = {}
        self._gaps = []
        self._ends = [self.end(partition) for partition in range(len(partitions))]
        self.closed = False

    def end(self, partition):
        """The offset that the partition's next message will have."""
        return offset_of(len(self.partitions[partition]))

    def start(self):
        """Goes to the first message that is there, or behind the last."""
        if self._start is None:
            raise BadSettings("feed.start is missing")
        for partition in range(len(self.partitions)):
            at = self.log_starts[partition] if self._start == "earliest" else self.end(partition)
            self._next.setdefault(partition, at)

    def seek(self, position):
        """Refuses gaps, or passes over them."""
        self._next = {int(partition): offset for partition, offset in position["next"].items()}
        for partition, offset in self._next.items():
            if offset < self.log_starts[partition]:
                self._gaps.append((partition, offset, self.log_starts[partition]))
        if self._gaps and self._on_gap == "refuse":
            raise BadSettings(f"messages are gone: {self._gaps}")
        for partition, _, last in self._gaps:
            self._next[partition] = last

    def gaps(self):
        """What was passed over since the last call."""
        found, self._gaps = self._gaps, []
        return found

    def next_offsets(self) -> Mapping[int, int]:
        """By partition."""
        return self._next

    def place(self, partition, offset):
        """Goes there."""
        self._next[partition] = offset

    def read(self, limit):
        """A few messages of some partition."""
        waiting = [p for p in range(len(self.partitions)) if self._next.get(p, 0) < self.end(p)]
        if not waiting or self._random.random() < 0.05:
            return self._block(0, [])
        partition = self._random.choice(waiting)
        first, log_start = self._next.get(partition, 0), self.log_starts[partition]
        if first < log_start and self._on_gap == "skip":
            self._gaps.append((partition, first, log_start))
            self._next[partition] = log_start
            return self._block(partition, [])
        return self.read_range(
            partition, self._next.get(partition, 0), self.end(partition), self._random.randint(1, limit)
        )

    def read_range(self, partition, first, last, limit):
        """Those that are asked for; now and then none yet."""
        if first < self.log_starts[partition]:
            raise BadSettings(f"messages of partition {partition} from {first} on are gone")
        if self._random.random() < 0.05:
            return self._block(partition, [])
        rows = [row for row in range(len(self.partitions[partition])) if first <= offset_of(row) < last]
        taken = rows[:limit]
        self._next[partition] = last if taken == rows else offset_of(taken[-1]) + 1
        return self._block(partition, taken)

    def position(self):
        """JSON types."""
        return {"next": {str(partition): self._next[partition] for partition in sorted(self._next)}}

    def at_end(self):
        """Whether all that was there at first was read."""
        return all(self._next.get(p, 0) >= end for p, end in enumerate(self._ends))

    def fraction_read(self):
        """Never known."""
        return

    def commit(self, position):
        """Remembers it."""
        self.commits.append(position)

    def close(self):
        """Once."""
        assert not self.closed
        self.closed = True

    def _block(self, partition, rows):
        values = [self.partitions[partition][row] for row in rows]
        lengths = np.array([len(value) for value in values], np.int64)
        ends = np.cumsum(lengths + 1) - 1
        offsets = np.array([offset_of(row) for row in rows], np.int64)
        starts = ends - lengths

        def original(row):
            return Message(
                "memory", partition, int(offsets[row]), 0, b"key of %d" % offsets[row], values[row]
            )

        return Block(
            "memory", partition, b"".join(v + b"\n" for v in values), starts, ends, offsets, original
        )


def offset_of(row):
    """0, 1, 3, 4, 6, 7, ...: as if every third record were none of ours."""
    return row + row // 2


class MemoryPublisher:
    """Keeps what it is sent in `sent`, once it is flushed in `acknowledged`; does not answer while `away`."""

    def __init__(self, log=None):
        self.sent = []
        self.acknowledged = []
        self.away = False
        self.closed = False
        self.log = [] if log is None else log

    def send(self, topic, key, value, headers):
        """Takes a record."""
        if self.away:
            raise Unavailable("nobody answers")
        self.log.append("send")
        self.sent.append((topic, key, value, dict(headers)))

    def flush(self, timeout_s):
        """Acknowledges all."""
        if self.away:
            raise Unavailable("nobody answers")
        self.log.append("flush")
        self.acknowledged = list(self.sent)

    def close(self):
        """Nothing to release."""
        self.closed = True
