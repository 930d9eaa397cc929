"""The table against a dict: rows found, moved, forgotten, saved; memory, probes, sightings and crowding."""

import random
from collections import Counter
from contextlib import contextmanager

import numpy as np
import pytest
from hypothesis import given
from hypothesis import settings as options
from hypothesis import strategies as st

from stream.batch import Batch
from stream.coordinate import FIRST, NAMED, SECOND, TOUCH
from stream.errors import CannotCreate
from stream.settings.models import State
from stream.tables import Table
from stream.tables import table as table_module
from tests.batches import Example, batch_of

LARGEST = 2**63 - 1
BYTES_AT_MOST = 36
"""Of memory per live coordinate, the bound that the project promises at 20 million live."""


def table_of(capacity=1 << 12, seed=None, **state):
    """A table; with `seed` its secret is drawn by it. Limits below the settings' own are let pass."""
    table = Table(State().model_copy(update=state), capacity)
    if seed is not None:
        table._secret = secret_of(seed)
    return table


def secret_of(seed):
    chance = random.Random(seed)
    word, *odd = (chance.getrandbits(63) for _ in range(4))
    odd = [multiplier | 1 for multiplier in odd]
    return np.array([word, *odd, *(pow(multiplier, -1, 1 << 63) for multiplier in odd)], np.uint64)


def one_each(addresses):
    """A batch of one labelled example for each address, made fast."""
    count = len(addresses)
    return Batch(
        np.arange(count + 1, dtype=np.int64),
        np.asarray(addresses, np.uint64),
        np.ones(count, np.float32),
        np.ones(count, np.int8),
        np.ones(count),
        np.zeros(0, np.uint8),
        np.zeros(count, np.int64),
        np.zeros(count, np.int32),
    )


def admit_all(table, batch):
    """Slots of all entries once the last one is in."""
    first = 0
    while first < len(batch):
        before = first
        _, first = table.admit(batch, first, len(batch))
        assert first > before
    return table.slots_of(batch.addresses)


@contextmanager
def tight_from(slots):
    """Tables are filled to 23/25 and grown by 1/32 from so many slots on, as they are from 4 million."""
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(table_module, "SMALL", slots)
        yield


def probe_lengths(table):
    """Slots looked at to find each row, told from the cells alone: home is the top of the key, scaled."""
    keys = table.cells[::4]
    slots = np.flatnonzero(keys)
    homes = [(int(key) >> 32) * table._capacity >> 32 for key in keys[slots]]
    return slots - np.array(homes) + 1


class Mirror:
    """A table beside a dict of address to (first, second, touch) bits."""

    def __init__(self, capacity):
        self.capacity = capacity
        self.table, self.rows = table_of(capacity), {}
        self.mark = 0

    def admit(self, examples):
        batch = batch_of(examples)
        first = 0
        while first < len(batch):
            slots, stopped = self.table.admit(batch, first, len(batch))
            assert stopped > first
            for e in range(batch.row_ptr[first], batch.row_ptr[stopped]):
                self.look(int(batch.addresses[e]), int(slots[e]), examples[self.example_of(batch, e)].label)
            first = stopped

    @staticmethod
    def example_of(batch, entry):
        return int(np.searchsorted(batch.row_ptr, entry, side="right")) - 1

    def look(self, address, slot, label):
        """The slot must hold what the dict holds; then it gets new contents."""
        if address not in self.rows:
            if label is None:
                assert slot == -1
                return
            self.rows[address] = (0, 0, 0)
        assert tuple(int(x) for x in self.table.cells[4 * slot + 1 : 4 * slot + 4]) == self.rows[address]
        self.mark += 1
        self.rows[address] = (self.mark, self.mark << 40, self.mark << 29)
        self.table.cells[4 * slot + 1 : 4 * slot + 4] = self.rows[address]

    def forget(self, chosen):
        addresses = sorted(self.rows)
        doomed = [addresses[i % len(addresses)] for i in chosen] if addresses else []
        self.table.forget(np.unique(self.table.slots_of(np.array(doomed, np.uint64))))
        for address in set(doomed):
            del self.rows[address]

    def reload(self):
        state = self.table.state()
        self.table = table_of(self.capacity)
        self.table.load(state)

    def check(self):
        table, rows = self.table, self.rows
        assert table.live == len(rows)
        addresses, slots = table.occupied()
        assert addresses.tolist() == sorted(rows)
        assert table.slots_of(addresses).tolist() == slots.tolist()
        assert table.addresses_at(slots).tolist() == addresses.tolist()
        cells = np.stack([table.cells[4 * slots + int(c)] for c in (FIRST, SECOND, TOUCH)], axis=1)
        assert [tuple(row) for row in cells.tolist()] == [rows[a] for a in sorted(rows)]
        used = [table.in_use(begin, end) for begin, end in table.chunks(500)]
        assert np.flatnonzero(np.concatenate(used)).tolist() == sorted(slots.tolist())
        absent = [a for a in (0, 1, LARGEST, 12345) if a not in rows]
        assert (table.slots_of(np.array(absent, np.uint64)) == -1).all()


