"""A state folder and what is true of the feed in; AssertionError out where the two do not agree.

None of this follows the journal, tells good from bad or finds addresses with the product's own code, but for
`same_as_uninterrupted`, which is that code.
"""

import json
import struct
from collections import defaultdict

import mmh3
import numpy as np
from kafka import KafkaConsumer, TopicPartition

from stream.arrays_file import read_array_folder
from stream.checkpoints import Checkpoints
from stream.runs.learning import LearningRun
from stream.runs.retracing import retrace
from stream.snapshots import Snapshots
from stream.sources import LogSource
from tests.replays import last_checkpoint, newest, rejects

__all__ = [
    "bad_records_are_kept",
    "dead_letters_are_complete",
    "every_message_counts_once",
    "journal_reads_each_offset_once",
    "newest_about",
    "nothing_broken",
    "nothing_left_over",
    "same_as_learned_from_a_log",
    "same_as_uninterrupted",
    "scores_are_complete",
    "topic_holds_what_was_sent",
]

HEADER_BYTES, RECORD = 32, struct.Struct("<B3xIqqII")
READ, START = 1, 3
TALLY = (1 << 28) - 1


def newest_about(folder):
    """What the newest checkpoint says, None where there is none."""
    found = Checkpoints(folder / "checkpoints", 1).newest_manifest()
    return None if found is None else found[1]["about"]


# ---- after each kill ---------------------------------------------------------------------------------------


def nothing_broken(folder):
    """What has a name is whole, and no snapshot is ahead of what a restart goes on from."""
    checkpoints = Checkpoints(folder / "checkpoints", 1).list()
    assert [entry.trouble for entry in checkpoints if entry.trouble] == []
    snapshots = Snapshots(folder / "snapshots", 1)
    assert [trouble for _, trouble in snapshots.check() if trouble] == []
    found = snapshots.list()
    if found:
        assert all(entry.name.isdecimal() for entry in found)
        assert snapshots.load().messages == found[0].messages
        assert found[0].messages <= (checkpoints[0].messages if checkpoints else 0)


# ---- at the end --------------------------------------------------------------------------------------------


def nothing_left_over(folder):
    """No file or folder under a temporary name."""
    assert list(folder.rglob(".*")) == []
    assert not (folder / "checkpoints" / "broken").exists()


def topic_holds_what_was_sent(servers, feed):
    """The truth itself: the producer may not have sent a record twice, or the broker have lost one."""
    found = {(r.partition, r.offset): (r.key, r.value) for r in everything(servers, feed.topic)}
    assert found == {place: (record.key, record.value) for place, record in feed.sent.items()}


def same_as_uninterrupted(settings, folder, again):
    """`bedload replay --journal`, in the folder `again`, gives the same bytes."""
    assert retrace(settings, again, folder).differences == []
    assert last_checkpoint(again) == last_checkpoint(folder)


def journal_reads_each_offset_once(folder, sent):
    """Returns the places of all records in the order of the journal."""
    data = (folder / "journal").read_bytes()[HEADER_BYTES:]
    assert len(data) % RECORD.size == 0, "the end is torn"
    reached, order = {}, []
    for number, (kind, partition, first, last, counted, _) in enumerate(RECORD.iter_unpack(data)):
        assert counted == number
        assert kind in (READ, START)
        assert reached.get(partition, 0) == first, f"record {number}: {partition} goes on at {first}"
        reached[partition] = last
        order += [(partition, offset) for offset in range(first, last)]
    assert sorted(order) == sorted(sent)
    return [place for place in order if sent[place].value is not None]


def every_message_counts_once(folder, feed, settings):
    """In the counts of the checkpoint and, where each token has state, in the tally of each one's own."""
    manifest, arrays = read_array_folder(newest(folder))
    counts, about = feed.counts(), manifest["about"]
    assert about["messages"] == counts["good"] + sum(counts["rejected"].values())
    assert about["rejects"]["by_reason"] == counts["rejected"]
    assert arrays["learner.counts"][0] == counts["labelled"]
    if settings.state.admit_after > 1:
        return
    touches = (arrays["table.touch"] & TALLY).tolist()
    tallies = dict(zip(arrays["table.addresses"].tolist(), touches, strict=True))
    expected = {r.token: int(r.labelled) for r in feed.sent.values() if r.token is not None}
    found = {token: tallies.get(address_of(token), 0) for token in expected}
    assert {token: tally for token, tally in found.items() if tally != expected[token]} == {}


