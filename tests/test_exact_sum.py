"""The exactly rounded sum against `math.fsum` (Python's own, after Shewchuk 1997), bit for bit."""

import math
import random

import numpy as np
from hypothesis import example, given
from hypothesis import strategies as st

from stream.exact_sum import PARTIALS, add_term, exact_sum
from stream.kernel import kernel


@kernel
def total(terms, partials):
    count = 0
    for term in terms:
        count = add_term(partials, count, term)
    return exact_sum(partials, count)


def our_sum(terms):
    return total(np.array(terms, np.float64), np.zeros(PARTIALS))


# Products of two float32 stay below 2**256, so that no partial can overflow.
terms = st.lists(st.floats(-(2.0**256), 2.0**256), max_size=60)


@given(terms)
@example([1e16, 1.0, 1e-16])
@example([2.0**53, 1.0, 2.0**-60])
@example([2.0**53, 1.0, -(2.0**-60)])
@example([1.0, 2.0**-53, 2.0**-53, 2.0**-106])
@example([])
@example([1.0, -1.0, 2.0**-200, -1.0, 1.0])
def test_a_sum_is_rounded_once(values):
    assert our_sum(values) == math.fsum(values)


@given(terms, st.randoms(use_true_random=False))
def test_the_order_of_terms_changes_no_bit(values, chance):
    before = our_sum(values)
    chance.shuffle(values)
    assert our_sum(values).hex() == before.hex() or before == 0.0


def test_terms_over_the_whole_range_find_room_for_their_partials():
    chance = random.Random(11)
    values = [math.ldexp(chance.choice([-1, 1]) * (1 + chance.random()), e) for e in range(-1074, 1000)]
    chance.shuffle(values)
    assert our_sum(values) == math.fsum(values)
