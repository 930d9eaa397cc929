"""Topics as a worker meets them: a real broker in, blocks with positions out, and what can go wrong."""

import gc
import json
import logging
import threading
import time
import uuid

import pytest
from kafka import KafkaAdminClient, KafkaConsumer, KafkaProducer, TopicPartition
from kafka.admin import NewPartitions
from kafka.errors import CoordinatorNotAvailableError, KafkaTimeoutError, RetriableError

from stream.errors import BadSettings, FileTrouble, InputMissing, NoPermission, Unavailable
from stream.settings import Settings
from stream.settings.models import Feed
from stream.topics import Publisher, Secrets, TopicSource, client, opening, reading
from tests.broker import start_or_skip
from tests.broker.filling import Filler

PATIENCE_S = 40


@pytest.fixture(scope="module")
def frail_broker(tmp_path_factory):
    with start_or_skip(tmp_path_factory.mktemp("frail") / "broker") as running:
        yield running


@pytest.fixture
def own_broker(frail_broker):
    """A broker to be stopped, killed and paused; it runs again afterwards."""
    yield frail_broker
    if is_running(frail_broker):
        frail_broker.resume()
    else:
        frail_broker.start_again()


def is_running(broker):
    return broker._process is not None


pytestmark = pytest.mark.filterwarnings("ignore::pytest.PytestUnraisableExceptionWarning")


@pytest.fixture(autouse=True)
def no_garbage():
    """kafka-python leaves sockets of failed connections to the garbage collector: now, in no later test."""
    yield
    gc.collect()


def feed_of(servers, topic, start="earliest", **more):
    feed = {"kind": "topic", "servers": servers, "topic": topic, "start": start, **more}
    return Settings.model_validate({"feed": {key: value for key, value in feed.items() if value is not None}})


@pytest.fixture
def opened():
    """Makes sources that are closed at the end."""
    made = []

    def make(servers, topic, *, environ=None, on_gap="refuse", unavailable_after_s=None, **feed):
        settings = feed_of(servers, topic, **feed)
        source = TopicSource(
            settings.feed,
            Secrets(settings, environ or {}),
            on_gap=on_gap,
            unavailable_after_s=unavailable_after_s,
        )
        made.append(source)
        return source

    yield make
    for source in made:
        source.close()


@pytest.fixture
def filled(broker, topic):
    """A topic of four partitions with 100 records each: p-i for record i of partition p."""
    return fill(broker, topic, 4, 100)


def fill(broker, topic, partitions, records):
    broker.make_topic(topic, partitions)
    send(broker, topic, [(p, b"k%d" % i, value(p, i)) for i in range(records) for p in range(partitions)])
    return topic


def value(partition, number):
    return b'{"id":"%d-%d"}' % (partition, number)


def send(broker, topic, records, **options):
    """(partition, key, value) each, in order."""
    producer = KafkaProducer(bootstrap_servers=broker.servers, linger_ms=5, **options)
    for partition, key, content in records:
        producer.send(topic, content, key, partition=partition)
    producer.flush()
    producer.close()


def messages(source, count, limit=7):
    """The first `count` messages that come."""
    found = []
    deadline = time.monotonic() + PATIENCE_S
    while len(found) < count:
        assert time.monotonic() < deadline, f"{len(found)} of {count} came; {source.health()}"
        block = source.read(limit)
        assert len(block) <= limit
        found += [block.message(row) for row in range(len(block))]
    return found


def values_by_partition(found):
    by = {}
    for message in found:
        by.setdefault(message.partition, []).append(message.value)
    return by


def wait_for(holds, what):
    deadline = time.monotonic() + PATIENCE_S
    while not holds():
        assert time.monotonic() < deadline, what
        time.sleep(0.05)


def until(source, kind):
    """Reads until that error comes."""
    deadline = time.monotonic() + PATIENCE_S
    with pytest.raises(kind) as raised:
        while time.monotonic() < deadline:
            source.read(1000)
    return str(raised.value)


def nothing_comes(source, seconds=1.0):
    deadline = time.monotonic() + seconds
    return all(len(source.read(100)) == 0 for _ in iter(lambda: time.monotonic() < deadline, False))


# ---- reading -----------------------------------------------------------------------------------------------


def test_every_record_comes_once_in_the_order_of_its_partition(broker, filled, opened):
    source = opened(broker.servers, filled)
    source.start()
    assert dict(source.next_offsets()) == dict.fromkeys(range(4), 0)
    found = messages(source, 400)
    by = values_by_partition(found)
    assert by == {p: [value(p, i) for i in range(100)] for p in range(4)}
    message = next(m for m in found if m.partition == 2 and m.offset == 5)
    assert (message.topic, message.key, message.value) == (filled, b"k5", value(2, 5))
    assert abs(message.timestamp_ms / 1000 - time.time()) < 600
    assert source.at_end() and dict(source.next_offsets()) == dict.fromkeys(range(4), 100)
    assert nothing_comes(source)
    wait_for(lambda: set(source.health().lags.values()) == {0}, "no lag is left")


def test_partitions_take_turns(broker, filled, opened):
    source = opened(broker.servers, filled)
    source.start()
    wait_for(lambda: all(lane.ahead is not None for lane in source._reader.lanes.values()), "all are there")
    found = messages(source, 8, limit=2)
    assert {m.partition for m in found} == {0, 1, 2, 3}


