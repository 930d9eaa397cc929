"""Table, learner and names together, held to a plain model; the same bytes whatever the cuts and restarts."""

import random
from collections import Counter
from itertools import pairwise

import numpy as np
import pytest
from hypothesis import given
from hypothesis import settings as options
from hypothesis import strategies as st

from stream.runs.model import Model
from stream.tables import table as table_module
from tests.batches import Example, batch_of, name_of
from tests.model_rig import (
    BOUNDS,
    METHODS,
    TOKENS,
    bytes_of,
    feed,
    names_swept_every,
    random_stream,
    restored,
    settings_of,
)
from tests.twins import learners_twin as twins

both = pytest.mark.parametrize("method", METHODS)


class PlainModel:
    """The rules of the model as a reader of the settings would write them down, one example at a time."""

    def __init__(self, settings, names_every):
        self.state, self.names_every = settings.state, names_every
        learner = settings.learner
        if learner.method == "ftrl":
            self.twin = twins.Ftrl(
                learner.learning_rate, learner.damping, l1_per_example=learner.l1_per_example
            )
            self.kept = (self.twin.z, self.twin.n)
        else:
            self.twin = twins.TruncatedGradient(learner.learning_rate, l1_per_example=learner.l1_per_example)
            self.kept = (self.twin.w,)
        self.touched, self.count = {}, Counter()
        self.names, self.seen = {}, Counter()
        self.refused = self.seek_room_from = 0

    @property
    def live(self):
        return self.touched.keys()

    def learn(self, example):
        row, label = example.row, example.label
        if label is None:
            return self.twin.margin({a: x for a, x in row.items() if a in self.live})
        self.admit(row)
        held = {a: x for a, x in row.items() if a in self.live}
        margin = self.twin.predict_then_update(held, label, example.weight)
        for address in held:
            self.touched[address] = self.twin.learned
            self.count[address] += 1
            if self.twin.weight(address) != 0:
                self.names.setdefault(address, name_of(address, example.variant))
        self.sweep()
        return margin

    def admit(self, row):
        room = self.room(row)
        if room < 0 and self.twin.learned >= self.seek_room_from:
            self.seek_room_from = self.twin.learned + max(1, self.state.max_live // 64)
            oldest = sorted((self.touched[a], a) for a in self.live if self.twin.weight(a) == 0)
            for _, address in oldest[: max(0, len(self.live) - int(self.state.max_live * 7 / 8))]:
                self.remove(address)
        for address in row:
            if address in self.live:
                continue
            self.seen[address] += 1
            if self.seen[address] < self.state.admit_after:
                continue
            if self.state.max_live is not None and len(self.live) >= self.state.max_live:
                self.refused += 1
                continue
            self.touched[address] = 0

    def room(self, row):
        """Left over once every new coordinate of the row has state."""
        if self.state.max_live is None:
            return 0
        return self.state.max_live - len(self.live) - sum(a not in self.live for a in row)

    def remove(self, address):
        del self.touched[address]
        self.count.pop(address)
        for kept in self.kept:
            kept.pop(address, None)

    def sweep(self):
        learned, state = self.twin.learned, self.state
        if learned % state.admission_halved_every == 0:
            self.seen = Counter({a: count // 2 for a, count in self.seen.items()})
        if (
            state.idle_after is not None
            and learned % max(1, min(state.idle_after // 4, self.names_every)) == 0
        ):
            idle = [a for a in self.live if learned - self.touched[a] >= state.idle_after]
            for address in idle:
                if self.twin.weight(address) == 0:
                    self.remove(address)
        if learned % self.names_every == 0:
            self.names = {a: n for a, n in self.names.items() if a in self.live and self.twin.weight(a) != 0}


bounds = pytest.mark.parametrize("bounds", BOUNDS, ids=lambda bound: ",".join(bound) or "unbounded")
cut_sets = st.sets(st.integers(1, 399), max_size=30)


@both
@bounds
@pytest.mark.parametrize("seed", range(3))
def test_the_model_does_what_the_plain_rules_say(method, bounds, seed):
    names_every = 31
    settings, stream = settings_of(method, **bounds), random_stream(seed, 500)
    with names_swept_every(names_every):
        model, plain = Model(settings), PlainModel(settings, names_every)
        for i in range(0, 500, 25):
            expected = [plain.learn(example) for example in stream[i : i + 25]]
            assert feed(model, stream[i : i + 25]) == pytest.approx(expected, rel=1e-9, abs=1e-11)
            assert_as_plain(model, plain)
    assert model.refused_coordinates > 0 or "max_live" not in bounds
    assert model.live < TOKENS or not bounds


def assert_as_plain(model, plain):
    state = model.state()
    assert state["table.addresses"].tolist() == sorted(plain.live)
    assert (state["table.touch"] >> np.uint64(29)).tolist() == [plain.touched[a] for a in sorted(plain.live)]
    assert model.live == len(plain.live) <= (plain.state.max_live or TOKENS)
    assert model.refused_coordinates == plain.refused
    assert model.learned == plain.twin.learned
    assert names_in(state) == plain.names
    weights = model.weights()
    non_zero = [a for a in sorted(plain.live) if plain.twin.weight(a) != 0]
    assert weights.addresses.tolist() == non_zero and model.nnz() == len(non_zero)
    assert weights.values == pytest.approx([plain.twin.weight(a) for a in non_zero], rel=1e-6)
    assert list(weights.names) == [plain.names[a] for a in non_zero], "every weight has its name"
    assert weights.messages.tolist() == [plain.count[a] for a in non_zero]
    assert weights.intercept == pytest.approx(plain.twin.intercept(), rel=1e-9)
    assert weights.learned == plain.twin.learned


def names_in(state):
    blob, ends = state["names.bytes"].tobytes(), state["names.offsets"].tolist()
    parts = [blob[begin:end] for begin, end in pairwise(ends)]
    return dict(zip(state["names.addresses"].tolist(), parts, strict=True))


@both
@bounds
@given(seed=st.integers(0, 999), cuts=cut_sets, stops=cut_sets, period=st.sampled_from([1, 7, 64]))
@options(max_examples=8)
def test_cuts_and_restarts_change_no_byte_of_the_state(method, bounds, seed, cuts, stops, period):
    settings, stream = settings_of(method, **bounds), random_stream(seed, 400)
    with names_swept_every(period):
        whole, cut, stopped = Model(settings), Model(settings), Model(settings)
        margins = feed(whole, stream)
        assert feed(cut, stream, cuts) == margins
        again, first = [], 0
        for last in [*sorted(stops), len(stream)]:
            again += feed(stopped, stream[first:last], [c - first for c in cuts if first < c < last])
            stopped, first = restored(stopped, settings), last
        assert again == margins
        assert bytes_of(whole) == bytes_of(cut) == bytes_of(stopped)
        assert_same_weights(whole.weights(), stopped.weights())


def assert_same_weights(one, other):
    assert one.addresses.tobytes() == other.addresses.tobytes()
    assert one.values.tobytes() == other.values.tobytes()
    assert one.messages.tobytes() == other.messages.tobytes()
    assert (one.names, one.intercept, one.learned) == (other.names, other.intercept, other.learned)


def test_a_model_cut_into_single_examples_passes_every_sweep():
    settings = settings_of(**BOUNDS[-1])
    stream = random_stream(5, 400)
    with names_swept_every(10):
        whole, single = Model(settings), Model(settings)
        assert feed(whole, stream) == feed(single, stream, range(400))
        assert bytes_of(whole) == bytes_of(single)


@both
def test_growth_of_the_table_leaves_no_trace_in_the_state(method):
    chance = random.Random(6)
    settings = settings_of(method, l1_per_example=1e-4)
    stream = [
        Example({chance.getrandbits(40): 1.0 for _ in range(20)}, chance.randint(0, 1)) for _ in range(1000)
    ]
    models = [Model(settings), Model(settings)]
    margins = feed(models[0], stream, [500])
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(table_module, "SMALL", 1 << 12)
        assert feed(models[1], stream, range(0, 1000, 7)) == margins
    assert models[0].live > 19_000
    assert models[0].memory()["table_bytes"] > models[1].memory()["table_bytes"]
    assert bytes_of(models[0]) == bytes_of(models[1])


def test_idle_after_removes_idle_zero_weights_and_nothing_without_it():
    stream = [Example({1: 1.0, 2: 1.0}, 1, 0.0), Example({3: 1.0}, 1, 9.0), *[Example({4: 1.0}, 1, 0.0)] * 18]
    with names_swept_every(50):
        kept, swept = (
            Model(settings_of(l1_per_example=0.01)),
            Model(settings_of(l1_per_example=0.01, idle_after=20)),
        )
        for model in (kept, swept):
            feed(model, stream)
            assert model.state()["table.addresses"].tolist() == [1, 2, 3, 4], "not idle for long enough"
            feed(model, [Example({2: 1.0}, 1, 0.0)] * 5)
    assert kept.live == 4
    assert swept.state()["table.addresses"].tolist() == [2, 3, 4], "1 was idle, 3 has a weight"


def test_oldest_touch_goes_first_and_ties_go_by_address():
    settings = settings_of(l1_per_example=1.0, max_live=8)  # all weights stay zero
    model = Model(settings)
    rows = [[50, 20, 90, 10], [60, 30, 40, 80], [10]]
    feed(model, [Example(dict.fromkeys(row, 1.0)) for row in rows])
    feed(model, [Example({70: 1.0})])
    assert model.state()["table.addresses"].tolist() == [10, 30, 40, 50, 60, 70, 80, 90], "20 was the oldest"
    feed(model, [Example({70: 1.0, 5: 1.0})])
    assert model.state()["table.addresses"].tolist() == [5, 10, 30, 40, 60, 70, 80, 90], "then 50"
    assert model.refused_coordinates == 0


def test_when_nothing_may_be_removed_new_coordinates_are_refused_and_counted():
    settings = settings_of(l1_per_example=0.0, max_live=4)  # no weight is zero
    model = Model(settings)
    feed(model, [Example({a: 1.0}) for a in (1, 2, 3)])
    feed(model, [Example({1: 1.0, 7: 1.0, 8: 1.0, 9: 1.0}), Example({9: 1.0}), Example({9: 1.0}, None)])
    assert model.state()["table.addresses"].tolist() == [1, 2, 3, 7]
    assert model.refused_coordinates == 3
    assert model.learned == 5


def test_room_is_not_sought_again_at_once_nor_sooner_after_a_restart():
    settings = settings_of(l1_per_example=0.0, max_live=192)  # sought again 192 / 64 = 3 examples later
    model = Model(settings)
    feed(model, [Example(dict.fromkeys(range(190), 1.0))])
    feed(model, [Example(dict.fromkeys(range(190, 195), 1.0), 1, 0.0)])
    assert (model.live, model.refused_coordinates) == (192, 3), "nothing to remove, two places left"
    late = [Example({200 + i: 1.0}, 1, 0.0) for i in range(3)]
    feed(model, late[:1])
    assert model.refused_coordinates == 4, "190 and 191 have no weight, but room was sought just now"
    other = restored(model, settings)
    for one in (model, other):
        feed(one, late[1:])
        assert one.refused_coordinates == 5
        assert one.state()["table.addresses"].tolist() == [*range(190), 202]
    assert bytes_of(model) == bytes_of(other)


def test_names_of_zero_weights_are_dropped_and_come_back_when_needed():
    with names_swept_every(40):
        model = Model(settings_of(l1_per_example=0.025))
        feed(model, [Example({1: 1.0}), Example({1: 1.0})])
        assert names_in(model.state()) == {1: name_of(1)}
        feed(model, [Example({2: 1.0})] * 37)
        assert 1 not in model.weights().addresses.tolist(), "it lapsed untouched"
        assert 1 in names_in(model.state()), "and the sweep is one example away"
        feed(model, [Example({2: 1.0})])
        assert names_in(model.state()).keys() == set(model.weights().addresses.tolist())
        assert 1 not in names_in(model.state())
        assert model.memory()["name_bytes"] == sum(map(len, names_in(model.state()).values()))
        feed(model, [Example({1: 30.0}, 0, variant=1), Example({1: 30.0}, 0, variant=2)])
        assert names_in(model.state())[1] == name_of(1, 1)


def test_a_weight_too_small_for_a_snapshot_is_left_out_of_it():
    model = Model(settings_of(l1_per_example=0.0))
    feed(model, [Example({1: 1e-44, 2: 1.0}, 1, 1e-6)])
    assert model.nnz() == 2
    assert model.weights().addresses.tolist() == [2]
    assert (model.weights().values != 0).all()


def test_memory_is_told_by_part():
    with_filter = Model(settings_of(admit_after=2, admission_bytes=1 << 12)).memory()
    assert with_filter["admission_bytes"] == 1 << 12 and with_filter["name_bytes"] == 0
    assert with_filter["table_bytes"] > 0


def test_weights_carry_the_fingerprint_of_their_space():
    one, other = settings_of(), settings_of(space=41)
    assert Model(one).weights().fingerprint == one.fingerprint() != other.fingerprint()


def test_an_empty_batch_does_nothing():
    model = Model(settings_of())
    assert model.predict_then_update(batch_of([])).tolist() == []
    assert model.learned == model.live == model.nnz() == 0
    assert len(model.weights()) == 0


@both
def test_updates_refused_are_counted_and_saved(method):
    settings = settings_of(method, l1_per_example=0.0)
    model = Model(settings)
    feed(model, [Example({1: 3e38, 2: 1.0}, 1, 1e6), Example({1: -3e38, 2: 1.0}, 1, 1e6)])
    assert model.refused_updates == (1 if method == "truncated-gradient" else 0)
    assert restored(model, settings).refused_updates == model.refused_updates
    assert np.isfinite(model.weights().values).all()
