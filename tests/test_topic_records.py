"""The kernel that unpacks batches of records, held to the library's own reader, and to any bytes at all."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from kafka.record import MemoryRecords, MemoryRecordsBuilder

from stream.errors import BadData
from stream.topics.records import Batch, Single, chunk_of

CONTENT = st.none() | st.binary(max_size=40) | st.just(b'{\n"a": 1}\r\n')
RECORD = st.tuples(
    CONTENT,
    CONTENT,
    st.integers(-(2**40), 2**40),
    st.lists(st.tuples(st.text(max_size=3), st.binary(max_size=3)), max_size=2),
    st.integers(0, 3),
)


def packed(records, first=0):
    """The records as the library writes a batch, with holes in the offsets, and as it reads them back."""
    builder = MemoryRecordsBuilder(2, 0, 1 << 20, offset=first)
    for key, value, time_ms, headers, hole in records:
        builder.skip(hole)
        assert builder.append(time_ms, key, value, headers) is not None
    builder.close()
    batch = MemoryRecords(builder.buffer()).next_batch()
    header = batch.HEADER_STRUCT.size
    given = Batch(
        bytes(builder.buffer()[header:]), batch.records_count, batch.base_offset, batch.first_timestamp, -1
    )
    return given, list(batch), batch.next_offset


@given(st.lists(st.lists(RECORD, min_size=1, max_size=12), min_size=1, max_size=4), st.integers(0, 20))
def test_what_the_kernel_reads_is_what_the_library_reads(groups, wanted_from):
    batches, expected, after = [], [], 0
    for group in groups:
        batch, read, after = packed(group, after)
        batches.append(batch)
        expected += read
    chunk = chunk_of("t", 3, batches, wanted_from, after, most=20)
    expected = [r for r in expected if r.value is not None and r.offset >= wanted_from]
    assert [chunk.message(row) for row in range(len(chunk))] == [message(r) for r in expected]
    block = chunk.block(0, len(chunk))
    cut = [r.value[:21].replace(b"\n", b"\r") for r in expected]
    assert [block.value(row) for row in range(len(block))] == cut
    assert block.buffer == b"".join(value + b"\n" for value in cut)
    assert chunk.after == after


def message(record):
    from stream.message import Message

    time_ms = None if record.timestamp < 0 else record.timestamp
    return Message("t", 3, record.offset, time_ms, record.key, record.value)


@given(st.lists(RECORD, min_size=1, max_size=6))
def test_single_records_of_old_formats_give_the_same_chunk(records):
    batch, read, after = packed(records)
    one = chunk_of("t", 0, [batch], 0, after, 100)
    other = chunk_of("t", 0, [Single(r.offset, r.timestamp, r.key, r.value) for r in read], 0, after, 100)
    assert [one.message(row) for row in range(len(one))] == [other.message(row) for row in range(len(other))]
    assert one.buffer == other.buffer and (one.offsets == other.offsets).all()


@given(st.binary(max_size=80), st.integers(-1, 12))
def test_bytes_that_are_no_batch_are_refused_and_never_read_past_their_end(data, count):
    found = [Batch(data, count, 5, 0, -1)]
    try:
        chunk = chunk_of("t", 0, found, 0, 9, 100)
    except BadData as error:
        assert "topic t partition 0" in str(error)
    else:
        check_inside(chunk)


@given(st.lists(RECORD, min_size=1, max_size=6), st.data())
def test_a_batch_with_a_changed_byte_is_read_inside_its_bounds_or_refused(records, data):
    batch, _, after = packed(records)
    changed = bytearray(batch.data)
    changed[data.draw(st.integers(0, len(changed) - 1))] = data.draw(st.integers(0, 255))
    try:
        chunk = chunk_of("t", 0, [Batch(bytes(changed), batch.count, 0, 0, -1)], 0, after, 100)
    except BadData:
        return
    check_inside(chunk)


def check_inside(chunk):
    for first, size in (chunk.values, chunk.keys):
        present = size >= 0
        assert (first[present] >= 0).all() and (first[present] + size[present] <= len(chunk.data)).all()
    assert (np.diff(chunk.offsets) > 0).all()


@pytest.mark.parametrize("spoil", [lambda d: d[:-1], lambda d: d + b"\0", lambda d: b"\x01" + d[1:]])
def test_a_batch_of_the_wrong_length_names_topic_and_offset(spoil):
    batch, _, after = packed([(b"k", b"v", 0, [], 0), (b"k", b"w", 0, [], 0)], first=40)
    broken = Batch(spoil(batch.data), 2, batch.base_offset, 0, -1)
    with pytest.raises(BadData, match=r"topic t partition 0: a batch at or behind offset (0|40|41) "):
        chunk_of("t", 0, [broken], 0, after, 100)


def test_a_time_of_appending_counts_for_every_record():
    batch, _, after = packed([(None, b"1", 7, [], 0), (None, b"2", 9, [], 0)])
    stamped = Batch(batch.data, 2, 0, 7, 1234)
    chunk = chunk_of("t", 0, [stamped], 0, after, 100)
    assert [chunk.message(row).timestamp_ms for row in (0, 1)] == [1234, 1234]


def test_records_are_known_again_by_key_and_value():
    def digest(key, value):
        batch, _, after = packed([(key, value, 0, [], 0)])
        return chunk_of("t", 0, [batch], 0, after, 100).digest(0)

    digests = [digest(*r) for r in [(b"a", b"bc"), (b"ab", b"c"), (None, b"abc"), (b"a", b"bd")]]
    assert len(set(digests)) == 4 and digests[0] == digest(b"a", b"bc")