def test_named_partitions_are_read_and_no_others(broker, filled, opened):
    source = opened(broker.servers, filled, partitions=[3, 1])
    source.start()
    assert values_by_partition(messages(source, 200)).keys() == {1, 3}
    assert source.at_end() and nothing_comes(source, 0.5)


def test_a_partition_that_is_not_there_is_refused(broker, filled, opened):
    with pytest.raises(BadSettings, match=r"names \[4\].*0 to 3"):
        opened(broker.servers, filled, partitions=[0, 4]).start()


def test_a_block_is_json_lines_and_its_messages_are_as_they_came(broker, topic, opened):
    broker.make_topic(topic)
    pretty = b'{\n "id": "a",\r\n "n": 1\n}'
    sent = [
        b'{"a":1}',
        pretty,
        b"",
        b"\n\n",
        b'{"a":"' + b"x" * 300 + b'"}',
        b'{"a":"raw\nfeed"}',
        b"\xff\x00",
    ]
    send(broker, topic, [(0, None if i % 2 else b"\n", content) for i, content in enumerate(sent)])
    source = opened(broker.servers, topic, max_line_bytes=200)
    source.start()
    blocks = []
    while sum(map(len, blocks)) < len(sent):
        blocks.append(source.read(3))
    found = [(block, row) for block in blocks for row in range(len(block))]
    assert [block.message(row).value for block, row in found] == sent
    assert [block.message(row).key for block, row in found] == [None if i % 2 else b"\n" for i in range(7)]
    given = [block.value(row) for block, row in found]
    assert given == [content[:201].replace(b"\n", b"\r") for content in sent]
    assert json.loads(given[1]) == json.loads(pretty)
    with pytest.raises(json.JSONDecodeError, match="control"):
        json.loads(given[5])
    for block in filter(len, blocks):
        lines = block.buffer[block.starts[0] : block.ends[-1]].split(b"\n")
        assert lines == [block.value(row) for row in range(len(block))]


def test_records_without_a_value_are_no_messages(broker, topic, opened):
    broker.make_topic(topic)
    send(broker, topic, [(0, b"a", None), (0, b"b", b"1"), (0, b"c", None), (0, b"d", b"2"), (0, b"e", None)])
    source = opened(broker.servers, topic)
    source.start()
    assert [(m.offset, m.value) for m in messages(source, 2)] == [(1, b"1"), (3, b"2")]
    wait_for(source.at_end, "the last record has no value and is passed")


def test_a_record_of_ten_megabytes_comes_whole_and_cut_in_the_block(broker, topic, opened):
    broker.make_topic(topic)
    big = b'{"a":"' + b"y" * 10_000_000 + b'"}'
    send(broker, topic, [(0, None, b"1"), (0, None, big), (0, None, b"2")], max_request_size=20_000_000)
    source = opened(broker.servers, topic)
    source.start()
    found = messages(source, 3, limit=1)
    assert [m.value == v for m, v in zip(found, [b"1", big, b"2"], strict=True)] == [True] * 3


@pytest.mark.parametrize("codec", ["gzip", "zstd", "lz4", "snappy"])
def test_compressed_batches_are_read(broker, topic, opened, codec):
    if codec in ("lz4", "snappy"):
        pytest.importorskip(codec)
    broker.make_topic(topic)
    sent = [b'{"n":%d,"t":"%s"}' % (i, b"again " * 50) for i in range(2000)]
    send(broker, topic, [(0, None, v) for v in sent], compression_type=codec, batch_size=1 << 19)
    source = opened(broker.servers, topic)
    source.start()
    assert [m.value for m in messages(source, 2000, limit=1000)] == sent


def test_aborted_transactions_are_passed_over_and_leave_no_lag(broker, topic, opened):
    broker.make_topic(topic)
    producer = KafkaProducer(bootstrap_servers=broker.servers, transactional_id=f"id-{topic}")
    producer.init_transactions()
    for n, ends in enumerate(["commit", "abort", "commit", "abort"]):
        producer.begin_transaction()
        for i in range(3):
            producer.send(topic, b"%d-%d" % (n, i), partition=0)
        producer.commit_transaction() if ends == "commit" else producer.abort_transaction()
    producer.close()
    source = opened(broker.servers, topic)
    source.start()
    assert [m.value for m in messages(source, 6)] == [b"0-0", b"0-1", b"0-2", b"2-0", b"2-1", b"2-2"]
    wait_for(source.at_end, "marks at the end are passed")
    wait_for(lambda: source.health().lags == {0: 0}, "no lag is left")


def test_records_of_an_open_transaction_wait(broker, topic, opened):
    broker.make_topic(topic)
    producer = KafkaProducer(bootstrap_servers=broker.servers, transactional_id=f"id-{topic}")
    producer.init_transactions()
    producer.begin_transaction()
    producer.send(topic, b"1", partition=0)
    producer.flush()
    source = opened(broker.servers, topic)
    source.start()
    assert nothing_comes(source) and source.at_end()
    producer.commit_transaction()
    producer.close()
    assert [m.value for m in messages(source, 1)] == [b"1"]


