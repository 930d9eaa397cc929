"""A worker from the broker to the last checkpoint, against a bare loop that polls the same topic."""

from __future__ import annotations

import os
import tempfile
import time
import uuid
from collections.abc import Callable, Iterator
from contextlib import contextmanager, redirect_stderr
from functools import partial
from io import StringIO
from pathlib import Path
from typing import NamedTuple

from kafka import KafkaConsumer, TopicPartition

from stream.message import Block
from stream.runs.work import work
from stream.settings import Settings
from stream.topics import Secrets, TopicSource
from stream.topics.client import FETCH_BYTES
from tests.bench.feed import log_of
from tests.bench.figures import Figure, alternating
from tests.broker.filling import Filler
from tests.broker.running import Broker

__all__ = ["worker"]

PARTITIONS = 4
BATCH_BYTES = 16_384
"""To which producers fill their batches unless told otherwise."""
TICKS = os.sysconf("SC_CLK_TCK")


class Times(NamedTuple):
    """Seconds by the clock, from the first message and from the call; of processor time, and the broker's."""

    steady: float
    whole: float
    cpu: float
    broker_cpu: float


def worker(messages: int, rounds: int, distinct: int = 1_000_000) -> list[Figure]:
    """Messages/s of a worker, by the clock with both cores in use, over those of the bare loop."""
    os.sched_setaffinity(0, range(os.cpu_count() or 1))
    figures = []
    with running_broker() as broker:
        for lz4 in (False, True):
            topic = f"bench-{uuid.uuid4().hex}"
            fill(broker, topic, messages, distinct, lz4)
            learn(broker, topic)  # kernels are loaded, what the topic holds is in the page cache
            ours, bare = (
                Times(*map(min, zip(*found, strict=True)))
                for found in alternating(
                    rounds,
                    partial(learn, broker, topic),
                    partial(poll, broker, topic, messages),
                )
            )
            figures.append(compared(ours, bare, messages, lz4))
    return figures


def compared(ours: Times, bare: Times, messages: int, lz4: bool) -> Figure:
    """The figure of a topic, with what each costs a message."""
    details = {
        "ratio with start and end": bare.whole / ours.whole,
        "ratio of processor time": bare.cpu / ours.cpu,
    }
    for name, times in (("worker", ours), ("bare loop", bare)):
        each = {
            "by the clock": times.steady,
            "with start and end": times.whole,
            "processor time": times.cpu,
            "of the broker": times.broker_cpu,
        }
        details |= {f"{name}, µs a message, {key}": 1e6 * value / messages for key, value in each.items()}
    what = "the same, batches compressed by lz4" if lz4 else "messages/s from the broker against bare polling"
    return Figure(what, bare.steady / ours.steady, "times", None if lz4 else 0.6, details=details)


@contextmanager
def running_broker() -> Iterator[Broker]:
    with tempfile.TemporaryDirectory() as folder, Broker.start(Path(folder)) as broker:
        yield broker


def fill(broker: Broker, topic: str, messages: int, distinct: int, lz4: bool) -> None:
    """A topic with the messages of the bench log, in turn over its partitions."""
    broker.make_topic(topic, PARTITIONS)
    with log_of(messages, distinct) as folder, Filler(broker.servers[0], topic, lz4=lz4) as filler:
        batches: list[list[bytes]] = []
        for batch in batches_of(folder / "log.jsonl"):
            batches.append(batch)
            if len(batches) == PARTITIONS:
                filler.send(dict(enumerate(batches)))
                batches.clear()
        if batches:
            filler.send(dict(enumerate(batches)))


def batches_of(log: Path) -> Iterator[list[bytes]]:
    """Lines, as many at a time as a producer takes."""
    batch: list[bytes] = []
    size = 0
    with log.open("rb") as lines:
        for line in lines:
            if size + len(line) > BATCH_BYTES:
                yield batch
                batch, size = [], 0
            batch.append(line.rstrip())
            size += len(line)
    yield batch


class Noted(TopicSource):
    """Notes when its first messages came."""

    first_s: float | None = None

    def read(self, limit: int) -> Block:
        block = super().read(limit)
        if self.first_s is None and len(block):
            self.first_s = time.perf_counter()
        return block


def learn(broker: Broker, topic: str) -> Times:
    """`bedload work --until-end` in a fresh folder, with its usual checkpoints, the last one included."""
    settings = Settings.model_validate(
        {
            "feed": {"kind": "topic", "servers": broker.servers, "topic": topic, "start": "earliest"},
            "message": {"id": "id", "label": "y"},
            "fields": [{"path": "note", "kind": "words"}],
            "learner": {"horizon": 10_000_000},
        }
    )
    source = Noted(settings.feed, Secrets(settings))

    def run() -> float:
        with tempfile.TemporaryDirectory() as folder, redirect_stderr(StringIO()):
            work(settings, Path(folder), until_end=True, source=source)
        assert source.first_s is not None
        return source.first_s

    return clocked(broker, run)


def poll(broker: Broker, topic: str, messages: int) -> Times:
    """The bare loop: polls until it has counted all messages, and looks at none."""

    def run() -> float:
        consumer = KafkaConsumer(
            bootstrap_servers=broker.servers,
            enable_auto_commit=False,
            isolation_level="read_committed",
            check_crcs=True,
            fetch_max_bytes=FETCH_BYTES,
            metrics_enabled=False,
        )
        places = [TopicPartition(topic, partition) for partition in range(PARTITIONS)]
        consumer.assign(places)
        consumer.seek_to_beginning(*places)
        count, first_s = 0, 0.0
        while count < messages:
            found = consumer.poll(timeout_ms=250)
            if found and not count:
                first_s = time.perf_counter()
            count += sum(map(len, found.values()))
        consumer.close()
        return first_s

    return clocked(broker, run)


def clocked(broker: Broker, run: Callable[[], float]) -> Times:
    """What a run takes that gives the moment of its first message."""
    wall, cpu, broker_cpu = time.perf_counter(), time.process_time(), cpu_of(broker.pid)
    first = run()
    end = time.perf_counter()
    return Times(end - first, end - wall, time.process_time() - cpu, cpu_of(broker.pid) - broker_cpu)


def cpu_of(pid: int) -> float:
    """Seconds of processor time of another process."""
    fields = Path(f"/proc/{pid}/stat").read_text().rpartition(")")[2].split()
    return (int(fields[11]) + int(fields[12])) / TICKS
