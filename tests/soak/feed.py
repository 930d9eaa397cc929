"""A count of messages in; handoffs with a growing vocabulary and bad ones among them go to a topic."""

from __future__ import annotations

import os
import time
from collections.abc import Iterator
from dataclasses import dataclass
from multiprocessing.sharedctypes import Synchronized

from simulator.courier import Courier
from simulator.feed import CourierFeed
from tests.broker.filling import Filler

__all__ = ["PARTITIONS", "Shared", "send_feed", "values_of"]

PARTITIONS = 4
BAD_EVERY = 100
BATCH = 64
"""Values in a batch: about 20 KB, as producers fill them unless told otherwise."""
AHEAD = 300_000
WORDS = 24


@dataclass(frozen=True)
class Shared:
    """What the process that sends shares with that which watches, and which writes `learned`."""

    learned: Synchronized[int]
    sent: Synchronized[int]
    bad: Synchronized[int]


def values_of(messages: int) -> Iterator[tuple[list[bytes], int]]:
    """Values, some thousand at a time, and how many of them are bad: one in a hundred."""
    feed = CourierFeed(seed=17, messages=messages, words_per_note=WORDS, messages_per_day=200_000)
    courier = Courier(feed)
    for number in range(feed.block_count):
        block = courier.block(number)
        values = block.lines.splitlines()
        bad = range(-block.first % BAD_EVERY, len(values), BAD_EVERY)
        for row in bad:
            values[row] = spoilt(values[row], (block.first + row) // BAD_EVERY)
        yield values, len(bad)


def spoilt(value: bytes, number: int) -> bytes:
    """What cannot be decoded, each time in another way."""
    ways = (
        value[: len(value) // 2],
        b"[%b]" % value,
        value.replace(b'"redelivered":', b'"redelivered":"perhaps","was":'),
        value.replace(b'"note":"', b'"note":"\xff'),
        value.replace(b'"note":"', b'"note":7,"text":"'),
    )
    return ways[number % len(ways)]


def send_feed(server: str, topic: str, messages: int, shared: Shared, most_per_s: float) -> None:
    """Sends all messages, at most AHEAD of what was learned; for a process of its own, which ends with its
    parent."""
    parent, began = os.getppid(), time.monotonic()
    with Filler(server, topic) as filler:
        for values, bad in values_of(messages):
            while (
                shared.sent.value > shared.learned.value + AHEAD
                or shared.sent.value > (time.monotonic() - began) * most_per_s
            ):
                if os.getppid() != parent:
                    return
                time.sleep(0.05)
            for first in range(0, len(values), BATCH * PARTITIONS):
                some = values[first : first + BATCH * PARTITIONS]
                filler.send({p: part for p in range(PARTITIONS) if (part := some[p::PARTITIONS])})
            shared.bad.value += bad
            shared.sent.value += len(values)
