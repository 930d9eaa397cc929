"""Examples that wait: rows of a batch in, the same rows out."""

from dataclasses import fields

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from stream.errors import BadData
from stream.labels import ExampleCodec
from tests.batches import Example, batch_of

examples = st.builds(
    Example,
    st.dictionaries(st.integers(0, 2**63), st.floats(-(2.0**99), 2.0**99, width=32), max_size=6),
    st.sampled_from([0, 1]),
    st.floats(0, 1e6),
    st.integers(0, 3),
)
long = st.builds(lambda n: Example(dict.fromkeys(range(n), 1.0)), st.integers(40, 90))


@given(st.lists(examples | long, max_size=8), st.randoms())
def test_rows_come_back_as_they_were_in_any_order(rows, chance):
    codec = ExampleCodec()
    payloads = codec.pack(batch_of(rows))
    order = list(range(len(rows)))
    chance.shuffle(order)
    back = codec.unpack([payloads[at] for at in order], [rows[at].label for at in order])
    expected = batch_of([rows[at] for at in order])
    for column in fields(expected):
        ours, theirs = getattr(back, column.name), getattr(expected, column.name)
        assert (ours.dtype, ours.tolist()) == (theirs.dtype, theirs.tolist()), column.name


def test_token_texts_that_lie_anywhere_in_their_buffer_are_kept():
    batch = batch_of([Example({5: 1.0, 9: 2.0}), Example({7: 1.0})])
    shuffled = np.concatenate((batch.texts[batch.text_starts[1] :], batch.texts[: batch.text_starts[1]]))
    moved = batch.text_starts - batch.text_starts[1]
    batch.texts, batch.text_starts = shuffled, np.where(moved < 0, moved + len(shuffled), moved)
    back = ExampleCodec().unpack(ExampleCodec().pack(batch), [1, 1])
    assert [back.text(entry) for entry in range(3)] == [batch.text(entry) for entry in range(3)]


@pytest.mark.parametrize("entries", [1, 60])
def test_a_damaged_payload_is_told_and_never_learned(entries):
    row = dict.fromkeys(range(entries), 1.0)
    (payload,) = ExampleCodec().pack(batch_of([Example(row)]))
    for at in range(len(payload)):
        damaged = bytearray(payload)
        damaged[at] ^= 4
        with pytest.raises(BadData, match=r"state\.folder"):
            ExampleCodec().unpack([bytes(damaged)], [1])
