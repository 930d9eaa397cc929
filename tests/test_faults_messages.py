"""Messages that are no messages, and dead letters that nobody takes, in; finite weights and no loss out."""

import numpy as np
import pytest
from kafka.admin import ConfigResource, ConfigResourceType

from stream.arrays_file import read_array_folder
from tests.fault_rig import (
    Worker,
    everything,
    kept_whole,
    note,
    notes,
    nothing_lost_or_doubled,
    refused,
    send,
    settings_of,
    worked,
)
from tests.replays import model_of, newest

MOST_BYTES = 9 << 20
BAD = {
    b'{"note": "left wi': "bad_json",
    b"[1, 2]": "not_an_object",
    b'{"note": 7, "redelivered": true}': "wrong_type",
    b'{"note": "gate", "weight_kg": "heavy", "redelivered": true}': "wrong_type",
    b'{"note": "gate", "weight_kg": NaN, "redelivered": true}': "not_finite",
    b'{"note": "gate", "weight_kg": -Infinity, "redelivered": true}': "not_finite",
    b'{"note": "gate", "weight_kg": 1e999, "redelivered": true}': "not_finite",
    b'{"note": "gate", "redelivered": "perhaps"}': "bad_label",
    b'{"note": "gate \xff", "redelivered": true}': "bad_utf8",
    note(7, note="left with porter " * 600_000): "line_too_long",
    note(8, note=" ".join(map(str, range(1_000_000)))): "too_many_tokens",
}


@pytest.fixture
def dead(broker, topic):
    """A topic for dead letters."""
    broker.make_topic(f"{topic}.dead")
    return f"{topic}.dead"


def test_what_is_no_message_is_a_dead_letter_to_the_byte_and_the_model_is_as_if_it_had_not_come(
    broker, topic, dead, tmp_path
):
    """Among them a record of ten megabytes and a message of a million tokens."""
    broker.make_topic(topic)
    limits = {"feed": {"max_line_bytes": MOST_BYTES}}
    settings = settings_of(broker, topic, rejects={"topic": dead}, **limits)
    with Worker(settings, tmp_path / "worker") as worker:
        lines = notes(0, 600)
        for number, value in enumerate(BAD):
            lines.insert(40 + 50 * number, value)
        assert max(map(len, lines)) > 10_000_000
        send(broker, topic, lines, max_request_size=20_000_000)
        worker.learned(len(lines))
        send(broker, topic, notes(600, 700))
        worker.learned(len(lines) + 100)
        worker.ready()
        done = worker.stop()
    assert done["rejected"] == len(BAD)
    letters = {record.value: dict(record.headers) for record in everything(broker, dead)}
    assert {value: headers["reason"].decode() for value, headers in letters.items()} == BAD
    assert {int(headers["offset"]) for headers in letters.values()} == {lines.index(value) for value in BAD}
    nothing_lost_or_doubled(settings, tmp_path / "worker", {0: len(lines) + 100})
    good = f"{topic}.good"
    broker.make_topic(good)
    send(broker, good, notes(0, 700))
    worked(settings_of(broker, good, **limits), tmp_path / "good")
    assert model_of(tmp_path / "worker/state") == model_of(tmp_path / "good/state")
    _, arrays = read_array_folder(newest(tmp_path / "worker/state"))
    for name, array in arrays.items():
        assert array.dtype.kind != "f" or name.startswith("metrics.") or np.isfinite(array).all(), name


# ---- dead letters that are not taken -----------------------------------------------------------------------


def test_a_dead_letter_that_its_topic_refuses_ends_the_worker_and_is_in_no_checkpoint(
    broker, topic, tmp_path
):
    """The topic takes records of 2,000 bytes; once it takes larger ones the worker goes on with all."""
    dead = f"{topic}.dead"
    broker.make_topic(topic)
    broker.make_topic(dead, configs={"max.message.bytes": "2000"})
    settings = settings_of(broker, topic, rejects={"topic": dead})
    bad = b'{"note": "%s' % (b"porter " * 500)
    with Worker(settings, tmp_path) as worker:
        send(broker, topic, notes(0, 300))
        worker.saved(300)
        send(broker, topic, [bad, *notes(300, 600)])
        assert worker.wait() == 74
        for word in (f"topic {dead}", "MessageSizeTooLarge", "limits"):
            assert word in worker.said, worker.said
        assert b"porter" not in worker.said.encode(), "messages are never shown"
    assert kept_whole(tmp_path / "state") == 300
    refused(settings, tmp_path, 74, "refused a record")
    assert kept_whole(tmp_path / "state") == 300
    with broker.admin() as admin:
        larger = {"max.message.bytes": "20000"}
        admin.alter_configs([ConfigResource(ConfigResourceType.TOPIC, dead, larger)])
    worked(settings, tmp_path)
    assert [record.value for record in everything(broker, dead)] == [bad]
    nothing_lost_or_doubled(settings, tmp_path, {0: 601})


def test_while_the_topic_of_dead_letters_is_missing_it_is_not_ready_and_no_checkpoint_covers_them(
    broker, topic, tmp_path
):
    dead = f"{topic}.dead"
    broker.make_topic(topic)
    settings = settings_of(broker, topic, rejects={"topic": dead})
    with Worker(settings, tmp_path) as worker:
        send(broker, topic, notes(0, 300))
        worker.saved(300)
        worker.ready()
        send(broker, topic, [b"[]", *notes(300, 600)])
        worker.not_ready("dead letters", dead)
        assert worker.ask("/healthz")[0] == 200
        assert kept_whole(worker.state) == 300
        assert any(dead in event["text"] for event in worker.events("warning"))
        broker.make_topic(dead)
        worker.ready()
        worker.saved(601)
        worker.stop()
    assert [record.value for record in everything(broker, dead)] == [b"[]"]
    nothing_lost_or_doubled(settings, tmp_path, {0: 601})