def test_what_is_read_ahead_is_bounded(broker, topic, opened, monkeypatch):
    monkeypatch.setattr(reading, "AHEAD_BYTES", 1)
    broker.make_topic(topic)
    sent = [b"%06d" % i + b"z" * 50_000 for i in range(300)]
    send(broker, topic, [(0, None, v) for v in sent])
    source = opened(broker.servers, topic)
    source.start()
    wait_for(lambda: source._reader.lanes[0].held_bytes >= reading.LEAST_AHEAD_BYTES, "reads ahead")
    time.sleep(1)
    assert source._reader.lanes[0].held_bytes < 8 * reading.LEAST_AHEAD_BYTES, "of 30 MB"
    assert [m.value for m in messages(source, 300)] == sent


def test_a_partition_that_was_paused_amid_what_was_fetched_of_it_goes_on(broker, topic):
    broker.make_topic(topic, 2)
    with Filler(broker.servers[0], topic) as filler:
        for number in range(3 * client.BATCHES_IN_POLL):
            filler.send({partition: [b"%d-%d" % (partition, number)] for partition in range(2)})
    reader = client.Client(feed_of(broker.servers, topic).feed, {"security_protocol": "PLAINTEXT"})
    try:
        reader.assign({0: 0, 1: 0})
        first = polled(reader).partition
        reader.pause([first], [1 - first])
        while reader.offset(1 - first) < 3 * client.BATCHES_IN_POLL:
            polled(reader)
        reader.pause([], [0, 1])
        assert polled(reader).partition == first
    finally:
        reader.close()


def polled(reader):
    """The first that comes."""
    deadline = time.monotonic() + PATIENCE_S
    while time.monotonic() < deadline:
        for found in reader.poll(0.2):
            return found
    raise AssertionError("nothing comes any more")


def test_partitions_added_later_are_read_from_their_beginning(broker, topic, opened, monkeypatch):
    monkeypatch.setattr(client, "METADATA_MS", 500)
    fill(broker, topic, 1, 3)
    source = opened(broker.servers, topic, start="latest")
    source.start()
    with broker.admin() as admin:
        admin.create_partitions({topic: NewPartitions(3)})
    send(broker, topic, [(2, None, b"new")])
    (message,) = messages(source, 1)
    assert (message.partition, message.offset, message.value) == (2, 0, b"new")
    assert dict(source.next_offsets()) == {0: 3, 2: 1}, "a partition counts from its first message on"


# ---- where to begin ----------------------------------------------------------------------------------------


def test_a_first_start_says_where_to_begin(broker, filled, opened):
    with pytest.raises(BadSettings, match=r"feed\.start is missing.*earliest"):
        opened(broker.servers, filled, start=None).start()


def test_latest_begins_behind_what_is_there(broker, filled, opened):
    source = opened(broker.servers, filled, start="latest")
    source.start()
    assert dict(source.next_offsets()) == dict.fromkeys(range(4), 100) and source.at_end()
    send(broker, filled, [(1, None, b"new")])
    assert [m.value for m in messages(source, 1)] == [b"new"]


def test_a_time_begins_at_its_first_record_or_at_the_end(broker, topic, opened):
    broker.make_topic(topic, 2)
    producer = KafkaProducer(bootstrap_servers=broker.servers)
    for i in range(10):
        producer.send(topic, b"%d" % i, partition=0, timestamp_ms=1_700_000_000_000 + 1000 * i)
    producer.send(topic, b"old", partition=1, timestamp_ms=1_600_000_000_000)
    producer.close()
    source = opened(broker.servers, topic, start="2023-11-14T22:13:24.500Z")  # 4.5 s behind the first
    source.start()
    assert dict(source.next_offsets()) == {0: 5, 1: 1}


def test_a_topic_that_is_not_there_is_told_and_not_made(broker, topic, opened, monkeypatch):
    monkeypatch.setattr(reading, "MISSING_S", 1)
    with pytest.raises(InputMissing, match=f"no topic {topic}") as raised:
        opened(broker.servers, topic).start()
    assert raised.value.exit_code == 66
    with broker.admin() as admin:
        assert topic not in admin.list_topics()


@pytest.mark.parametrize("kind", [KafkaConsumer, KafkaProducer, KafkaAdminClient])
def test_no_request_may_make_a_topic(broker, kind):
    net, made = client._started(kind, bootstrap_servers=broker.servers)
    assert net.cluster.metadata_request().allow_auto_topic_creation is False
    made.close()


# ---- positions ---------------------------------------------------------------------------------------------


def test_a_saved_position_goes_on_with_exactly_the_rest(broker, filled, opened):
    first = opened(broker.servers, filled)
    first.start()
    read = messages(first, 131, limit=11)
    position = json.loads(json.dumps(first.position()))
    second = opened(broker.servers, filled, start=None)
    second.seek(position)
    assert second.position() == position
    rest = messages(second, 400 - len(read))
    assert values_by_partition(read + rest) == {p: [value(p, i) for i in range(100)] for p in range(4)}
    assert second.at_end() and nothing_comes(second, 0.5)


