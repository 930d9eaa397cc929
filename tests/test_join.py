"""The join of late outcomes as a feed meets it: order of release, counts, and what a crash leaves."""

import random
from dataclasses import asdict

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from stream.labels import ARRIVED, RELEASED, Feed, Join, WaitingStore, joining, segments
from stream.labels.delays import EDGES_MS, Delays
from stream.labels.events import digest_of
from stream.settings import Outcomes
from tests.replays import LONG
from tests.twins.join_twin import JoinTwin

NEEDED = {"kind": "log", "id": "id", "label": "late", "time": "at"}


def outcomes_of(**more):
    return Outcomes(**{**NEEDED, "wait": "1s", **more})


@pytest.fixture(autouse=True)
def small_segments(monkeypatch):
    """Two or three rows each, looked at two at a time, so that small feeds meet every border."""
    monkeypatch.setattr(segments, "SIZE", 160)
    monkeypatch.setattr(joining, "SEGMENTS_AT_ONCE", 2)


class Bench:
    """A join over a store in a folder, fed event by event; killed and opened again at will."""

    def __init__(self, folder, outcomes, partitions=(2, 2)):
        self.folder, self.outcomes, self.partitions = folder, outcomes, partitions
        self.events, self.saved = [], {0: None}
        self.open(0)

    def open(self, moment):
        self.store = WaitingStore(self.folder, moment)
        self.join = Join(self.outcomes, self.store)
        if self.saved[moment] is not None:
            about, arrays, count = self.saved[moment]
            self.join.restore(about, arrays)
            del self.events[count:]
        else:
            self.events.clear()
        for feed, count in zip(Feed, self.partitions, strict=True):
            self.join.watermark.expect(feed, range(count))

    def feed(self, event):
        if len(event) == 4:
            time, partition, offset, ident = event
            self.join.add_messages(partition, [offset], [time], [ident], [payload_of(event)])
        else:
            time, partition, offset, ident, label = event
            self.join.add_outcomes(partition, [offset], [time], [ident], [label])

    def drain(self, advance=None):
        while (some := (advance or self.join.advance)()) is not None:
            for event in some:
                if event.kind == ARRIVED:
                    self.join.note_score(event.handle, score_of(event))
                else:
                    assert self.join.score_of(event.handle) == score_of(event)
            self.events += [event._replace(handle=None) for event in some]  # where it lies is no result

    @property
    def released(self):
        return [event for event in self.events if event.kind == RELEASED]

    def keep(self, moment):
        self.store.keep(moment)
        arrays = {name: array.copy() for name, array in self.join.state().items()}
        self.saved[moment] = (self.join.about(), arrays, len(self.events))

    def finish(self):
        for feed in Feed:
            self.join.watermark.end(feed)
        self.drain()


def payload_of(message):
    return f"{message}".encode() * (message[2] % 3 + 1)


def score_of(event):
    return event.partition + 0.1 * event.offset


def in_order(released):
    return [(r.time, r.partition, r.offset, r.label, r.aside) for r in released]


def counts_of(join):
    return {name: count for name, count in asdict(join.counts).items() if count}


@st.composite
def feeds(draw, idents=8):
    """Two partitions of messages and two of outcomes; time ascends in each. The wait is 1000."""
    seed = draw(st.integers(0, 2**32))
    count = draw(st.integers(1, 40))
    step = draw(st.sampled_from([50, 400, 3000]))
    chance = random.Random(seed)
    partitions = []
    for feed in range(2):
        for partition in range(2):
            time, events = 0, []
            for offset in range(count):
                time += chance.choice([0, 0, 1, step, 500, 1000])
                event = (time, partition, offset, f"h{chance.randrange(idents)}")
                events.append(event if feed == 0 else (*event, chance.randrange(2)))
            partitions.append(events)
    return partitions


def interleaved(partitions, chance):
    waiting = [list(reversed(events)) for events in partitions if events]
    while waiting:
        events = chance.choice(waiting)
        yield events.pop()
        waiting = [events for events in waiting if events]


choices = st.fixed_dictionaries(
    {
        "when_absent": st.sampled_from(["negative", "drop"]),
        "on_conflict": st.sampled_from(["first", "last", "reject"]),
        "allow_early": st.booleans(),
    }
)


def examples(count):
    return settings(suppress_health_check=[HealthCheck.function_scoped_fixture], max_examples=count)


