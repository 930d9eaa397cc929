"""Settings in, `bedload work` as a process of its own out, asked over its port and held to its journal."""

import json
import random
import signal
import socket
import subprocess
import sys
import time
import urllib.error
import urllib.request
from contextlib import suppress
from pathlib import Path

from kafka import KafkaConsumer, KafkaProducer

from stream.checkpoints import Checkpoints
from stream.journal import FILE_NAME, Kind, Mark, spans_after
from stream.runs.retracing import retrace
from stream.snapshots import Snapshots, read_snapshot
from tests.broker.running import dying_with_parent
from tests.replays import config_for, settings_for

ROOT = Path(__file__).parent.parent
RUN = "from stream.cli.main import run; run()"
TICKS = 100
"""Of processor time in a second, as /proc counts them."""
PATIENCE_S = 180
"""Kernels may have to be compiled first."""
WORDS = "left with caretaker no answer at door gate code wrong lift broken dog porter depot"


def note(number, **more):
    """Message `number` of an invented feed, the same at each call."""
    draw = random.Random(number)
    words = " ".join(draw.choice(WORDS.split()) for _ in range(6))
    fields = {"id": f"h{number}", "note": words, "route": f"R{draw.randrange(40)}", "hour": number % 24}
    return json.dumps({**fields, "redelivered": "dog" in words, **more}).encode()


def notes(first, last):
    return [note(number) for number in range(first, last)]


def send(broker, topic, lines, partition=0, **options):
    producer = KafkaProducer(bootstrap_servers=broker.servers, acks="all", linger_ms=5, **options)
    for line in lines:
        producer.send(topic, line, b"depot", partition=partition)
    producer.flush()
    producer.close()


def everything(broker, topic):
    """All records of a topic."""
    consumer = KafkaConsumer(
        topic,
        bootstrap_servers=broker.servers,
        auto_offset_reset="earliest",
        enable_auto_commit=False,
        consumer_timeout_ms=1_500,
    )
    found = list(consumer)
    consumer.close()
    return found


def settings_of(broker, topic, **sections):
    """Settings of a worker that writes checkpoints and log lines often."""
    feed = {"kind": "topic", "servers": broker.servers, "topic": topic, "start": "earliest"}
    worker = {"checkpoint_every_s": 0.3, "snapshot_every_s": 0.6, "log_every_s": 0.2, "log_format": "json"}
    return settings_for(
        [],
        feed={**feed, **sections.pop("feed", {})},
        worker={**worker, **sections.pop("worker", {})},
        learner={"horizon": 1_000_000, **sections.pop("learner", {})},
        **sections,
    )