def test_a_position_names_cluster_topic_and_the_last_records(broker, filled, opened):
    source = opened(broker.servers, filled)
    source.start()
    messages(source, 400)
    position = source.position()
    assert position["cluster"] == broker.cluster_id and position["topic"] == filled
    assert position["topic_id"] == str(broker.topic_id(filled))
    parts = position["partitions"]
    assert {(at["next"], at["last"], len(at["digest"])) for at in parts.values()} == {(100, 99, 16)}
    assert len({at["digest"] for at in parts.values()}) == 4


def changed(position, partition="0", **at):
    copy = json.loads(json.dumps(position))
    copy["partitions"][partition].update(at)
    return copy


@pytest.fixture
def position(broker, filled, opened):
    source = opened(broker.servers, filled)
    source.start()
    messages(source, 400)
    return source.position()


def test_another_topic_is_refused(broker, filled, topic, opened, position):
    with pytest.raises(BadSettings, match="came from topic other"):
        opened(broker.servers, filled).seek({**position, "topic": "other"})


def test_another_cluster_is_refused(broker, filled, opened, position):
    with pytest.raises(BadSettings, match=f"is cluster {broker.cluster_id}, but .* cluster elsewhere"):
        opened(broker.servers, filled).seek({**position, "cluster": "elsewhere"})


def test_a_topic_that_was_made_again_is_refused(broker, filled, opened, position):
    broker.delete_topic(filled)
    fill(broker, filled, 4, 200)
    with pytest.raises(BadSettings, match="deleted and made again") as raised:
        opened(broker.servers, filled).seek(position)
    assert raised.value.exit_code == 78


def test_a_topic_that_is_made_again_under_a_reading_worker_is_refused(broker, filled, opened, monkeypatch):
    monkeypatch.setattr(client, "METADATA_MS", 500)
    source = opened(broker.servers, filled)
    source.start()
    messages(source, 400)
    broker.delete_topic(filled)
    fill(broker, filled, 4, 200)
    assert "deleted and made again" in until(source, BadSettings).replace("\n", " ")


def test_a_position_past_the_end_is_refused(broker, filled, opened, position):
    with pytest.raises(BadSettings, match="partition 0 ends at offset 100, but 7 more were"):
        opened(broker.servers, filled).seek(changed(position, next=107, last=106))


def test_another_record_where_the_last_one_was_is_refused_before_anything_is_given(
    broker, filled, opened, position
):
    source = opened(broker.servers, filled)
    source.seek(changed(position, "2", next=50, last=49, digest="0" * 16))
    assert "partition 2: offset 49 holds another record" in until(source, BadSettings)


def test_the_last_record_may_be_gone_when_nothing_behind_it_is(broker, filled, opened, position):
    broker.delete_records(filled, {0: 100, 1: 100, 2: 100, 3: 100})
    source = opened(broker.servers, filled)
    source.seek(position)
    assert source.gaps() == [] and source.at_end()
    send(broker, filled, [(3, None, b"new")])
    assert [m.value for m in messages(source, 1)] == [b"new"]


def test_messages_removed_before_they_were_read_are_refused_or_passed_over(broker, filled, opened, position):
    saved = changed(changed(position, "1", next=20, last=19), "3", next=60, last=59)
    broker.delete_records(filled, {1: 50, 3: 90})
    with pytest.raises(
        BadSettings, match=r"60 offsets were removed .*partition 1: 20 to 50; partition 3: 60 to 90"
    ):
        opened(broker.servers, filled).seek(saved)
    source = opened(broker.servers, filled, on_gap="skip")
    source.seek(saved)
    assert source.gaps() == [(1, 20, 50), (3, 60, 90)]
    assert source.next_offsets()[1] == 50
    found = values_by_partition(messages(source, 60))
    assert found == {1: [value(1, i) for i in range(50, 100)], 3: [value(3, i) for i in range(90, 100)]}


@pytest.fixture
def overtaken(broker, filled, opened, monkeypatch):
    """Makes sources too slow for the retention of partition 2."""

    def make(on_gap):
        monkeypatch.setattr(client.Client, "poll", lambda *_: time.sleep(0.1) or [])
        source = opened(broker.servers, filled, on_gap=on_gap)
        source.start()
        broker.delete_records(filled, {2: 80})
        monkeypatch.undo()
        return source

    return make


def test_retention_that_overtakes_a_reader_stops_it(overtaken):
    assert "80 offsets were removed from the log before they were read (partition 2: 0 to 80)" in until(
        overtaken("refuse"), BadSettings
    )


def test_with_leave_a_reader_passes_over_what_retention_took_and_tells_it_once(overtaken):
    source = overtaken("skip")
    found = values_by_partition(messages(source, 320))
    assert found == {p: [value(p, i) for i in range(80 if p == 2 else 0, 100)] for p in range(4)}
    assert source.gaps() == [(2, 0, 80)]
    assert source.gaps() == []
    assert nothing_comes(source)


def test_a_range_that_retention_took_is_never_passed_over(overtaken):
    source = overtaken("skip")
    with pytest.raises(Unavailable, match=r"partition 2: 0 to 80.*starting again passes over it"):
        for _ in range(100):
            source.read_range(2, 0, 90, 100)


def test_partitions_that_settings_leave_out_now_are_refused(broker, filled, opened, position):
    with pytest.raises(BadSettings, match=r"leaves out \[0, 2\]"):
        opened(broker.servers, filled, partitions=[1, 3]).seek(position)


