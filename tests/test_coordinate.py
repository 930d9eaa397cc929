"""The touch word of a coordinate: date of the last touch, name flag and tally, against plain counting."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from stream.coordinate import NAMED, TALLY, example_of, tally_of, touched
from stream.kernel import kernel

EXACT = 1 << 23
LAST = (1 << 35) - 1
"""Largest example number that a word can hold: 34 billion."""
words = st.integers(0, 2**64 - 1)
examples = st.integers(1, LAST)


def touch(word, example):
    return int(touched(np.uint64(word), np.uint64(example)))


@kernel
def touch_all(word, first, step, count):
    """The word after `count` touches, at example numbers first, first + step, ..."""
    example = np.uint64(first)
    for _ in range(count):
        word = touched(word, example)
        example += np.uint64(step)
    return word


@kernel
def touch_at_random(word, most, count):
    """The word after `count` touches, 1 to `most` example numbers apart."""
    np.random.seed(5)
    example = np.uint64(1)
    for _ in range(count):
        word = touched(word, example)
        example += np.uint64(1 + np.random.randint(0, most))
    return word


def touch_many(word, first, step, count):
    return np.array([touch_all(np.uint64(word), first, step, count)], np.uint64)


class Plain:
    """Exponent and count as the module tells them: beyond 2**23 every 2**e-th example number counts 2**e."""

    def __init__(self, exponent=0, count=0):
        self.exponent, self.count = exponent, count

    def touch(self, example):
        if example % 2**self.exponent == 0:
            self.count += 1
            if self.count == EXACT:
                self.exponent, self.count = self.exponent + 1, EXACT // 2

    @property
    def tally(self):
        return self.count * 2**self.exponent


@given(words, examples)
def test_a_touch_dates_the_word_and_keeps_the_name_flag(word, example):
    after = touch(word, example)
    assert int(example_of(np.array([after], np.uint64))[0]) == example
    assert after & int(NAMED) == word & int(NAMED)


@given(
    st.integers(0, 20),
    st.sampled_from([EXACT // 2, EXACT - 2, EXACT - 1]) | st.integers(EXACT // 2, EXACT - 1),
    st.lists(examples, max_size=8),
    st.booleans(),
)
def test_touches_count_as_the_plain_rule_does(exponent, count, numbers, named):
    plain = Plain(exponent, count)
    word = exponent << 23 | count | (int(NAMED) if named else 0)
    for example in [*numbers, 2**exponent * 3, 2 ** (exponent + 1) * 5]:
        plain.touch(example)
        word = touch(word, example)
        assert int(tally_of(np.array([word], np.uint64))[0]) == plain.tally
        assert bool(word & int(NAMED)) == named


@given(st.integers(0, 300), examples.filter(lambda first: first < LAST - 1000))
def test_small_tallies_are_exact_whatever_the_example_numbers(count, first):
    assert int(tally_of(touch_many(0, first, 3, count))[0]) == count


def test_the_tally_is_exact_up_to_eight_million():
    for count in (1, EXACT - 2, EXACT - 1, EXACT):
        assert int(tally_of(touch_many(0, 1, 7, count))[0]) == count
    word = touch_many(0, 1, 7, EXACT)
    assert word[0] & TALLY == (1 << 23) | (EXACT // 2)


@pytest.mark.parametrize("step", [1, 3, 999])
def test_beyond_it_a_steady_token_is_counted_to_a_hundred_thousandth(step):
    """At each exponent, from below a full count to beyond."""
    for exponent in range(1, 6):
        start = Plain(exponent, EXACT - 5_000)
        count = 2**exponent * 20_000
        after = tally_of(touch_many(exponent << 23 | start.count, 10_000_019, step, count))[0]
        assert after == pytest.approx(start.tally + count, rel=1e-5)
        assert after > start.tally


@pytest.mark.parametrize("exponent", [1, 3, 8])
def test_beyond_it_a_random_token_is_counted_to_a_thousandth(exponent):
    """Chance decides then which touches count: an exponent counts 2**22 of them, so 2 parts in 10,000 off."""
    before, count = EXACT // 2 << exponent, EXACT // 32 << exponent
    word = touch_at_random(np.uint64(exponent << 23 | EXACT // 2), 4, count)
    after = tally_of(np.array([word], np.uint64))[0]
    assert after - before == pytest.approx(count, rel=0.01)
    assert after == pytest.approx(before + count, rel=1e-3)


def test_a_token_of_every_message_is_counted_for_years():
    """All of the exponents that a word can hold, jumped to: 2**23 to 2**35 messages."""
    for exponent in range(1, 13):
        plain = Plain(exponent, EXACT // 2)
        now = LAST - 2 ** (exponent + 6)
        after = touch_many(exponent << 23 | plain.count, now, 1, 2 ** (exponent + 6))
        assert tally_of(after)[0] == pytest.approx(plain.tally + 2 ** (exponent + 6), rel=1e-5)
        assert int(example_of(after)[0]) == LAST - 1


def test_readers_take_whole_columns():
    column = np.array([5 << 29 | 3, int(NAMED) | 7 << 29 | 4 << 23 | 9, 0], np.uint64)
    assert example_of(column).tolist() == [5, 7, 0]
    assert tally_of(column).tolist() == [3.0, 9.0 * 16, 0.0]