@examples(1_000 if LONG else 60)
@given(feeds(), choices, st.integers(0, 2**32))
def test_any_interleaving_gives_the_order_and_the_counts_of_the_plain_join(
    tmp_path_factory, partitions, chosen, seed
):
    chance = random.Random(seed)
    bench = Bench(tmp_path_factory.mktemp("join") / "waiting", outcomes_of(**chosen))
    for event in interleaved(partitions, chance):
        bench.feed(event)
        if chance.random() < 0.2:
            bench.drain()
    bench.finish()
    until = max(event[0] for events in partitions for event in events) + 1
    twin = JoinTwin(
        [*partitions[0], *partitions[1]], [*partitions[2], *partitions[3]], until, wait=1000, **chosen
    )
    assert [(*e[:4], *e[5:7]) for e in bench.events] == twin.events
    assert counts_of(bench.join) == +twin.counts
    assert int(bench.join.delays.counts.sum()) == len(twin.delays)
    by_place = {event[1:3]: event for events in partitions[:2] for event in events}
    assert [e.payload for e in bench.events] == [
        payload_of(by_place[e.partition, e.offset]) for e in bench.events
    ]
    bench.store.close()


@examples(300 if LONG else 8)
@given(feeds(), choices, st.integers(0, 2**32))
def test_after_any_crash_the_join_goes_on_as_if_there_had_been_none(
    tmp_path_factory, partitions, chosen, seed
):
    chance = random.Random(seed)
    events = list(interleaved(partitions, chance))
    whole = Bench(tmp_path_factory.mktemp("whole") / "waiting", outcomes_of(**chosen))
    for event in events:
        whole.feed(event)
        whole.drain()
    whole.finish()

    bench = Bench(tmp_path_factory.mktemp("killed") / "waiting", outcomes_of(**chosen))
    at, oldest, kills = 0, 0, 0
    while at < len(events):
        bench.feed(events[at])
        bench.drain()
        at += 1
        draw = chance.random()
        if draw < 0.1:
            bench.keep(at)
            if chance.random() < 0.5:  # the checkpoints before this one go
                oldest = chance.choice([moment for moment in bench.saved if oldest <= moment])
                bench.store.drop_before(oldest)
                bench.saved = {m: saved for m, saved in bench.saved.items() if m >= oldest}
        elif draw < 0.15 and kills < 10:
            kills += 1
            bench.store.close()  # what was not kept is lost, as in a crash
            at = chance.choice(list(bench.saved))
            bench.saved = {m: saved for m, saved in bench.saved.items() if m <= at}
            bench.open(at)
    bench.finish()
    assert bench.events == whole.events
    assert bench.join.about() == whole.join.about()
    assert {n: a.tobytes() for n, a in bench.join.state().items()} == {
        n: a.tobytes() for n, a in whole.join.state().items()
    }
    bench.store.close()
    whole.store.close()


def test_what_waits_at_the_end_stays_waiting_until_it_is_released_by_hand(tmp_path):
    bench = Bench(tmp_path / "waiting", outcomes_of(), (1, 1))
    for number in range(5):
        bench.feed((number * 400, 0, number, f"h{number}"))
    bench.feed((1000, 0, 0, "h2", 1))
    bench.finish()
    assert in_order(bench.released) == [(1000, 0, 0, 0, True), (1000, 0, 2, 1, False), (1400, 0, 1, 0, True)]
    assert bench.join.waiting == 2
    bench.drain(bench.join.release_all)
    assert in_order(bench.released)[3:] == [(2200, 0, 3, 0, True), (2600, 0, 4, 0, True)]
    assert bench.join.waiting == 0


def test_a_partition_without_word_holds_everything_back_until_it_is_said_to_be_idle(tmp_path):
    bench = Bench(tmp_path / "waiting", outcomes_of(), (2, 1))
    bench.feed((0, 0, 0, "a"))
    bench.feed((5000, 0, 1, "b"))
    bench.feed((5000, 0, 0, "b", 1))
    bench.drain()
    assert bench.released == []
    assert bench.join.watermark.behind() == (Feed.MESSAGES, 1)
    bench.join.watermark.idle(Feed.MESSAGES, 1)
    bench.drain()
    assert in_order(bench.released) == [(1000, 0, 0, 0, True)]
    bench.feed((5001, 1, 0, "c"))  # back again, and counted again
    bench.feed((9000, 0, 2, "d"))
    bench.feed((9000, 0, 1, "d", 0))
    bench.drain()
    assert in_order(bench.released)[1:] == [(5000, 0, 1, 1, False)]