def test_a_partition_that_the_position_does_not_name_is_read_from_its_beginning(
    broker, filled, opened, position
):
    del position["partitions"]["2"]
    source = opened(broker.servers, filled, start=None)
    source.seek(position)
    assert [m.value for m in messages(source, 100)] == [value(2, i) for i in range(100)]


# ---- reading again -----------------------------------------------------------------------------------------


def test_ranges_come_again_in_any_order_of_partitions(broker, filled, opened):
    first = opened(broker.servers, filled)
    first.start()
    spans, contents = [], []
    while not first.at_end():
        before = dict(first.next_offsets())
        block = first.read(13)
        if len(block):
            spans.append((block.partition, before[block.partition], first.next_offsets()[block.partition]))
            contents.append([block.message(row) for row in range(len(block))])
    second = opened(broker.servers, filled, start=None)
    for partition in range(4):
        second.place(partition, 0)
    for (partition, start, last), expected in zip(spans, contents, strict=True):
        found = []
        deadline = time.monotonic() + PATIENCE_S
        while second.next_offsets()[partition] < last and time.monotonic() < deadline:
            block = second.read_range(partition, second.next_offsets()[partition], last, 5)
            found += [block.message(row) for row in range(len(block))]
        assert found == expected and start <= found[0].offset
    assert second.position() == first.position()


def test_a_range_ends_where_it_ended_behind_marks_and_empty_records(broker, topic, opened):
    broker.make_topic(topic)
    send(broker, topic, [(0, b"a", b"1"), (0, b"b", None), (0, b"c", None), (0, b"d", b"2")])
    source = opened(broker.servers, topic)
    assert [len(block_of(source, 0, 0, 3)), source.next_offsets()[0]] == [1, 3]
    assert [block_of(source, 0, 3, 4).value(0), source.next_offsets()[0]] == [b"2", 4]


def block_of(source, partition, first, last):
    deadline = time.monotonic() + PATIENCE_S
    while time.monotonic() < deadline:
        block = source.read_range(partition, source.next_offsets().get(partition, first), last, 100)
        if len(block):
            break
    while source.next_offsets()[partition] < last and time.monotonic() < deadline:
        assert not len(source.read_range(partition, source.next_offsets()[partition], last, 100))
    return block


def test_a_range_of_which_a_part_is_gone_is_refused(broker, filled, opened):
    broker.delete_records(filled, {1: 30})
    source = opened(broker.servers, filled)
    with pytest.raises(BadSettings, match="20 offsets were removed"):
        while True:
            source.read_range(1, 10, 40, 100)


# ---- commits -----------------------------------------------------------------------------------------------


def committed(broker, group, topic):
    with broker.admin() as admin:
        try:
            found = admin.list_group_offsets({group: None})[group]
        except RetriableError:  # the first use of a group makes the broker load it
            return {}
    return {place.partition: at.offset for place, at in found.items() if place.topic == topic}


def test_offsets_are_committed_after_a_checkpoint_for_displays_of_the_lag(broker, filled, opened):
    source = opened(broker.servers, filled, group=f"group-{filled}")
    source.start()
    messages(source, 400)
    source.commit(changed(source.position(), "3", next=42))
    wait_for(
        lambda: committed(broker, f"group-{filled}", filled) == {0: 100, 1: 100, 2: 100, 3: 42}, "committed"
    )
    source.commit(source.position())
    source.close()
    assert committed(broker, f"group-{filled}", filled)[3] == 100, "the last commit goes out before the end"


def test_without_a_group_nothing_is_committed(broker, filled, opened):
    source = opened(broker.servers, filled)
    source.start()
    source.commit(source.position())
    assert len(messages(source, 400)) == 400


def test_commits_that_say_something_else_are_told_and_do_not_count(broker, filled, opened, position, caplog):
    group = f"group-{filled}"
    one = opened(broker.servers, filled, group=group)
    one.seek(position)
    one.commit(position)
    wait_for(lambda: committed(broker, group, filled) != {}, "committed")
    caplog.set_level(logging.WARNING)
    fresh = opened(broker.servers, filled, group=group)
    fresh.start()
    assert fresh.next_offsets()[0] == 0
    told = [record.getMessage() for record in caplog.records]
    assert any("has offset 100 committed for partition 0" in t and "feed.start" in t for t in told)
    caplog.clear()
    behind = opened(broker.servers, filled, group=group)
    behind.seek(changed(position, "1", next=10, last=None, digest=None))
    assert behind.next_offsets()[1] == 10
    (told,) = [record.getMessage() for record in caplog.records if record.name.startswith("stream")]
    assert "offset 100 committed for partition 1" in told and "the checkpoint says 10" in told


# ---- a broker that goes away -------------------------------------------------------------------------------


@pytest.mark.slow
def test_a_broker_that_goes_away_and_comes_back_loses_nothing(own_broker, topic, opened):
    fill(own_broker, topic, 2, 50)
    source = opened(own_broker.servers, topic)
    source.start()
    found = messages(source, 100)
    for away in (own_broker.stop, own_broker.kill):
        away()
        busy = time.process_time()
        assert nothing_comes(source, 4)
        assert time.process_time() - busy < 2, "it does not spin"
        assert source.health().since_contact_s > 1
        own_broker.start_again()
        number = len(found)
        send(own_broker, topic, [(p, None, b"%d" % number) for p in range(2)])
        found += messages(source, 2)
        assert source.health().since_contact_s < 5
    by = values_by_partition(found)
    assert by == {p: [value(p, i) for i in range(50)] + [b"100", b"102"] for p in range(2)}


