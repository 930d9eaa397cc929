"""Clocks that jump, and signals amid a full load, in; checkpoints that go on, and an end in order, out."""

import os
import signal
import threading
import time
from datetime import datetime

import pytest
from kafka import KafkaProducer, TopicPartition

from stream.journal import Kind
from stream.snapshots import Snapshots
from tests.fault_rig import (
    RUN,
    Worker,
    kept_whole,
    note,
    notes,
    nothing_lost_or_doubled,
    send,
    settings_of,
    spans_of,
    worked,
)
from tests.replays import last_checkpoint, newest

YEAR_S = 365 * 86_400
JUMPING = f"""
import signal, time
shift = [0]
now, now_ns = time.time, time.time_ns
time.time = lambda: now() + shift[0]
time.time_ns = lambda: now_ns() + shift[0] * 10**9
signal.signal(signal.SIGUSR1, lambda *_: shift.__setitem__(0, shift[0] + {YEAR_S}))
signal.signal(signal.SIGUSR2, lambda *_: shift.__setitem__(0, shift[0] - {2 * YEAR_S}))
{RUN}
"""
"""A worker whose wall clock goes a year ahead at SIGUSR1, and two years back at SIGUSR2."""


def year_of(worker):
    return datetime.fromisoformat(worker.events("checkpoint")[-1]["at"]).year


def test_clocks_that_jump_ahead_and_back_change_no_interval_and_lose_nothing(broker, topic, tmp_path):
    """No test may set the machine's clock: the process is given another, and files are given other times."""
    broker.make_topic(topic)
    bounds = {"stale_after_s": 100, "unavailable_after_s": 200}
    settings = settings_of(broker, topic, state={"keep_checkpoints": 2}, worker=bounds)
    this_year, sent = datetime.now().year, 0

    def more():
        nonlocal sent
        send(broker, topic, notes(sent, sent + 300))
        sent += 300
        worker.saved(sent)
        assert worker.ask("/readyz")[0] == 200
        assert 0 <= worker.figure("bedload_last_checkpoint_age_seconds") < YEAR_S
        assert 0 <= worker.figure("bedload_last_fetch_age_seconds") < YEAR_S

    with Worker(settings, tmp_path, code=JUMPING) as worker:
        more()
        for number, year in ((signal.SIGUSR1, this_year + 1), (signal.SIGUSR2, this_year - 1)):
            worker.tell(number)
            more()
            worker.until(lambda year=year: year_of(worker) in (year, year + 1), f"a log line of {year}")
        for shift in (2 * YEAR_S, -2 * YEAR_S):
            at = time.time() + shift
            os.utime(newest(worker.state), (at, at))
            more()
        assert worker.stop()["messages"] == sent
    assert worked(settings, tmp_path)["resumed_from"] == sent
    nothing_lost_or_doubled(settings, tmp_path, {0: sent})


# ---- signals under load ------------------------------------------------------------------------------------

STOP_S = 10
WIDE = 2_000
"""Words of a message that nobody has seen before."""


class Load:
    """Sends some 2,000 messages a second until `with` ends; `sent`: how many."""

    def __init__(self, broker, topic):
        self.sent = 0
        self._over = threading.Event()
        self._topic = topic
        self._producer = KafkaProducer(bootstrap_servers=broker.servers, acks="all", linger_ms=5)
        self._thread = threading.Thread(target=self._send)

    def __enter__(self):
        self._thread.start()
        return self

    def __exit__(self, *_):
        self._over.set()
        self._thread.join()
        self._producer.flush()
        self._producer.close()

    def _send(self):
        while not self._over.is_set():
            for _ in range(50):
                self._producer.send(self._topic, note(self.sent), partition=1)
                self.sent += 1
            time.sleep(0.02)


@pytest.mark.parametrize("number", [signal.SIGTERM, signal.SIGINT])
def test_told_to_stop_under_load_it_is_not_ready_saves_commits_and_ends_within_ten_seconds(
    broker, topic, tmp_path, number
):
    """With 400,000 coordinates to save, and messages that go on coming."""
    broker.make_topic(topic, 2)
    group = f"{topic}-worker"
    settings = settings_of(
        broker,
        topic,
        feed={"group": group, "max_line_bytes": 1 << 20},
        message={"max_tokens": 4_000},
        worker={"checkpoint_every_s": 1_000, "snapshot_every_s": 1_000},
        state={"checkpoint_every": 10_000_000},
    )
    wide = [note(n, note=" ".join(f"w{n * WIDE + word}" for word in range(WIDE))) for n in range(200)]
    send(broker, topic, wide)
    with Worker(settings, tmp_path) as worker, Load(broker, topic) as load:
        worker.past("bedload_live", 400_000)
        worker.past("bedload_learned_messages", 1_000)
        sent, began = load.sent, time.monotonic()
        worker.tell(number)
        assert "stopping" in worker.not_ready(seconds=STOP_S)
        done = worker.ended()
        assert time.monotonic() - began < STOP_S
        assert load.sent > sent, "messages went on coming"
    assert done["interrupted"]
    assert kept_whole(tmp_path / "state") == done["messages"] > 1_000
    name, *_ = last_checkpoint(tmp_path / "state")
    assert [entry.name for entry in Snapshots(tmp_path / "state/snapshots", 9).list()] == [name]
    read = {span.partition: span.last for span in spans_of(tmp_path / "state", *Kind)}
    assert sum(read.values()) == done["messages"]
    with broker.admin() as admin:
        places = [TopicPartition(topic, partition) for partition in read]
        committed = admin.list_group_offsets({group: places})[group]
    assert {place.partition: at.offset for place, at in committed.items()} == read
    assert worked(settings, tmp_path)["messages"] == 200 + load.sent
    nothing_lost_or_doubled(settings, tmp_path, {0: 200, 1: load.sent})
