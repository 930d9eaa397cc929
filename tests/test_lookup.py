"""Scoring with the non-zero weights only, against plain Python with `math.fsum`."""

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from hypothesis.extra import numpy as arrays

from stream.batch import Batch
from stream.tables.lookup import Lookup
from stream.weights import Weights

SPACE = 1 << 40


def weights_of(table, intercept=0.0):
    addresses = sorted(table)
    return Weights(
        addresses=np.array(addresses, np.uint64),
        values=np.array([table[a] for a in addresses], np.float32),
        names=(b"",) * len(addresses),
        messages=np.zeros(len(addresses)),
        intercept=intercept,
        learned=0,
        fingerprint={},
    )


def batch_of(rows):
    entries = [entry for row in rows for entry in row]
    return Batch(
        row_ptr=np.cumsum([0] + [len(row) for row in rows]).astype(np.int64),
        addresses=np.array([address for address, _ in entries], np.uint64),
        values=np.array([value for _, value in entries], np.float32),
        labels=np.full(len(rows), -1, np.int8),
        weights=np.ones(len(rows)),
        texts=np.zeros(0, np.uint8),
        text_starts=np.zeros(len(entries), np.int64),
        text_lengths=np.zeros(len(entries), np.int32),
    )


numbers = st.floats(-(2.0**100), 2.0**100, width=32)
addresses = st.integers(0, SPACE - 1)
tables = st.dictionaries(addresses | st.integers(0, 30), numbers.filter(bool), max_size=40)


@given(tables, st.floats(-50, 50), st.data())
def test_a_margin_is_the_exactly_rounded_sum_of_intercept_and_effects(table, intercept, data):
    some = st.sampled_from(sorted(table)) if table else addresses
    row = st.lists(st.tuples(some | addresses | st.integers(0, 30), numbers), max_size=30)
    rows = data.draw(st.lists(row, max_size=5))
    margins, probabilities = Lookup(weights_of(table, intercept)).score(batch_of(rows))
    for i, entries in enumerate(rows):
        effects = [float(np.float32(table.get(a, 0.0))) * float(np.float32(v)) for a, v in entries]
        expected = math.fsum([intercept, *effects])
        assert margins[i] == expected
        chance = 1 / (1 + math.exp(-expected)) if expected > -700 else 0.0
        assert math.isclose(probabilities[i], chance, rel_tol=1e-13, abs_tol=1e-300)


@given(tables, arrays.arrays(np.uint64, 20, elements=st.integers(0, 60)))
def test_every_weight_is_found_and_nothing_else(table, asked):
    found = Lookup(weights_of(table)).weights_of(asked)
    assert found.tolist() == [float(np.float32(table.get(int(a), 0.0))) for a in asked]
    own = np.array(sorted(table), np.uint64)
    assert Lookup(weights_of(table)).weights_of(own).tolist() == [
        float(np.float32(table[int(a)])) for a in own
    ]


def test_an_empty_snapshot_scores_the_intercept():
    margins, probabilities = Lookup(weights_of({}, -1.5)).score(batch_of([[(7, 1.0)], []]))
    assert margins.tolist() == [-1.5, -1.5]
    assert probabilities.tolist() == pytest.approx([1 / (1 + math.exp(1.5))] * 2, rel=1e-15)
