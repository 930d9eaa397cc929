"""Reads of a source in; the journal of their order, and the same reads again in that order, out."""

import os
import stat
import struct
from itertools import count

import crc32c
import pytest
from hypothesis import given
from hypothesis import strategies as st

from stream.errors import BadData, BadSettings, CannotCreate, FileTrouble, InputMissing
from stream.journal import FILE_NAME, Journal, Kind, Mark, Span, spans_after
from stream.sources import FollowedSource, JournalledSource
from tests.memory_topic import MemoryTopic, offset_of

BEGINNING = Mark()
SPANS = st.builds(
    lambda kind, partition, first, length: Span(kind, partition, first, first + length),
    st.sampled_from(Kind),
    st.integers(0, 2**32 - 1),
    st.integers(-(2**62), 2**62),
    st.integers(0, 2**40),
)


def written(folder, *spans):
    journal = Journal(folder, Mark())
    journal.append(*spans)
    journal.close()
    return journal.mark


def spans(folder, mark=BEGINNING):
    return [span for span, _ in spans_after(folder / FILE_NAME, mark)]


SOME = [Span(Kind.START, 0, 5, 5), Span(Kind.READ, 0, 5, 9), Span(Kind.GAP, 3, 7, 2**40)]


# ---- the file ----------------------------------------------------------------------------------------------


def test_the_bytes_are_those_that_the_docstring_says(tmp_path):
    written(tmp_path, *SOME)
    content = (tmp_path / FILE_NAME).read_bytes()
    assert content[:32] == b"bedload order journal 1".ljust(31) + b"\n"
    assert len(content) == 32 * 4
    body = struct.pack("<BBBBIqqI", 2, 0, 0, 0, 3, 7, 2**40, 2)
    assert content[96:] == body + struct.pack("<I", crc32c.crc32c(body))
    assert stat.S_IMODE((tmp_path / FILE_NAME).stat().st_mode) == 0o600


@given(st.lists(SPANS, max_size=20), st.data())
def test_what_was_appended_is_read_back_from_any_place(tmp_path_factory, some, data):
    folder = tmp_path_factory.mktemp("journal")
    journal = Journal(folder, Mark())
    marks = [journal.mark]
    for span in some:
        journal.append(span)
        marks.append(journal.mark)
    journal.close()
    at = data.draw(st.integers(0, len(some)))
    assert spans(folder, marks[at]) == some[at:]
    assert [mark for _, mark in spans_after(folder / FILE_NAME, Mark())] == marks[1:]
    again = Journal(folder, marks[at])
    assert again.mark == marks[-1]
    again.close()
    saved = marks[at].to_json()
    assert Mark.from_json(saved) == marks[at]


@pytest.mark.parametrize("torn", [b"\x01", b"\0" * 31, b"\0" * 32, b"\0" * 100, b"\xff" * 64])
def test_a_torn_end_is_cut_off_and_writing_goes_on_there(tmp_path, torn):
    mark = written(tmp_path, *SOME)
    with (tmp_path / FILE_NAME).open("ab") as file:
        file.write(torn)
    journal = Journal(tmp_path, Mark())
    assert journal.cut_bytes == len(torn)
    assert journal.mark == mark
    journal.append(SOME[1])
    journal.close()
    assert spans(tmp_path) == [*SOME, SOME[1]]


def test_every_cut_of_the_last_record_leaves_the_ones_before(tmp_path):
    written(tmp_path, *SOME)
    content = (tmp_path / FILE_NAME).read_bytes()
    for length in range(96, 128):
        (tmp_path / FILE_NAME).write_bytes(content[:length])
        assert spans(tmp_path) == SOME[:2]


