"""A broker and a count of messages come in; a worker lives on them, and what was seen of it goes out."""

import json
import multiprocessing
import os
import signal
import socket
import subprocess
import sys
import time
from collections.abc import Callable, Iterator, Sequence
from contextlib import ExitStack, contextmanager, suppress
from pathlib import Path

from kafka import KafkaConsumer, TopicPartition
from kafka.errors import RetriableError

from tests.broker.running import Broker, dying_with_parent
from tests.soak.feed import PARTITIONS, Shared, send_feed
from tests.soak.judging import Outcome
from tests.soak.sampling import Sample, sample, tree_bytes

__all__ = ["WORKER", "soak"]

ROOT = Path(__file__).parent.parent.parent
WORKER = (sys.executable, "-c", "from stream.cli.main import run; run()", "work")
REMOVE_EVERY_S = 10.0
STANDSTILL_S = 600.0
STOP_S = 120.0
SETTINGS = """\
[feed]
kind = "topic"
servers = {servers}
topic = "{topic}"
group = "{topic}-worker"
start = "earliest"

[message]
id = "id"
time = "at"
label = "redelivered"
max_reject_share = 0.05

[[fields]]
path = "note"
kind = "words"
[[fields]]
path = "route"
kind = "category"
[[fields]]
path = "stop"
kind = "category"
[[fields]]
path = "hour"
kind = "category"
[[fields]]
path = "sender"
kind = "category"
[[fields]]
path = "weight_kg"
kind = "quantity"
bins = [1, 5, 10]
[[crosses]]
paths = ["route", "hour"]

[learner]
horizon = {horizon}

[rejects]
topic = "{topic}.bad"

{scores}
[state]
folder = "state"
idle_after = {idle_after}
max_live = {max_live}

[metrics]
window = {window}

[worker]
checkpoint_every_s = {checkpoint_s}
snapshot_every_s = {snapshot_s}
metrics_port = {port}
log_format = "json"
"""


def soak(
    broker: Broker,
    topic: str,
    folder: Path,
    messages: int,
    *,
    every_s: float = 2.0,
    most_per_s: float = float("inf"),
    scores: bool = False,
    worker: Sequence[str] = WORKER,
    seen: Callable[[Sample], None] = lambda sample: None,
) -> Outcome:
    """Sends `messages` to a new topic while a worker, its state in `folder`, learns them; then stops it.

    What is behind the offsets that the worker committed is deleted on the way. `scores`: whether it sends
    them to a topic; `worker`: the command; `seen` is given each sample, taken every `every_s`.
    """
    small = {"segment.bytes": str(32 << 20), "file.delete.delay.ms": "1000"}
    broker.make_topic(topic, PARTITIONS, small)
    broker.make_topic(f"{topic}.bad", 1)
    broker.make_topic(f"{topic}.scores", 1, {**small, "retention.bytes": str(256 << 20)})
    port = _write_settings(broker, topic, folder, messages, scores)
    with ExitStack() as parts:
        process = parts.enter_context(_worker([*worker, "--json"], folder))
        watch = _Watch(broker, topic, folder, process.pid, port, every_s, seen)

        def look() -> int:
            assert process.poll() is None, f"the worker ended: {(folder / 'log').read_text()[-3000:]}"
            return watch.look()

        while not watch.samples:  # what piled up before would be learned between two looks
            look()
        shared = parts.enter_context(_sender(broker, topic, messages, most_per_s))
        while shared.learned.value < messages:
            shared.learned.value = look()
        while watch.samples[-1].lag != 0:
            watch.look()
        began = time.monotonic()
        process.send_signal(signal.SIGTERM)
        exit_code = process.wait(STOP_S)
        stop_s = time.monotonic() - began
        sent, bad = shared.sent.value, shared.bad.value
    document = json.loads((folder / "document.json").read_text() or "{}")
    return Outcome(
        samples=watch.samples,
        sent=sent,
        bad=bad,
        learned=document.get("messages", 0),
        rejected=document.get("rejected", 0),
        dead_letters=_records(broker, f"{topic}.bad"),
        scores=_records(broker, f"{topic}.scores") if scores else None,
        exit_code=exit_code,
        stop_s=stop_s,
        checkpoints=document.get("checkpoints", 0),
        refused_coordinates=document.get("refused_coordinates", 0),
        broker_bytes=watch.broker_bytes,
    )