addresses = (
    st.integers(0, 40)
    | st.integers(0, LARGEST)
    | st.sampled_from([0, LARGEST])
    | st.integers(0, 60).map(lambda k: k << 57)
)
examples = st.builds(
    Example,
    st.lists(addresses, max_size=12, unique=True).map(lambda held: dict.fromkeys(held, 1.0)),
    st.sampled_from([1, 0, 1, None]),
)
burst = st.integers(0, LARGEST).map(
    lambda seed: [Example({random.Random(seed + i).getrandbits(63): 1.0}) for i in range(seed % 150)]
)
steps = st.lists(
    st.tuples(st.just("admit"), st.lists(examples, max_size=6) | burst)
    | st.tuples(st.just("forget"), st.lists(st.integers(0, 1000), max_size=60))
    | st.tuples(st.just("reload"), st.none()),
    max_size=14,
)


@pytest.mark.parametrize("limit", [1 << 22, 64], ids=["doubling", "growing by 1/32"])
@given(steps=steps)
@options(max_examples=60)
def test_the_table_is_a_dict_whatever_happens_to_it(steps, limit):
    with tight_from(limit):
        mirror = Mirror(64)
        for step, what in steps:
            getattr(mirror, step)(*([] if what is None else [what]))
            mirror.check()


@pytest.mark.parametrize("limit", [1 << 22, 1 << 7], ids=["doubling", "growing by 1/32"])
def test_rows_survive_growth_over_many_sizes_with_rows_taken_out_between(limit):
    chance = random.Random(1)
    with tight_from(limit):
        mirror, sizes = Mirror(64), set()
        for _ in range(60):
            mirror.admit([Example({chance.getrandbits(63): 1.0}) for _ in range(120)])
            mirror.forget([chance.randrange(10**6) for _ in range(40)])
            sizes.add(mirror.table.slots)
            mirror.check()
    assert len(sizes) > (50 if limit == 1 << 7 else 5)


def test_address_zero_is_an_address_like_others():
    table = table_of()
    assert table.slots_of(np.array([0], np.uint64)).tolist() == [-1]
    (slot,) = admit_all(table, one_each([0]))
    table.cells[4 * slot + 1] = 77
    admit_all(table, one_each(range(5000)))
    (slot,) = table.slots_of(np.array([0], np.uint64))
    assert table.cells[4 * slot + 1] == 77
    table.forget(np.array([slot]))
    assert table.live == 4999 and table.slots_of(np.array([0], np.uint64)).tolist() == [-1]


def test_the_state_knows_nothing_of_slots_capacity_or_secret():
    chance = random.Random(2)
    chosen = [chance.getrandbits(40) for _ in range(2000)]
    tables = [table_of(seed=1), table_of(seed=2), table_of(capacity=1 << 15)]
    for i, table in enumerate(tables):
        slots = admit_all(table, one_each(chosen if i else chosen[::-1]))
        table.floats[4 * slots + int(FIRST)] = np.arange(2000) if i else np.arange(2000)[::-1]
        table.cells[4 * slots[::2] + int(TOUCH)] |= NAMED
    with tight_from(256):
        loaded = table_of(capacity=256)
        loaded.load(tables[0].state())
    one, *others = [table.state() for table in (*tables, loaded)]
    for other in others:
        assert list(one) == list(other)
        assert all(one[name].tobytes() == other[name].tobytes() for name in one)
    assert one["addresses"].tolist() == sorted(chosen)
    assert not (one["touch"] & NAMED).any()
    orders = [table.addresses_at(np.flatnonzero(table.in_use(0, table.slots))).tolist() for table in tables]
    assert orders[0] != orders[1] != orders[2], "the secret decides the order of rows"


def test_every_table_has_a_secret_of_its_own_and_can_undo_it():
    one, other = table_module._random_secret(), table_module._random_secret()
    assert one.tolist() != other.tolist()
    table = table_of()
    slots = admit_all(table, one_each([0, 1, LARGEST, 1 << 62]))
    assert table.addresses_at(slots).tolist() == [0, 1, LARGEST, 1 << 62]