class Worker:
    """`bedload work` in a process, with its settings file and state in `folder`, until `with` ends.

    `code`: what the process runs in place of the installed command.
    """

    def __init__(self, settings, folder, *options, code=RUN, **popen):
        folder.mkdir(exist_ok=True)
        self.folder, self.state = folder, folder / "state"
        self._errors = folder / "stderr"
        self._port = free_port()
        config = config_for(settings, folder)
        arguments = ["work", "--config", config, "--json", "--set", f"worker.metrics_port={self._port}"]
        with self._errors.open("wb") as errors:
            self._process = subprocess.Popen(
                [*dying_with_parent(), sys.executable, "-c", code, *arguments, *options],
                cwd=ROOT,
                stdin=subprocess.DEVNULL,
                stdout=subprocess.PIPE,
                stderr=errors,
                **popen,
            )

    def __enter__(self):
        return self

    def __exit__(self, *_):
        self.tell(signal.SIGKILL)
        self._process.wait()
        self._process.stdout.close()

    @property
    def pid(self):
        return self._process.pid

    @property
    def lives(self):
        return self._process.poll() is None

    def tell(self, number):
        self._process.send_signal(number)

    def cpu_s(self):
        """Seconds of processor time so far."""
        fields = Path(f"/proc/{self.pid}/stat").read_text().rpartition(")")[2].split()
        return (int(fields[11]) + int(fields[12])) / TICKS

    def ask(self, path):
        """Status and text of an answer of its port; 0 where nobody listens."""
        with suppress(OSError):
            try:
                with urllib.request.urlopen(f"http://127.0.0.1:{self._port}{path}", timeout=5) as answer:
                    return answer.status, answer.read().decode()
            except urllib.error.HTTPError as error:
                with error:
                    return error.code, error.read().decode()
        return 0, ""

    def figure(self, name):
        """A figure of its metrics; None while there is none."""
        for line in self.ask("/metrics")[1].splitlines():
            if line.startswith(f"{name} "):
                return float(line.split()[1])
        return None

    def learned(self, messages):
        """Waits until the state holds so many."""
        self.until(lambda: self.figure("bedload_learned_messages") == messages, f"{messages} learned")

    def saved(self, messages):
        """Waits until its newest checkpoint holds so many; it may remove older ones meanwhile."""

        def holds():
            found = Checkpoints(self.state / "checkpoints", 1).newest_manifest()
            return found is not None and found[1]["messages"] == messages

        self.until(holds, f"a checkpoint of {messages}")

    def past(self, name, least):
        """Waits until a figure of its metrics is larger."""
        self.until(lambda: (self.figure(name) or 0) > least, f"{name} past {least}")

    def ready(self):
        """Waits until it says so."""
        self.until(lambda: self.ask("/readyz")[0] == 200, "it is ready")

    def not_ready(self, *words, seconds=PATIENCE_S):
        """Waits until it says so for a reason that has these words; the reason."""
        found = []

        def holds():
            found[:] = self.ask("/readyz")
            return found[0] == 503 and all(word in found[1] for word in words)

        self.until(holds, f"it is not ready: {words}", seconds)
        return found[1]

    def until(self, holds, what, seconds=PATIENCE_S):
        deadline = time.monotonic() + seconds
        while not holds():
            assert self.lives, f"it ended with {self._process.returncode}: {self.said}"
            assert time.monotonic() < deadline, f"waited in vain: {what}; {self.ask('/readyz')}; {self.said}"
            time.sleep(0.05)

    def wait(self, seconds=PATIENCE_S):
        """Its exit code."""
        return self._process.wait(seconds)

    def stop(self, number=signal.SIGTERM):
        """Tells it to stop; its closing document."""
        self.tell(number)
        return self.ended()

    def ended(self):
        """Waits until it ended well; its closing document."""
        assert self.wait() == 0, self.said
        return json.loads(self._process.stdout.read())

    def events(self, name):
        """Its log lines of that event."""
        lines = self._errors.read_text().splitlines()
        return [event for event in map(json.loads, filter(is_object, lines)) if event["event"] == name]

    @property
    def said(self):
        """What it wrote on standard error beside its log."""
        lines = self._errors.read_text().splitlines()
        return "\n".join(line for line in lines if not is_object(line))


def is_object(line):
    """Whether it is a line of the log, which a full disk may have cut."""
    return line.startswith("{") and line.endswith("}")


def free_port():
    with socket.socket() as trial:
        trial.bind(("127.0.0.1", 0))
        return trial.getsockname()[1]


def worked(settings, folder, *options):
    """A worker that has gone to the end of what is there; its closing document."""
    with Worker(settings, folder, "--until-end", *options) as worker:
        return worker.ended()


def refused(settings, folder, code, *words, options=("--until-end",)):
    """A worker that ends by itself with that exit code and says these words; the text."""
    with Worker(settings, folder, *options) as worker:
        assert worker.wait() == code, worker.said
        assert all(word in worker.said for word in words), worker.said
        assert "Traceback" not in worker.said
        return worker.said


def kept_whole(state):
    """Newest checkpoint and snapshots are whole; the messages of that checkpoint."""
    for entry in Snapshots(state / "snapshots", 9).list():
        read_snapshot(entry.path)
    entries = Checkpoints(state / "checkpoints", 9).list()
    assert [entry.trouble for entry in entries] == [None] * len(entries)
    return entries[0].messages if entries else 0


def spans_of(state, *kinds):
    return [span for span, _ in spans_after(state / FILE_NAME, Mark()) if span.kind in kinds]


def nothing_lost_or_doubled(settings, folder, ends):
    """The newest checkpoint holds every message before the `ends` of the partitions once, in the journal's
    order to the byte."""
    state = folder / "state"
    for partition, end in ends.items():
        at = 0
        for span in spans_of(state, Kind.READ):
            if span.partition == partition:
                assert span.first == at, f"partition {partition}: {at} was followed by {span.first}"
                at = span.last
        assert at == end, f"partition {partition}: read to {at} of {end}"
    assert kept_whole(state) == sum(ends.values())
    same_when_learned_again(settings, folder)


def same_when_learned_again(settings, folder):
    """`replay --journal` ends in the bytes of the newest checkpoint."""
    found = retrace(settings, folder / "again", folder / "state", fresh=True)
    assert found.differences == []