def test_every_flipped_bit_of_a_record_ends_the_journal_before_it(tmp_path):
    written(tmp_path, *SOME)
    content = (tmp_path / FILE_NAME).read_bytes()
    for bit in range(64 * 8, 96 * 8):
        broken = bytearray(content)
        broken[bit // 8] ^= 1 << bit % 8
        (tmp_path / FILE_NAME).write_bytes(broken)
        assert spans(tmp_path) == SOME[:1]


def test_a_record_that_stands_in_the_place_of_another_ends_the_journal(tmp_path):
    written(tmp_path, *SOME)
    content = (tmp_path / FILE_NAME).read_bytes()
    (tmp_path / FILE_NAME).write_bytes(content[:64] + content[96:])
    assert spans(tmp_path) == SOME[:1]


def test_what_a_checkpoint_relies_on_must_be_there(tmp_path):
    mark = written(tmp_path, *SOME)
    path = tmp_path / FILE_NAME
    content = path.read_bytes()
    path.write_bytes(content[:-32])
    with pytest.raises(BadData, match="has fewer records than the 3 that the checkpoint was made after"):
        Journal(tmp_path, mark)
    path.write_bytes(content[:70] + bytes([content[70] ^ 1]) + content[71:])
    with pytest.raises(BadData, match="has other records"):
        Journal(tmp_path, mark)
    path.write_bytes(b"")
    with pytest.raises(BadData, match="is missing or empty"):
        Journal(tmp_path, mark)
    path.unlink()
    with pytest.raises(BadData, match="is missing or empty"):
        Journal(tmp_path, mark)
    with pytest.raises(InputMissing):
        spans(tmp_path)


@pytest.mark.parametrize("left", [b"", b"bedload ord"])
def test_a_header_torn_at_the_very_first_write_is_written_anew(tmp_path, left):
    (tmp_path / FILE_NAME).write_bytes(left)
    assert written(tmp_path, *SOME).records == 3


def test_another_file_is_never_written_on(tmp_path):
    (tmp_path / FILE_NAME).write_bytes(b"my diary, which has more than 32 bytes\n")
    with pytest.raises(BadData, match="no order journal of this version"):
        Journal(tmp_path, Mark())
    assert (tmp_path / FILE_NAME).read_bytes().startswith(b"my diary")


@pytest.mark.parametrize("call", ["write", "fsync"])
def test_a_failed_write_is_never_taken_for_done_later(tmp_path, monkeypatch, call):
    journal = Journal(tmp_path, Mark())
    journal.append(SOME[0])

    def broken(*_):
        raise OSError(28 if call == "write" else 5, "broken")

    with monkeypatch.context() as patch:
        patch.setattr(os, call, broken)
        with pytest.raises(CannotCreate if call == "write" else FileTrouble):
            journal.append(SOME[1]) if call == "write" else journal.sync()
    with pytest.raises((CannotCreate, FileTrouble)):
        journal.sync()
    with pytest.raises((CannotCreate, FileTrouble)):
        journal.append(SOME[1])
    journal.close()


def test_a_sync_asks_the_disk_only_when_something_was_appended(tmp_path, monkeypatch):
    journal = Journal(tmp_path, Mark())
    synced = []
    monkeypatch.setattr(os, "fsync", synced.append)
    journal.append(SOME[0])
    journal.sync()
    journal.sync()
    assert len(synced) == 1
    journal.close()


# ---- sources -----------------------------------------------------------------------------------------------


TOPIC = [[b"%d of %d" % (row, partition) for row in range(60)] for partition in range(3)]


def values(source, limit=7, most=None, empty=50):
    """(partition, value) of what is read, until nothing comes for long."""
    found, nothing = [], 0
    while nothing < empty and (most is None or len(found) < most):
        block = source.read(limit)
        nothing = 0 if len(block) else nothing + 1
        found += [(block.partition, block.value(row)) for row in range(len(block))]
    return found


def journalled(folder, seed, position=None, **options):
    source = JournalledSource(MemoryTopic(TOPIC, seed, **options), folder)
    if position is None:
        source.start()
    else:
        source.seek(position)
    return source


def test_a_followed_journal_gives_the_same_messages_and_the_same_positions(tmp_path):
    source = journalled(tmp_path, seed=1)
    found, positions = [], {}
    while not source.at_end():
        found += values(source, most=1, empty=1)
        positions[len(found)] = source.position()
    source.close()
    assert len(found) == 180
    assert [partition for partition, _ in found[:20]] != sorted(partition for partition, _ in found[:20])
    for limit in (1, 1000):
        followed = FollowedSource(MemoryTopic(TOPIC, seed=2), tmp_path / FILE_NAME)
        again = []
        while not followed.at_end():
            again += values(followed, limit, most=1, empty=1)
            assert followed.position() == positions.get(len(again), followed.position())
        assert again == found
        assert followed.position() == positions[180]
        followed.close()


@given(seed=st.integers(0, 10**6), stops=st.lists(st.integers(0, 40), max_size=6), saved_at=st.data())
def test_however_often_it_was_killed_the_order_is_that_of_the_journal(
    tmp_path_factory, seed, stops, saved_at
):
    """Each process goes on from some saved position; what was read past it comes again, in the same order."""
    folder = tmp_path_factory.mktemp("journal")
    seeds = count(seed)
    learned, saved = [], None  # what a checkpoint holds
    for stop in stops:
        source = journalled(folder, next(seeds), saved)
        found = values(source, most=stop, empty=9)
        keep = saved_at.draw(st.booleans())
        if keep and found:
            learned, saved = learned + found, source.position()
        source.close()
        torn = saved_at.draw(st.binary(max_size=40))
        with (folder / FILE_NAME).open("ab") as file:
            file.write(torn[:31])
    source = journalled(folder, next(seeds), saved)
    learned += values(source)
    last = source.position()
    source.close()
    followed = FollowedSource(MemoryTopic(TOPIC, next(seeds)), folder / FILE_NAME)
    assert values(followed, 1000) == learned
    assert followed.position() == last
    assert sorted(learned) == sorted((p, value) for p in range(3) for value in TOPIC[p])
    followed.close()


def test_a_start_is_kept_where_it_was_though_messages_came_before_the_restart(tmp_path):
    topic = [[b"old"], [b"old"]]
    source = JournalledSource(MemoryTopic(topic, start="latest"), tmp_path)
    source.start()
    assert values(source) == []
    source.close()
    later = [[b"old", b"new 0"], [b"old", b"new 1"]]
    source = JournalledSource(MemoryTopic(later, start="latest"), tmp_path)
    source.start()
    assert sorted(values(source)) == [(0, b"new 0"), (1, b"new 1")]
    source.close()
    assert spans(tmp_path)[:2] == [Span(Kind.START, 0, 1, 1), Span(Kind.START, 1, 1, 1)]


def test_a_partition_that_appears_later_is_noted_with_its_first_message(tmp_path):
    topic = [[b"a"]]
    source = JournalledSource(MemoryTopic(topic), tmp_path)
    source.start()
    assert values(source) == [(0, b"a")]
    topic.append([b"b"])
    source._source.log_starts[1] = 0
    assert values(source) == [(1, b"b")]
    source.close()
    assert spans(tmp_path)[2:] == [Span(Kind.START, 1, 0, 0), Span(Kind.READ, 1, 0, 1)]
    followed = FollowedSource(MemoryTopic(topic), tmp_path / FILE_NAME)
    assert values(followed) == [(0, b"a"), (1, b"b")]
    followed.close()


def test_a_gap_that_is_passed_over_is_noted_and_what_was_read_past_the_checkpoint_is_dropped(tmp_path):
    source = journalled(tmp_path, seed=3)
    before = values(source, most=40)
    position, records = source.position(), len(spans(tmp_path))
    values(source, most=20)
    source.close()
    gone = MemoryTopic(TOPIC, seed=4, on_gap="skip")
    first = position["source"]["next"]["1"]
    gone.log_starts[1] = offset_of(50)
    source = JournalledSource(gone, tmp_path)
    source.seek(position)
    assert source.passed_over == offset_of(50) - first
    found = values(source)
    assert [value for p, value in found if p == 1] == TOPIC[1][50:]
    assert spans(tmp_path)[records] == Span(Kind.GAP, 1, first, offset_of(50))
    last = source.position()
    source.close()
    with pytest.raises(BadSettings, match="are gone"):
        refusing = MemoryTopic(TOPIC)
        refusing.log_starts[1] = offset_of(50)
        source = JournalledSource(refusing, tmp_path)
        try:
            source.seek(position)
        finally:
            source.close()
    followed = FollowedSource(MemoryTopic(TOPIC, seed=5), tmp_path / FILE_NAME)
    assert values(followed) == before + found
    assert followed.position() == last
    followed.close()


def test_a_gap_that_opens_while_it_reads_is_noted_between_what_was_read_before_and_after(tmp_path):
    topic = MemoryTopic(TOPIC, 3, on_gap="skip")
    source = JournalledSource(topic, tmp_path)
    source.start()
    before = values(source, most=40)
    first = topic.next_offsets()[1]
    topic.log_starts[1] = offset_of(50)
    after = values(source)
    assert source.passed_over == offset_of(50) - first
    assert [value for p, value in after if p == 1] == TOPIC[1][50:]
    assert [s for s in spans(tmp_path) if s.kind is Kind.GAP] == [Span(Kind.GAP, 1, first, offset_of(50))]
    last = source.position()
    source.close()
    followed = FollowedSource(MemoryTopic(TOPIC, seed=5), tmp_path / FILE_NAME)
    assert values(followed) == before + after
    assert followed.position() == last
    followed.close()


def test_a_journal_that_does_not_fit_the_position_is_refused(tmp_path):
    written(tmp_path, Span(Kind.START, 0, 0, 0), Span(Kind.READ, 0, 0, 4), Span(Kind.READ, 0, 6, 9))
    followed = FollowedSource(MemoryTopic(TOPIC), tmp_path / FILE_NAME)
    with pytest.raises(BadData, match="partition 0 from 6, but the one before it ended at 4"):
        values(followed)
    followed.close()


def test_nothing_is_given_out_before_it_is_in_the_file(tmp_path):
    source = journalled(tmp_path, seed=6)
    while not source.at_end():
        block = source.read(5)
        if len(block):
            *_, last = spans(tmp_path)
            assert last.partition == block.partition
            assert last.first <= block.offsets[0] <= block.offsets[-1] < last.last
    source.close()