ROWS = 20_000
CHANCE = random.Random(3)
MADE_TO_COLLIDE = {
    "equal low bits": [k << 43 | 5 for k in range(ROWS)],
    "equal low bits of 40": [k << 25 for k in range(ROWS)],
    "equal high bits": [1 << 62 | k for k in range(ROWS)],
    "equal bits at both ends": [3 << 60 | k << 20 | 9 for k in range(ROWS)],
    "multiples": [k * 1_000_003 for k in range(ROWS)],
    "multiples of 2**32": [k << 32 for k in range(ROWS)],
    "progression of a mixing constant": [k * 0x9E3779B97F4A7C15 % 2**63 for k in range(ROWS)],
    "random": [CHANCE.getrandbits(63) for _ in range(ROWS)],
}


@pytest.mark.parametrize("limit", [1 << 22, 1 << 10], ids=["filled to 3/4", "filled to 23/25"])
@pytest.mark.parametrize("chosen", MADE_TO_COLLIDE.values(), ids=MADE_TO_COLLIDE.keys())
def test_probes_stay_short_for_addresses_made_to_collide(chosen, limit):
    """Linear probing at load a takes (1 + 1 / (1 - a)) / 2 looks (Knuth, volume 3, 6.4; from memory)."""
    for seed in range(12):
        with tight_from(limit):
            table = table_of(seed=seed)
            admit_all(table, one_each(chosen))
        lengths = probe_lengths(table)
        load = table.live / table._capacity
        assert lengths.min() >= 1 and len(lengths) == table.live
        assert lengths.mean() < 1.35 * (1 + 1 / (1 - load)) / 2
        assert lengths.max() < (200 if load < 0.75 else 2_500)


def test_memory_stays_under_36_bytes_a_live_coordinate_growth_included():
    """At three million live, with the rule of growth that holds from four million slots on."""
    chance = np.random.default_rng(4)
    most = 0.0
    with tight_from(1 << 20):
        table = table_of()
        admit_all(table, one_each(chance.integers(0, 1 << 63, 3_000_000, np.uint64)))
        while table.live < 3_300_000:
            admit_all(table, one_each(chance.integers(0, 1 << 63, 2_000, np.uint64)))
            most = max(most, table.table_bytes / table.live)
    assert table.table_bytes == table.cells.nbytes
    assert 35 < most <= BYTES_AT_MOST


def test_a_table_past_two_to_the_32_slots_says_what_to_do():
    table = table_of()
    table._capacity = 1 << 32
    table.live = (1 << 32) * 23 // 25
    with pytest.raises(CannotCreate, match=r"cannot grow.*state\.max_live"):
        table.admit(one_each([1]), 0, 1)


sightings = st.lists(
    st.builds(
        Example,
        st.lists(st.integers(0, 30), max_size=6, unique=True).map(lambda held: dict.fromkeys(held, 1.0)),
        st.sampled_from([1, 0, None]),
    ),
    max_size=60,
)