def test_a_finished_log_of_outcomes_lets_messages_expire(tmp_path):
    bench = Bench(tmp_path / "waiting", outcomes_of(), (1, 1))
    bench.feed((100, 0, 0, "a", 1))
    bench.join.watermark.end(Feed.OUTCOMES)
    bench.feed((50, 0, 0, "a"))
    bench.feed((60, 0, 1, "b"))
    bench.feed((2000, 0, 2, "c"))
    bench.drain()
    assert in_order(bench.released) == [(100, 0, 0, 1, False), (1060, 0, 1, 0, True)]


def test_a_message_behind_the_watermark_is_still_decided_once(tmp_path):
    bench = Bench(tmp_path / "waiting", outcomes_of(), (1, 1))
    bench.feed((10_000, 0, 0, "a"))
    bench.feed((10_000, 0, 0, "zz", 0))
    bench.drain()
    bench.feed((3_000, 0, 1, "late"))
    bench.feed((9_500, 0, 2, "out of order"))
    bench.feed((9_600, 0, 1, "out of order", 1))
    bench.finish()
    assert in_order(bench.released) == [(4_000, 0, 1, 0, True), (9_600, 0, 2, 1, False)]
    assert bench.join.waiting == 1


def test_a_message_after_quiet_expires_too_though_its_segment_was_done_with(tmp_path, monkeypatch):
    monkeypatch.setattr(segments, "SIZE", 30_000)
    bench = Bench(tmp_path / "waiting", outcomes_of(), (1, 1))
    for number, time in enumerate([0, 5_000]):
        bench.feed((time, 0, number, f"h{number}"))
        bench.join.watermark.idle(Feed.MESSAGES, 0)
        bench.feed((time + 3_000, 0, number, "unknown", 0))
        bench.drain()
    assert in_order(bench.released) == [(1_000, 0, 0, 0, True), (6_000, 0, 1, 0, True)]


def test_an_id_that_is_used_again_after_a_crash_stands_for_its_later_message(tmp_path, monkeypatch):
    monkeypatch.setattr(segments, "SIZE", 30_000)
    bench = Bench(tmp_path / "waiting", outcomes_of(), (1, 1))
    for offset, (time, ident) in enumerate([(0, "again"), (2_500, "other"), (2_501, "again")]):
        bench.feed((time, 0, offset, ident))
        bench.feed((time, 0, offset, "unknown", 0))
        bench.drain()
    bench.feed((2_600, 0, 3, "another"))
    bench.feed((2_600, 0, 3, "unknown", 0))
    bench.drain()
    bench.keep(1)
    bench.store.close()
    bench.open(1)
    bench.feed((2_700, 0, 4, "again", 1))
    bench.finish()
    assert in_order(bench.released) == [(1_000, 0, 0, 0, True), (2_700, 0, 2, 1, False)]


def test_two_ids_that_share_half_of_their_hash_are_told_apart(tmp_path, monkeypatch):
    real = digest_of
    monkeypatch.setattr(joining, "digest_of", lambda ident: bytes(8) + real(ident)[8:])
    bench = Bench(tmp_path / "waiting", outcomes_of(), (1, 1))
    for number in range(20):
        bench.feed((number, 0, number, number))
        bench.feed((number, 0, number, "unknown", 0))
        bench.drain()
    for number in range(20):
        bench.feed((500 + number, 0, 20 + number, str(19 - number), number % 2))
        bench.drain()
    bench.finish()
    assert [(r.offset, r.label) for r in bench.released] == [(19 - n, n % 2) for n in range(20)]


def test_whole_numbers_and_their_texts_are_one_id():
    assert digest_of(17) == digest_of("17") != digest_of("017")
    assert digest_of("\ud800") != digest_of("?")


def test_the_share_of_positives_lost_for_each_waiting_time():
    delays = Delays()
    assert delays.lost() == []
    for delay in (0, 1000, 1001, 3_600_000, 90_000_000):
        delays.add(delay)
    lost = dict(delays.lost())
    assert lost[1000] == 0.6
    assert lost[10_000] == 0.4
    assert lost[10**8] == 0.0
    assert np.all(np.diff(list(lost.values())) <= 0) and list(lost) == list(EDGES_MS)
