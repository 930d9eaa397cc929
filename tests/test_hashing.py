"""The compiled MurmurHash3 x64 128 against `mmh3`, byte for byte, and the published figures."""

import mmh3
import numpy as np
import pytest
from hypothesis import example, given
from hypothesis import strategies as st

from stream.features.hashing import PADDING, hash_ranges

seeds = st.integers(0, 2**32 - 1) | st.sampled_from([0, 1, 2**32 - 1])
BEFORE = 0xA5
AFTER = 0x5A


def first_word(text, seed=0, shift=0, after=AFTER):
    """Our hash of `text` where it stands `shift` bytes into a buffer, with noise around it."""
    buffer = np.frombuffer(bytearray([BEFORE] * shift) + text + bytes([after] * PADDING), np.uint8)
    out = np.zeros(1, np.uint64)
    hash_ranges(buffer, np.array([shift], np.int64), np.array([len(text)], np.int32), 1, np.uint64(seed), out)
    return int(out[0])


def reference(text, seed=0):
    return mmh3.hash64(text, seed, x64arch=True, signed=False)[0]


@given(st.binary(max_size=300), seeds, st.integers(0, 33), st.sampled_from([0, AFTER, 0xFF]))
@example(b"", 0, 0, 0)
@example(b"", 2**32 - 1, 1, 0xFF)
def test_every_byte_string_hashes_as_in_mmh3_at_every_alignment(text, seed, shift, after):
    assert first_word(text, seed, shift, after) == reference(text, seed)


@pytest.mark.parametrize("fill", [b"\x00", b"\xff", b"\x80", b"q"])
def test_every_length_of_tail_is_hashed_whole(fill):
    for length in range(300):
        text = fill * length
        assert first_word(text, 7, length % 16) == reference(text, 7), length
        for place in range(max(0, length - 16), length):
            other = text[:place] + bytes([text[place] ^ 1]) + text[place + 1 :]
            assert first_word(other, 7) == reference(other, 7) != reference(text, 7)


@given(st.lists(st.binary(max_size=40), min_size=1, max_size=30), seeds)
def test_many_ranges_of_one_buffer_hash_each_by_itself(texts, seed):
    lengths = np.array([len(text) for text in texts], np.int32)
    starts = np.concatenate([[0], np.cumsum(lengths[:-1])]).astype(np.int64)
    buffer = np.frombuffer(bytearray().join(texts) + bytes(PADDING), np.uint8)
    out = np.full(len(texts) + 1, 99, np.uint64)
    hash_ranges(buffer, starts, lengths, len(texts), np.uint64(seed), out)
    assert out.tolist() == [reference(text, seed) for text in texts] + [99]


def test_the_published_verification_value():
    """SMHasher's own test of x64_128: 0x6384BA69 over the hashes of {0}, {0,1}, ... at seeds 256 - length.

    The value needs both words of each hash; mmh3 gives them, and ours are the first words of the same.
    """
    keys = [(bytes(range(length)), 256 - length) for length in range(256)]
    whole = b"".join(mmh3.hash_bytes(key, seed, x64arch=True) for key, seed in keys)
    assert int.from_bytes(mmh3.hash_bytes(whole, 0, x64arch=True)[:4], "little") == 0x6384BA69
    words = [first_word(key, seed).to_bytes(8, "little") for key, seed in keys]
    ours = b"".join(word + whole[16 * i + 8 : 16 * i + 16] for i, word in enumerate(words))
    assert ours == whole
    assert first_word(ours) & 0xFFFFFFFF == 0x6384BA69


def test_the_published_vector():
    """x64_128 of "Hello world" at seed 0, published with ports: 09c01ad2296d65bdb32ceb54cdb5b54a."""
    assert mmh3.hash_bytes(b"Hello world", 0).hex() == "09c01ad2296d65bdb32ceb54cdb5b54a"
    assert first_word(b"Hello world").to_bytes(8, "little").hex() == "09c01ad2296d65bd"