def test_a_broker_that_is_paused_is_waited_for_or_given_up_when_asked(own_broker, topic, opened):
    fill(own_broker, topic, 1, 5)
    patient = opened(own_broker.servers, topic)
    hasty = opened(own_broker.servers, topic, unavailable_after_s=3)
    for source in (patient, hasty):
        source.start()
        messages(source, 5)
    own_broker.pause()
    told = until(hasty, Unavailable)
    assert "has not answered for" in told and "unavailable_after_s = 3" in told
    assert nothing_comes(patient) and patient.health().since_contact_s > 3
    own_broker.resume()
    send(own_broker, topic, [(0, None, b"on")])
    assert [m.value for m in messages(patient, 1)] == [b"on"]


@pytest.mark.slow
def test_a_broker_that_is_away_at_the_start_is_waited_for(own_broker, topic, opened):
    fill(own_broker, topic, 1, 5)
    own_broker.stop()
    with pytest.raises(Unavailable):
        opened(own_broker.servers, topic, unavailable_after_s=1).start()
    source = opened(own_broker.servers, topic)
    waiting = threading.Thread(target=source.start)
    waiting.start()
    time.sleep(2)
    assert waiting.is_alive()
    own_broker.start_again()
    waiting.join(PATIENCE_S)
    assert len(messages(source, 5)) == 5


def test_waiting_for_a_broker_ends_when_asked_and_leaves_no_threads(opened):
    before = set(threading.enumerate())
    settings = feed_of(["127.0.0.1:1"], "t")
    deadline = time.monotonic() + 5
    source = TopicSource(settings.feed, Secrets(settings, {}), stopping=lambda: time.monotonic() > deadline)
    with pytest.raises(Unavailable, match="stopped while waiting"):
        source.start()
    health = source.health()
    assert health.since_contact_s is None and health.trouble and health.lags == {}
    source.close()
    wait_for(lambda: not set(threading.enumerate()) - before, "each try ends its threads")


def lost(monkeypatch, clients):
    """The first `clients` connections never give anything of partition 1, as one release did."""
    made = []
    poll, offset, start = client.Client.poll, client.Client.offset, client.Client.__init__

    def init(self, *args):
        start(self, *args)
        made.append(self)

    def losing(self):
        return made.index(self) < clients

    def deaf_poll(self, wait_s):
        found = poll(self, wait_s)
        return [f for f in found if not (f.partition == 1 and losing(self))]

    def still(self, partition):
        return 0 if partition == 1 and losing(self) else offset(self, partition)

    monkeypatch.setattr(client.Client, "__init__", init)
    monkeypatch.setattr(client.Client, "poll", deaf_poll)
    monkeypatch.setattr(client.Client, "offset", still)
    monkeypatch.setattr(reading, "STALLED_S", 1.0)
    monkeypatch.setattr(reading, "LOOK_S", 0.2)
    return made


def test_a_partition_that_stops_moving_is_connected_anew(broker, filled, opened, monkeypatch):
    made = lost(monkeypatch, 2)
    source = opened(broker.servers, filled)
    source.start()
    messages(source, 300)
    wait_for(lambda: source.health().stalled == (1,), "the stalled partition is told")
    assert values_by_partition(messages(source, 100)) == {1: [value(1, i) for i in range(100)]}
    assert len(made) == 3 and source.health().reconnects == 2
    wait_for(lambda: source.health().stalled == (), "it moves again")


def test_a_partition_that_never_moves_ends_the_worker(broker, filled, opened, monkeypatch):
    lost(monkeypatch, 100)
    source = opened(broker.servers, filled)
    source.start()
    assert "1 at offset 0" in until(source, Unavailable)


# ---- doors -------------------------------------------------------------------------------------------------


def door(broker, listener, **more):
    credentials = broker.credentials
    feed = {}
    if listener in ("tls", "mutual", "sasl_tls"):
        feed |= {"tls": True, "ca_file": str(credentials.ca_file)}
    if listener == "mutual":
        feed |= {"cert_file": str(credentials.cert_file), "key_file": str(credentials.key_file)}
    if listener.startswith("sasl"):
        feed |= {"sasl": "PLAIN", "username": credentials.username, "password_variable": "DEPOT_PASSWORD"}
    return {"servers": broker.servers_of(listener), **feed, **more}


DOORS = [("tls", {}), ("mutual", {})] + [
    (listener, {"sasl": sasl})
    for listener in ("sasl", "sasl_tls")
    for sasl in ("PLAIN", "SCRAM-SHA-256", "SCRAM-SHA-512")
]


