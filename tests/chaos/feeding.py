"""A topic in; invented handoffs to it, bad records among them, and what is true of each, out."""

import random
import threading
from collections import Counter
from contextlib import contextmanager
from dataclasses import dataclass

from kafka import KafkaProducer

from simulator import CourierFeed
from simulator.courier import blocks

__all__ = ["Feed", "Sent"]

PARTITIONS = 4
BAD_SHARE = 0.015
BAD = {
    b'{"id": "cut", "note": "left wi': "bad_json",
    b"not JSON at all": "bad_json",
    b"": "bad_json",
    b"[1, 2]": "not_an_object",
    b'{"id": "x", "note": 7, "redelivered": true}': "wrong_type",
    b'{"id": "x", "note": "x\xff", "redelivered": true}': "bad_utf8",
    b'{"id": "x", "weight_kg": NaN, "redelivered": true}': "not_finite",
    b'{"id": "x", "note": "gate code", "redelivered": "yes"}': "bad_label",
    b'{"id": "x", "note": "%b", "redelivered": true}'
    % b" ".join(b"w%d" % i for i in range(80)): "too_many_tokens",
    b'{"id": "x", "note": "%b"}' % (b"long " * 2_000): "line_too_long",
}
"""With the reason for which each is rejected."""


@dataclass(frozen=True)
class Sent:
    """A record as it was sent. `token`: no other has it; `reason`: why it is bad, None for good ones."""

    key: bytes | None
    value: bytes | None
    token: str | None = None
    labelled: bool = False
    reason: str | None = None

    @property
    def good(self):
        """Whether it is a message that is scored."""
        return self.value is not None and self.reason is None


class Feed:
    """`sent`: what stands at each (partition, offset) of the topic, as the broker said."""

    def __init__(self, servers, topic, seed):
        self.topic = topic
        self.sent = {}
        self._draw = random.Random(seed)
        self._lines = (
            line for block in blocks(CourierFeed(seed, 2_000_000)) for line in block.lines.splitlines()
        )
        self._producer = KafkaProducer(bootstrap_servers=servers, acks="all", linger_ms=2)
        self._lock = threading.Lock()
        self._count = 0

    def send(self, count):
        """Sends so many more, and returns when the broker has them."""
        with self._lock:
            futures = []
            for _ in range(count):
                record = self._next()
                partition = self._draw.choice((0, 0, 1, 1, 2, 2, 2, 3))
                futures.append(
                    (record, self._producer.send(self.topic, record.value, record.key, partition=partition))
                )
            for record, future in futures:
                done = future.get(timeout=60)
                self.sent[done.partition, done.offset] = record

    @contextmanager
    def flowing(self):
        """Sends a few all the time, meanwhile."""
        over = threading.Event()
        trouble = []

        def flow():
            pause = random.Random(1)
            try:
                while not over.wait(pause.uniform(0.0, 0.06)):
                    self.send(pause.randint(1, 12))
            except BaseException as error:
                trouble.append(error)

        thread = threading.Thread(target=flow, name="feed")
        thread.start()
        try:
            yield
        finally:
            over.set()
            thread.join()
        if trouble:
            raise trouble[0]

    def close(self):
        self._producer.close()

    def counts(self):
        """How many records there are of each sort: good, labelled, and those rejected by reason."""
        records = self.sent.values()
        return {
            "good": sum(record.good for record in records),
            "labelled": sum(record.labelled for record in records),
            "rejected": dict(Counter(record.reason for record in records if record.reason)),
        }

    def _next(self):
        """A record: most are good, some come without outcome, id, key or value, a few are bad."""
        self._count += 1
        draw = self._draw
        key = draw.choice((None, b"", b"depot %d" % self._count))
        chance = draw.random()
        if chance < BAD_SHARE:
            value = draw.choice(list(BAD))
            return Sent(key, value, reason=BAD[value])
        if chance < BAD_SHARE + 0.002:
            return Sent(key or b"depot", None)
        line = next(self._lines)
        token = line.split(b'"', 4)[3].decode()
        if chance < 0.05:
            return Sent(key, line.replace(b'"redelivered"', b'"outcome_to_come"'), token)
        if chance < 0.07:
            return Sent(key, line.replace(b'"id"', b'"no_id"'), None, labelled=True)
        if chance < 0.09:
            line = line.replace(b',"', b',\n "', 3)
        return Sent(key, line, token, labelled=True)
