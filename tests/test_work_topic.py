"""A worker on topics of a real broker in; the same bytes by its journal, dead letters and scores out."""

import json
import os
import random
import shutil
import signal
import time

import pytest
from kafka import KafkaConsumer, KafkaProducer

from stream.errors import BadSettings
from stream.journal import FILE_NAME, Kind, Mark, spans_after
from stream.runs.retracing import retrace
from stream.runs.work import work
from tests.replays import courier_lines, last_checkpoint, settings_for
from tests.work_child import Workers

PARTITIONS = 4
MESSAGES = 8_000


@pytest.fixture(scope="module")
def lines(tmp_path_factory):
    return courier_lines(tmp_path_factory.mktemp("log") / "log.jsonl")[:MESSAGES]


@pytest.fixture
def filled(broker, topic, lines):
    """A topic with the lines on its partitions."""
    broker.make_topic(topic, partitions=PARTITIONS)
    send(broker, topic, lines)
    return topic


@pytest.fixture(scope="module")
def workers():
    children = Workers()
    yield children
    children.close()


def send(broker, topic, lines):
    draw = random.Random(5)
    producer = KafkaProducer(bootstrap_servers=broker.servers, acks="all")
    for line in lines:
        producer.send(topic, value=line, key=b"depot", partition=draw.randrange(PARTITIONS))
    producer.flush()
    producer.close()


def settings_of(broker, topic, **sections):
    feed = {"kind": "topic", "servers": broker.servers, "topic": topic, "start": "earliest"}
    worker = {"checkpoint_every_s": 0.3, "snapshot_every_s": 0.7}
    return settings_for([], feed={**feed, **sections.pop("feed", {})}, worker=worker, **sections)


def everything(broker, topic):
    consumer = KafkaConsumer(
        topic,
        bootstrap_servers=broker.servers,
        auto_offset_reset="earliest",
        enable_auto_commit=False,
        consumer_timeout_ms=3_000,
    )
    found = list(consumer)
    consumer.close()
    return found


def test_a_topic_that_was_worked_is_followed_again_to_the_same_bytes(broker, filled, lines, tmp_path):
    settings = settings_of(broker, filled)
    done = work(settings, tmp_path / "state", until_end=True)
    assert done.run.summary.messages == MESSAGES
    found = retrace(settings, tmp_path / "again", tmp_path / "state")
    assert found.differences == []
    assert last_checkpoint(tmp_path / "again") == last_checkpoint(tmp_path / "state")
    send(broker, filled, lines[:100])
    done = work(settings, tmp_path / "state", until_end=True)
    assert done.run.summary.messages == MESSAGES + 100
    assert done.run.resumed_from == MESSAGES


def test_killed_and_stopped_on_a_topic_it_ends_as_if_nothing_had_been(
    broker, filled, lines, tmp_path, workers
):
    draw = random.Random(23)
    settings = settings_of(broker, filled, feed={"group": f"{filled}-worker"})
    folder = tmp_path / "state"
    for _ in range(5):
        workers.start(settings, folder)
        time.sleep(draw.uniform(0.3, 1.5))
        os.kill(workers.pid, signal.SIGKILL)
        assert workers.wait() == -signal.SIGKILL
    workers.start(settings, folder)
    time.sleep(2.0)
    os.kill(workers.pid, signal.SIGTERM)
    began = time.monotonic()
    assert workers.wait() == 0
    assert time.monotonic() - began < 10
    done = work(settings, folder, until_end=True)
    assert done.run.summary.messages == MESSAGES
    found = retrace(settings, tmp_path / "again", folder)
    assert found.differences == []


def test_dead_letters_and_scores_go_to_topics_of_the_cluster(broker, filled, lines, tmp_path):
    for name in ("bad", "scored"):
        broker.make_topic(f"{filled}.{name}", partitions=2)
    outward = {"rejects": {"topic": f"{filled}.bad"}, "scores": {"topic": f"{filled}.scored"}}
    done = work(settings_of(broker, filled, **outward), tmp_path / "state", until_end=True)
    bad = everything(broker, f"{filled}.bad")
    assert len(bad) == done.run.summary.rejected > 5
    assert {record.key for record in bad} == {b"depot"}
    assert {record.value for record in bad} <= set(lines)
    headers = dict(bad[0].headers)
    assert headers["topic"].decode() == filled
    assert set(headers) == {"number", "topic", "partition", "offset", "reason", "detail"}
    scored = [json.loads(record.value) for record in everything(broker, f"{filled}.scored")]
    assert len({(s["partition"], s["offset"]) for s in scored}) == len(scored) == MESSAGES - len(bad)


def test_a_first_start_without_a_place_to_begin_is_refused(broker, filled, tmp_path):
    settings = settings_of(broker, filled, feed={"start": None})
    with pytest.raises(BadSettings, match=r"feed\.start is missing"):
        work(settings, tmp_path / "state", until_end=True)


def test_a_journal_whose_messages_are_gone_is_followed_from_a_later_checkpoint_of_the_worker(
    broker, filled, lines, tmp_path
):
    settings = settings_of(broker, filled)
    work(settings, tmp_path / "state", until_end=True)
    send(broker, filled, lines[:400])
    broker.delete_records(filled, {1: 20})
    with pytest.raises(BadSettings, match="20 offsets were removed") as refused:
        retrace(settings, tmp_path / "again", tmp_path / "state")
    assert "--on-gap" not in str(refused.value)
    assert "--resume" in str(refused.value)
    for name in ("checkpoints", "rejects"):
        shutil.copytree(tmp_path / "state" / name, tmp_path / "later" / name)
    work(settings, tmp_path / "state", until_end=True)
    assert retrace(settings, tmp_path / "later", tmp_path / "state", resume=True).differences == []


def test_messages_that_retention_removed_are_refused_or_noted_as_a_gap(broker, filled, lines, tmp_path):
    settings = settings_of(broker, filled)
    work(settings, tmp_path / "state", until_end=True)
    send(broker, filled, lines[:400])
    last = max(
        span.last for span, _ in spans_after(tmp_path / "state" / FILE_NAME, Mark()) if span.partition == 1
    )
    broker.delete_records(filled, {1: last + 20})
    with pytest.raises(BadSettings):
        work(settings, tmp_path / "state", until_end=True)
    done = work(settings, tmp_path / "state", until_end=True, on_gap="skip")
    assert done.passed_over == 20
    assert done.run.summary.messages == MESSAGES + 400 - 20
    gaps = [s for s, _ in spans_after(tmp_path / "state" / FILE_NAME, Mark()) if s.kind is Kind.GAP]
    assert [(gap.partition, gap.last - gap.first) for gap in gaps] == [(1, 20)]