@pytest.mark.parametrize(
    ("listener", "more"), DOORS, ids=lambda x: x if isinstance(x, str) else x.get("sasl")
)
def test_doors_open_with_the_right_credentials_which_are_never_shown(
    broker, topic, opened, caplog, listener, more
):
    caplog.set_level(logging.DEBUG)
    fill(broker, topic, 1, 3)
    password = broker.credentials.password
    source = opened(
        topic=topic, environ={"DEPOT_PASSWORD": password}, group="g", **door(broker, listener, **more)
    )
    source.start()
    assert len(messages(source, 3)) == 3
    source.commit(source.position())
    wait_for(lambda: committed(broker, "g", topic), "commits go through the same door")
    settings = source._feed.model_dump_json() + repr(source._reader._options.__self__)
    for text in (*(record.getMessage() for record in caplog.records), settings, str(source.health())):
        assert password not in text
        assert value(0, 1).decode() not in text, "payloads are not logged"


@pytest.mark.parametrize("sasl", ["PLAIN", "SCRAM-SHA-256"])
def test_a_wrong_password_is_told_without_showing_it(broker, topic, opened, caplog, sasl):
    caplog.set_level(logging.DEBUG)
    fill(broker, topic, 1, 1)
    environ = {"DEPOT_PASSWORD": "silt-and-clay"}
    source = opened(topic=topic, environ=environ, unavailable_after_s=8, **door(broker, "sasl", sasl=sasl))
    with pytest.raises((NoPermission, Unavailable), match=r"a user or password|refused gauge") as raised:
        source.start()
    assert "silt-and-clay" not in caplog.text + str(raised.value)


def test_a_refusal_that_only_the_log_tells_is_a_refusal():
    def never_ready(kafka_client):
        logging.getLogger("kafka.net").warning("failed: SaslAuthenticationFailedError: wrong")
        raise KafkaTimeoutError("Unable to bootstrap")

    door = {"sasl": "PLAIN", "username": "gauge", "password_variable": "DEPOT_PASSWORD"}
    feed = Feed(kind="topic", topic="hauls", servers=("127.0.0.1:1",), **door)
    with pytest.raises(NoPermission, match="refused gauge"), client.translated(feed):
        client._started(never_ready)


def test_a_broker_signed_by_a_stranger_is_not_believed(broker, topic, opened):
    fill(broker, topic, 1, 1)
    stranger = str(broker.credentials.stranger_file)
    source = opened(topic=topic, unavailable_after_s=5, **door(broker, "tls", ca_file=stranger))
    with pytest.raises(Unavailable, match=r"(?i)certificate"):
        source.start()


def test_a_password_file_gives_its_first_line(broker, topic, opened, tmp_path):
    fill(broker, topic, 1, 1)
    path = tmp_path / "password"
    path.write_text(f"{broker.credentials.password}\nnot this\n")
    feed = door(broker, "sasl", password_file=str(path), password_variable=None)
    source = opened(topic=topic, **feed)
    source.start()
    assert len(messages(source, 1)) == 1


SASL = {"sasl": "PLAIN", "username": "gauge"}
BAD_SECRETS = [
    ({**SASL, "password_variable": "NONE"}, BadSettings, "environment variable NONE is empty or missing"),
    ({**SASL, "password_file": "no"}, InputMissing, r"feed\.password_file: .*no cannot be read"),
    ({**SASL, "password_file": "empty"}, BadSettings, "first line of .* is empty"),
    ({**SASL, "password_file": "latin"}, BadSettings, "not UTF-8"),
    ({**SASL, "password_file": "."}, FileTrouble, "cannot be read"),
    ({"tls": True, "ca_file": "empty"}, BadSettings, "holds no PEM certificate"),
    ({"tls": True, "ca_file": "no"}, InputMissing, r"feed\.ca_file"),
    ({"tls": True, "cert_file": "latin", "key_file": "empty"}, BadSettings, "no PEM certificate and its key"),
]


@pytest.mark.parametrize(("feed", "kind", "why"), BAD_SECRETS)
def test_secrets_that_cannot_be_read_are_told_at_once(tmp_path, feed, kind, why):
    (tmp_path / "empty").write_text("\nsecond")
    (tmp_path / "latin").write_bytes(b"gr\xfcn")
    settings = feed_of(["127.0.0.1:1"], "t", **feed).placed_in(tmp_path)
    with pytest.raises(kind, match=why) as raised:
        TopicSource(settings.feed, Secrets(settings, {}))
    assert "second" not in str(raised.value)


# ---- publishing --------------------------------------------------------------------------------------------


@pytest.fixture
def publisher_of():
    made = []

    def make(broker, topic):
        settings = feed_of(broker.servers, topic)
        made.append(Publisher(settings.feed, Secrets(settings, {})))
        return made[-1]

    yield make
    for publisher in made:
        publisher.close()


def read_all(broker, topic):
    consumer = KafkaConsumer(bootstrap_servers=broker.servers, auto_offset_reset="earliest")
    place = TopicPartition(topic, 0)
    consumer.assign([place])
    consumer.seek(place, 0)
    end = consumer.end_offsets([place])[place]
    found = []
    while len(found) < end:
        found += consumer.poll(500).get(place, [])
    consumer.close()
    return found