@given(stream=sightings, admit_after=st.integers(2, 5), halve=st.sets(st.integers(0, 59), max_size=3))
@options(max_examples=60)
def test_a_coordinate_is_admitted_at_its_kth_labelled_sighting(stream, admit_after, halve):
    table = table_of(admit_after=admit_after, admission_bytes=1 << 16)
    seen, live = Counter(), set()
    for i, example in enumerate(stream):
        batch = batch_of([example])
        slots, stopped = table.admit(batch, 0, 1)
        assert stopped == 1
        if example.label is not None:
            for address in example.row.keys() - live:
                seen[address] += 1
                if seen[address] >= admit_after:
                    live.add(address)
        assert [slot >= 0 for slot in slots[: len(example.row)]] == [a in live for a in example.row]
        assert table.live == len(live)
        if i in halve:
            table.age_filter()
            seen = Counter({address: count // 2 for address, count in seen.items()})


@pytest.mark.parametrize("admission_bytes", [1 << 10, 1 << 14])
def test_a_crowded_filter_counts_too_much_at_times_and_never_too_little(admission_bytes):
    chance, k = random.Random(5), 4
    table, seen = table_of(admit_after=k, admission_bytes=admission_bytes), Counter()
    early = 0
    for _ in range(12_000):
        address = int(2 ** (chance.random() * 13))
        known = table.slots_of(np.array([address], np.uint64))[0] >= 0
        table.admit(one_each([address]), 0, 1)
        live = table.slots_of(np.array([address], np.uint64))[0] >= 0
        seen[address] += 1
        assert live or seen[address] < k
        early += live and not known and seen[address] < k
    assert table.filter_bytes == admission_bytes
    assert early > 500 if admission_bytes == 1 << 10 else early < 0.02 * len(seen)


def test_the_filter_raises_only_the_lesser_of_the_two_places_of_an_address():
    """Its bytes are state: places and counts are those of this plain rule."""
    size, chance = 1 << 10, random.Random(6)
    plain = [0] * size
    table = table_of(admit_after=1_000, admission_bytes=size)  # never admitted
    for _ in range(4_000):
        address = int(2 ** (chance.random() * 12)) * 0x9E3779B97F % 2**63
        table.admit(one_each([address]), 0, 1)
        word = address * 0x9E3779B97F4A7C15 % 2**64
        word = (word ^ word >> 29) * 0xBF58476D1CE4E5B9 % 2**64
        places = [(word >> 32) * size >> 32, (word % 2**32) * size >> 32]
        count = min(255, 1 + min(plain[place] for place in places))
        for place in places:
            plain[place] = max(plain[place], count)
    assert table.state()["admission"].tolist() == plain


def test_counts_of_the_filter_stop_at_255_and_its_places_do_not_depend_on_the_secret():
    states = []
    for seed in (1, 2):
        table = table_of(seed=seed, admit_after=300, admission_bytes=1 << 10)
        for _ in range(280):
            table.admit(one_each([99]), 0, 1)
        states.append(table.state()["admission"])
        assert table.live == 0
    assert states[0].tobytes() == states[1].tobytes()
    assert sorted(states[0].tolist(), reverse=True)[:3] == [255, 255, 0]


def test_without_admission_there_is_no_filter_to_save():
    table = table_of()
    admit_all(table, one_each([1, 2, 3]))
    assert table.live == 3 and "admission" not in table.state() and table.filter_bytes == 1


def test_saved_sightings_go_on_counting():
    table = table_of(admit_after=3, admission_bytes=1 << 10)
    for _ in range(2):
        table.admit(one_each([7]), 0, 1)
    state = table.state()
    table.admit(one_each([8]), 0, 1)
    other = table_of(admit_after=3, admission_bytes=1 << 10)
    other.load(state)
    other.admit(one_each([7]), 0, 1)
    other.admit(one_each([8]), 0, 1)
    assert other.occupied()[0].tolist() == [7]


def test_at_max_live_admit_stops_before_the_example_that_needs_more():
    table = table_of(max_live=5)
    rows = [[1, 2], [1], [3, 4], [2, 3, 4], [5, 6, 1], [7]]
    batch = batch_of([Example(dict.fromkeys(row, 1.0)) for row in rows])
    assert table.admit(batch, 0, 6)[1] == 4
    assert table.live == 4 and table.refused == 0
    assert table.admit(batch, 4, 6)[1] == 4, "there is room for 5 or for 6, not for both"
    slots, stopped = table.admit_crowded(batch, 4)
    assert stopped == 5 and table.live == 5 and table.refused == 1
    assert (slots[8:11] >= 0).tolist() == [True, False, True]
    assert table.admit(batch, 5, 6)[1] == 5
    table.admit_crowded(batch, 5)
    assert table.live == 5 and table.refused == 2
    table.forget(table.slots_of(np.array([2], np.uint64)))
    assert table.admit(batch, 5, 6)[1] == 6
    assert table.occupied()[0].tolist() == [1, 3, 4, 5, 7]


def test_messages_without_a_label_pass_a_full_table():
    table = table_of(max_live=2)
    stream = [
        Example({1: 1.0, 2: 1.0}),
        Example({3: 1.0, 1: 1.0}, None),
        Example({2: 1.0}),
        Example({4: 1.0}),
    ]
    batch = batch_of(stream)
    slots, stopped = table.admit(batch, 0, 4)
    assert stopped == 3 and table.live == 2 and table.refused == 0
    assert (slots[:5] >= 0).tolist() == [True, True, False, True, True]


def test_sightings_of_an_example_that_waits_for_room_count_once():
    table = table_of(admit_after=2, admission_bytes=1 << 12, max_live=3)
    batch = batch_of([Example({1: 1.0, 2: 1.0, 3: 1.0, 4: 1.0})] * 2)
    for example in (0, 1):
        assert table.admit(batch, example, 2)[1] == example
        table.admit_crowded(batch, example)
        assert table.live == (0 if example == 0 else 3)
    assert table.refused == 1
    assert sorted(table.state()["admission"].tolist())[-8:] == [2] * 8


def test_clearing_a_name_touches_one_bit_alone():
    table = table_of()
    slots = admit_all(table, one_each([4, 5]))
    table.cells[4 * slots + int(TOUCH)] = [9 << 29 | int(NAMED) | 3, 9 << 29 | 3]
    table.clear_named(slots)
    assert table.touches(slots).tolist() == [9 << 29 | 3] * 2
    assert not table.cells[4 * slots + int(SECOND)].any()