class _Watch:
    """Looks at a worker every so often, and has the broker delete what it committed."""

    def __init__(
        self,
        broker: Broker,
        topic: str,
        folder: Path,
        pid: int,
        port: int,
        every_s: float,
        seen: Callable[[Sample], None],
    ) -> None:
        self.samples: list[Sample] = []
        self.broker_bytes = 0
        self._broker, self._topic, self._state = broker, topic, folder / "state"
        self._pid, self._port, self._every_s, self._seen = pid, port, every_s, seen
        self._began_s = self._moved_s = self._removed_s = time.monotonic()

    def look(self) -> int:
        """Waits for the next look and takes it; the messages that the worker has learned."""
        time.sleep(self._every_s)
        now = time.monotonic()
        if now - self._removed_s > REMOVE_EVERY_S:
            with suppress(RetriableError):  # nothing was committed yet
                self._remove()
            self._removed_s = now
        before = self.samples[-1].messages if self.samples else 0
        with suppress(OSError):  # it has not begun
            found = sample(self._pid, self._port, self._state, now - self._began_s)
            self.samples.append(found)
            self._seen(found)
            if found.messages > before:
                self._moved_s = now
        assert now - self._moved_s < STANDSTILL_S, "the worker stands still"
        return self.samples[-1].messages if self.samples else 0

    def _remove(self) -> None:
        self.broker_bytes = max(self.broker_bytes, tree_bytes(self._broker.folder / "data"))
        group, places = f"{self._topic}-worker", [TopicPartition(self._topic, p) for p in range(PARTITIONS)]
        with self._broker.admin() as admin:
            found = admin.list_group_offsets({group: places})[group]
        behind = {place.partition: at.offset for place, at in found.items() if at.offset > 0}
        if behind:
            self._broker.delete_records(self._topic, behind)


def _write_settings(broker: Broker, topic: str, folder: Path, messages: int, scores: bool) -> int:
    """Bounds of memory that are reached long before the end. Returns the port of the metrics."""
    with socket.socket() as trial:
        trial.bind(("127.0.0.1", 0))
        port = int(trial.getsockname()[1])
    text = SETTINGS.format(
        servers=json.dumps(broker.servers),
        topic=topic,
        scores=f'[scores]\ntopic = "{topic}.scores"\n' if scores else "",
        horizon=max(1_000, messages // 4),
        idle_after=max(1_000, messages // 20),
        max_live=min(max(messages // 40, 2_000), 150_000),
        window=max(1_000, min(100_000, messages // 40)),
        checkpoint_s=min(20.0, messages / 200_000),
        snapshot_s=min(60.0, messages / 100_000),
        port=port,
    )
    folder.mkdir(parents=True, exist_ok=True)
    (folder / "bedload.toml").write_text(text)
    return port


@contextmanager
def _worker(command: Sequence[str], folder: Path) -> Iterator[subprocess.Popen[bytes]]:
    with (folder / "log").open("wb") as log, (folder / "document.json").open("wb") as document:
        process = subprocess.Popen(
            [*dying_with_parent(), *command, "--config", str(folder / "bedload.toml")],
            stdin=subprocess.DEVNULL,
            stdout=document,
            stderr=log,
            cwd=ROOT,
            env={**os.environ, "PYTHONPATH": str(ROOT)},
        )
        try:
            yield process
        finally:
            process.kill()
            process.wait()


@contextmanager
def _sender(broker: Broker, topic: str, messages: int, most_per_s: float) -> Iterator[Shared]:
    spawn = multiprocessing.get_context("spawn")
    shared = Shared(*(spawn.Value("q", 0) for _ in range(3)))
    arguments = (broker.servers[0], topic, messages, shared, most_per_s)
    sender = spawn.Process(target=send_feed, args=arguments, daemon=True)
    sender.start()
    try:
        yield shared
    finally:
        sender.kill()
        sender.join()


def _records(broker: Broker, topic: str) -> int:
    place = TopicPartition(topic, 0)
    consumer = KafkaConsumer(bootstrap_servers=broker.servers)
    try:
        return int(consumer.end_offsets([place])[place])
    finally:
        consumer.close()