def test_what_is_flushed_is_in_the_topic_with_its_headers(broker, topic, publisher_of):
    broker.make_topic(topic)
    publisher = publisher_of(broker, topic)
    publisher.flush(1)
    publisher.send(topic, b"key", b"va\nlue", {"reason": b"bad_json", "offset": b"17"})
    publisher.send(topic, None, b"", {})
    publisher.flush(10)
    one, two = read_all(broker, topic)
    assert (one.key, one.value, dict(one.headers)) == (
        b"key",
        b"va\nlue",
        {"reason": b"bad_json", "offset": b"17"},
    )
    assert (two.key, two.value, two.headers) == (None, b"", [])


@pytest.mark.slow
def test_what_is_not_acknowledged_is_told_and_arrives_once_when_the_broker_is_back(
    own_broker, topic, publisher_of
):
    own_broker.make_topic(topic)
    publisher = publisher_of(own_broker, topic)
    publisher.send(topic, None, b"before", {})
    publisher.flush(10)
    own_broker.pause()
    sent = [b"%d" % i for i in range(50)]
    for content in sent:
        publisher.send(topic, None, content, {})
    with pytest.raises(Unavailable, match="50 records not acknowledged in 1 s"):
        publisher.flush(1)
    own_broker.kill()
    with pytest.raises(Unavailable):
        publisher.flush(1)
    own_broker.start_again()
    publisher.flush(PATIENCE_S)
    assert sorted(r.value for r in read_all(own_broker, topic)) == sorted([b"before", *sent])


def test_what_waits_for_the_broker_is_bounded(own_broker, topic, publisher_of, monkeypatch):
    from stream.topics import publisher as module

    monkeypatch.setattr(module, "WAITING_BYTES", 10_000)
    monkeypatch.setattr(module, "SEND_S", 1)
    own_broker.make_topic(topic)
    publisher = publisher_of(own_broker, topic)
    publisher.send(topic, None, b"x" * 50_000, {})
    own_broker.pause()
    with pytest.raises(Unavailable, match="not acknowledged"):
        for _ in range(20):
            publisher.send(topic, None, b"x" * 1000, {})
    own_broker.resume()
    publisher.flush(PATIENCE_S)


def test_a_topic_to_write_to_is_not_made(broker, topic, publisher_of):
    publisher = publisher_of(broker, topic)
    with pytest.raises(Unavailable, match=f"topic {topic}"):
        publisher.send(topic, None, b"1", {})
    publisher.flush(1)
    with broker.admin() as admin:
        assert topic not in admin.list_topics()


def test_a_record_that_is_refused_stays_an_error(broker, topic, publisher_of):
    broker.make_topic(topic, configs={"max.message.bytes": "1000"})
    publisher = publisher_of(broker, topic)
    publisher.send(topic, None, uuid.uuid4().bytes * 500, {})
    for _ in range(2):
        with pytest.raises(FileTrouble, match=rf"topic {topic}: .*TooLarge") as raised:
            publisher.flush(10)
    assert raised.value.exit_code == 74
    with pytest.raises(FileTrouble):
        publisher.send(topic, None, b"1", {})


def test_a_cluster_that_is_away_is_told_when_a_publisher_is_made():
    settings = feed_of(["127.0.0.1:1"], "t")
    before = set(threading.enumerate())
    with pytest.raises(Unavailable, match="see to the brokers"):
        Publisher(settings.feed, Secrets(settings, {}))
    wait_for(lambda: not set(threading.enumerate()) - before, "no thread is left")


# ---- words: no broker needed -----------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("error", "cause", "told"),
    [
        (KafkaTimeoutError("no answer"), "", "KafkaTimeoutError: no answer"),
        (KafkaTimeoutError("KafkaTimeoutError: no answer"), "", "KafkaTimeoutError: no answer"),
        (KafkaTimeoutError(), "", "KafkaTimeoutError"),
        (CoordinatorNotAvailableError(), "", "CoordinatorNotAvailableError"),
        (OSError("no route"), "connection refused", "OSError: no route; connection refused"),
    ],
)
def test_why_the_cluster_is_away_is_said_once(monkeypatch, error, cause, told):
    monkeypatch.setattr(client.TROUBLES, "last", cause)
    with pytest.raises(client.Away) as caught, client.translated(feed_of(["h:1"], "t").feed):
        raise error
    assert str(caught.value) == told


@pytest.mark.parametrize(
    ("error", "level"),
    [("CoordinatorNotAvailableError", logging.INFO), ("KafkaTimeoutError: gone", logging.WARNING)],
)
def test_that_nobody_ever_committed_to_a_cluster_is_no_warning(caplog, error, level):
    class Cluster:
        def starts(self, partitions):
            return dict.fromkeys(partitions, 0)

        ends = starts

        def committed(self, group, partitions):
            raise client.Away(error)

    caplog.set_level(logging.INFO)
    feed = feed_of(["h:1"], "t", group="depot").feed
    opening.opened_new(feed, Cluster(), client.Identity("c", "i", (0,)))
    assert [record.levelno for record in caplog.records] == [level]


def test_topics_that_are_written_to_are_named_by_their_keys_where_they_do_not_answer(monkeypatch):
    def away(*options):
        raise client.Away("nobody there")

    monkeypatch.setattr("stream.topics.publisher.open_producer", away)
    settings = feed_of(["h:1"], "t")
    with pytest.raises(Unavailable, match=r"rejects\.topic and scores\.topic are there") as caught:
        Publisher(settings.feed, Secrets(settings))
    assert "start again" not in str(caught.value)