def address_of(token):
    return mmh3.hash64(f"id\x1f{token}".encode(), x64arch=True, signed=False)[0] >> 24


def same_as_learned_from_a_log(settings, folder, scratch, order, sent):
    """A log of the messages in that order, learned without a stop, leaves the same arrays.

    Returns the margin of each good message by its place.
    """
    log = scratch / "log.jsonl"
    log.write_bytes(b"".join(line_of(sent[place]) + b"\n" for place in order))
    margins = {}

    def scored(block, rows, found):
        margins.update(zip((order[run.messages + row] for row in rows.tolist()), found.tolist(), strict=True))

    run = LearningRun(settings, scratch / "rejects", on_scored=scored)
    source = LogSource([str(log)], scratch, settings.feed.max_line_bytes)
    while run.step(source, 1024) is not False:
        pass
    source.close()
    run.rejects.close()
    _, arrays = read_array_folder(newest(folder))
    expected = run.state()
    assert arrays.keys() == expected.keys()
    for name, array in expected.items():
        assert array.tobytes() == arrays[name].tobytes(), name
    assert margins.keys() == {place for place, record in sent.items() if record.good}
    return margins


def line_of(record):
    """As a log can hold it: line ends are blanks in JSON, and an empty line is no message."""
    return record.value.replace(b"\n", b" ") or b"{"


def bad_records_are_kept(folder, feed):
    """In the file of rejects: each once, under its number, with its bytes where they are not cut."""
    found = [json.loads(line) for line in rejects(folder).splitlines()]
    bad = {place for place, record in feed.sent.items() if record.reason}
    assert sorted((reject["partition"], reject["offset"]) for reject in found) == sorted(bad)
    numbers = [reject["number"] for reject in found]
    assert numbers == sorted(set(numbers))
    for reject in found:
        record = feed.sent[reject["partition"], reject["offset"]]
        assert reject["reason"] == record.reason
        if "line" in reject and not reject.get("cut"):
            assert reject["line"].encode() == record.value


def dead_letters_are_complete(servers, feed):
    """Each bad record at least once as it came, nothing good; returns how often they came again."""
    found = defaultdict(list)
    for letter in everything(servers, f"{feed.topic}.bad"):
        headers = {name: value.decode() for name, value in letter.headers}
        assert headers["topic"] == feed.topic
        found[int(headers["partition"]), int(headers["offset"])].append((letter.key, letter.value, headers))
    assert found.keys() == {place for place, record in feed.sent.items() if record.reason}
    for place, letters in found.items():
        record = feed.sent[place]
        assert all(letter == letters[0] for letter in letters), "what comes again is the same"
        key, value, headers = letters[0]
        assert (key, value, headers["reason"]) == (record.key, record.value, record.reason)
    assert len({letters[0][2]["number"] for letters in found.values()}) == len(found)
    return sum(map(len, found.values())) - len(found)


def scores_are_complete(servers, feed, margins):
    """Each good message at least once, with the score that it had in `margins`; returns the repeats.

    Which snapshot was the newest then is another matter: a later life may know of another.
    """
    found = defaultdict(int)
    for record in everything(servers, f"{feed.topic}.scored"):
        score = json.loads(record.value)
        place = score["partition"], score["offset"]
        found[place] += 1
        assert score["topic"] == feed.topic
        assert score["id"] == feed.sent[place].token
        assert score["margin"] == margins[place]
        assert abs(score["probability"] - 1 / (1 + np.exp(-score["margin"]))) < 1e-12
    assert found.keys() == margins.keys()
    return sum(found.values()) - len(found)


def everything(servers, topic):
    """All records of a topic."""
    consumer = KafkaConsumer(
        bootstrap_servers=servers, enable_auto_commit=False, auto_offset_reset="earliest"
    )
    places = [TopicPartition(topic, number) for number in sorted(consumer.partitions_for_topic(topic))]
    consumer.assign(places)
    ends = consumer.end_offsets(places)
    while any(consumer.position(place) < ends[place] for place in places):
        for records in consumer.poll(timeout_ms=500).values():
            yield from records
    consumer.close()
