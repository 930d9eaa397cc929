"""Both learners through one list of contract tests, each against its twin written from the paper."""

import math
import random

import numpy as np
import pytest
from hypothesis import example as once
from hypothesis import given
from hypothesis import settings as options
from hypothesis import strategies as st

from stream.coordinate import FIRST, NAMED, SECOND, example_of, tally_of
from stream.learners.layout import LIMIT
from tests.batches import Example, batch_of
from tests.learner_rig import SLOTS, Bench, assert_same_weights, random_stream, settings_of, twin_of

METHODS = ["ftrl", "truncated-gradient"]
FLOAT32_MAX = float(np.finfo(np.float32).max)

values = st.sampled_from([1.0, 1.0, 1.0, -1.0, 0.5, 2.0, 0.001953125, -12.0])
example_strategy = st.builds(
    Example,
    st.dictionaries(st.integers(0, 9), values, max_size=5),
    st.sampled_from([0, 1, 1, None]),
    st.sampled_from([1.0, 1.0, 0.0, 0.5, 2.0]),
)
streams = st.lists(example_strategy, max_size=40)
both = pytest.mark.parametrize("method", METHODS)


@both
@given(stream=streams)
@options(max_examples=60)
def test_margins_and_weights_are_the_twins(method, stream):
    settings = settings_of(method)
    bench, twin = Bench(settings), twin_of(settings)
    expected = [twin.predict_then_update(*example[:3]) for example in stream]
    assert bench.learn(stream).tolist() == pytest.approx(expected, rel=1e-9, abs=1e-11)
    assert_same_weights(bench, twin)


@both
@pytest.mark.parametrize("seed", range(4))
@pytest.mark.parametrize(
    "changed", [{}, {"l1_per_example": 0.0}, {"learning_rate": 0.02, "l1_per_example": 1e-4}]
)
def test_a_long_stream_stays_with_the_twin(method, seed, changed):
    settings = settings_of(method, **changed)
    stream = random_stream(seed, 1500, tokens=30)
    bench, twin = Bench(settings), twin_of(settings)
    expected = [twin.predict_then_update(*example[:3]) for example in stream]
    assert bench.learn(stream).tolist() == pytest.approx(expected, rel=1e-9, abs=1e-11)
    assert_same_weights(bench, twin)
    assert 0 < np.count_nonzero(bench.weights()) <= 30


@both
def test_predictions_come_before_updates(method):
    stream = random_stream(5, 40, unlabelled=0)
    margins = Bench(settings_of(method)).learn(stream)
    other = [*stream[:-1], stream[-1]._replace(label=1 - stream[-1].label, weight=7.0)]
    assert margins[0] == 0.0
    assert Bench(settings_of(method)).learn(other).tobytes() == margins.tobytes()
    one_by_one = Bench(settings_of(method))
    for example, margin in zip(stream, margins, strict=True):
        weights, intercept = one_by_one.weights(), one_by_one.learner.intercept
        effects = [weights[a] * x for a, x in example.row.items()]
        assert margin == pytest.approx(intercept + sum(effects), abs=1e-12)
        assert one_by_one.learn([example])[0] == margin


@both
@given(stream=streams, cuts=st.sets(st.integers(1, 39), max_size=6))
@options(max_examples=40)
def test_batch_cuts_change_no_bit(method, stream, cuts):
    whole, cut, parts = (Bench(settings_of(method)) for _ in range(3))
    margins = whole.learn(stream)
    inside = sorted(c for c in cuts if c < len(stream))
    assert cut.learn(stream, inside).tobytes() == margins.tobytes()
    for first, last in zip([0, *inside], [*inside, len(stream)], strict=True):
        assert parts.learn(stream[first:last]).tobytes() == margins[first:last].tobytes()
    assert whole.bits() == cut.bits() == parts.bits()


@both
@given(stream=streams)
@options(max_examples=40)
def test_messages_without_a_label_change_nothing(method, stream):
    with_them, without = Bench(settings_of(method)), Bench(settings_of(method))
    with_them.learn(stream)
    without.learn([example for example in stream if example.label is not None])
    assert with_them.bits() == without.bits()


@both
def test_weight_zero_moves_no_weight_but_counts_as_learned(method):
    bench = Bench(settings_of(method))
    bench.learn(random_stream(6, 300, unlabelled=0))
    before, intercept, strength = bench.weights(), bench.learner.intercept, bench.learner.strength
    tallies = tally_of(bench.touches())
    held = dict.fromkeys(range(0, SLOTS, 2), 5.0)
    bench.learn([Example(held, 1, 0.0), Example(held, 0, 0.0)])
    assert np.count_nonzero(before) > 3
    assert bench.weights().tobytes() == before.tobytes()
    assert (bench.learner.intercept, bench.learner.strength) == (intercept, strength)
    assert bench.learner.learned == 302
    assert (tally_of(bench.touches()) - tallies).tolist() == [2.0, 0.0] * (SLOTS // 2)


@both
def test_coordinates_without_state_are_neither_read_nor_written(method):
    bench, other = Bench(settings_of(method)), Bench(settings_of(method))
    stream = random_stream(7, 200)
    margins = bench.learn(stream, without={0, 3})
    known = [e._replace(row={a: 0.0 if a in (0, 3) else x for a, x in e.row.items()}) for e in stream]
    assert other.learn(known).tobytes() == margins.tobytes()
    assert not bench.cells[1:4].any() and not bench.cells[13:16].any()
    for cells in (bench.cells, other.cells):
        cells[:4] = cells[12:16] = 0
    assert bench.bits() == other.bits()


huge = st.sampled_from([FLOAT32_MAX, -FLOAT32_MAX, 1e30, -1e20, 1e-30, 1e-45, 1.0, 0.0, -3e5])
huge_stream = st.lists(
    st.builds(
        Example,
        st.dictionaries(st.integers(0, 7), huge, max_size=8),
        st.sampled_from([0, 1]),
        st.sampled_from([1e6, 1e-170, 1e-300, 1.0, 0.0]),
    ),
    min_size=1,
    max_size=12,
)


@both
@given(
    stream=huge_stream,
    rate=st.sampled_from([1e6, 1.0, 1e-9]),
    pressure=st.sampled_from([0.0, 1e-4, 1e9]),
    damping=st.sampled_from([1e-9, 1.0]),
)
@options(max_examples=25)
@once([Example({0: 1.0}, 1, 1e-170), *[Example({0: 1.0}, k % 2) for k in range(4)]], 1e6, 0.0, 1e-9)
def test_weights_stay_finite_and_fit_a_snapshot_whatever_the_values(method, stream, rate, pressure, damping):
    free = {"damping": damping, "l1": 0.0, "l2": 0.0} if method == "ftrl" else {}
    bench = Bench(settings_of(method, learning_rate=rate, l1_per_example=pressure, **free))
    batch = batch_of(stream * (10_000 // len(stream)))  # over all examples: millions of updates
    slots = batch.addresses.astype(np.int64)
    for _ in range(3):
        margins, _ = bench.learner.predict_then_update(bench.cells, batch, slots, 0, len(batch))
        assert not np.isnan(margins[: len(batch)]).any()
        assert np.isfinite(bench.weights()).all()
        with np.errstate(over="raise"):
            bench.weights().astype(np.float32)
        assert math.isfinite(bench.learner.intercept) and math.isfinite(bench.learner.strength)
        assert np.isfinite(bench.column(FIRST)).all() and np.isfinite(bench.column(SECOND)).all()
    assert 0 < bench.learner.learned <= 3 * len(batch)


def test_an_update_that_would_overflow_is_refused_and_counted_ftrl():
    bench = Bench(settings_of("ftrl"))
    bench.learn([Example({0: 1.0, 1: 1.0}, 1)])
    bench.column(FIRST)[2] = 0.9 * LIMIT
    bench.column(SECOND)[2] = 0.99999 * LIMIT
    row = bench.cells[8:12].copy()
    bench.learn([Example({2: 1e-150, 1: 1.0}, 0)])
    assert bench.learner.refused == 1 and bench.learner.learned == 2
    assert bench.cells[8:12].tobytes() == row.tobytes()
    assert example_of(bench.touches())[:3].tolist() == [1, 2, 0]


def test_an_update_that_would_overflow_is_refused_and_counted_truncated_gradient():
    bench = Bench(settings_of("truncated-gradient", learning_rate=1.0, l1_per_example=0.0))
    bench.learn([Example({0: 1.0, 1: 1.0}, 1)])
    row = bench.cells[:4].copy()
    bench.learn([Example({0: 1e38, 1: 1.0}, 0)])
    assert bench.learner.refused == 1 and bench.learner.learned == 2
    assert bench.cells[:4].tobytes() == row.tobytes()
    assert example_of(bench.touches())[:2].tolist() == [1, 2]
    intercept = bench.learner.intercept
    for _ in range(2):
        bench.learn([Example({5: 1.0}, 0, 1e38)])
    assert bench.learner.intercept == intercept, "an intercept past 1e30 is refused too"
    assert bench.learner.refused == 5 and bench.weights()[5] == 0.0


@both
def test_a_margin_past_any_use_is_refused_whole(method):
    bench = Bench(settings_of(method))
    bench.learn([Example({0: 1.0, 1: 1.0}, 1)])
    bench.column(FIRST)[1] = -1e298
    bench.column(SECOND)[1] = 0.0
    before, sums = bench.cells.tobytes(), bench.learner.state()["sums"].tobytes()
    (margin,) = bench.learn([Example({0: 1.0, 1: 1e30}, 0)])
    assert abs(margin) > LIMIT
    assert bench.cells.tobytes() == before and bench.learner.state()["sums"].tobytes() == sums
    assert (bench.learner.learned, bench.learner.refused) == (1, 1)


@both
@given(stream=streams, at=st.integers(0, 40))
@options(max_examples=30)
def test_a_restored_learner_goes_on_to_the_same_bits(method, stream, at):
    whole, first = Bench(settings_of(method)), Bench(settings_of(method))
    margins = whole.learn(stream)
    first.learn(stream[:at])
    second = Bench(settings_of(method))
    second.learner.restore(first.learner.state())
    second.cells = first.cells.copy()
    state = first.learner.state()
    first.learn(stream[at:])
    assert all(not np.shares_memory(state[name], first.learner.state()[name]) for name in state)
    again = Bench(settings_of(method))
    again.learner.restore(state)
    again.cells = second.cells.copy()
    assert second.learn(stream[at:]).tobytes() == margins[at:].tobytes()
    assert again.learn(stream[at:]).tobytes() == margins[at:].tobytes()
    assert whole.bits() == first.bits() == second.bits() == again.bits()


@both
def test_examples_of_weights_that_add_up_to_the_same_press_the_same(method):
    one, two = Bench(settings_of(method)), Bench(settings_of(method))
    one.learn([Example({0: 1.0}, 1, 4.0)])
    two.learn([Example({0: 1.0}, 1, 1.0), Example({1: 1.0}, 0, 3.0)])
    assert one.learner.strength == two.learner.strength == 0.004 * 4


@both
@given(stream=streams)
@options(max_examples=30)
def test_doubled_weights_are_a_doubled_loss(method, stream):
    """Truncated gradient: a doubled rate. FTRL: z and lambda_1 double, n quadruples: halved beta, l1, l2."""
    doubled = [example._replace(weight=2 * example.weight) for example in stream]
    if method == "ftrl":
        same_as = settings_of(method, l1=0.025, l2=0.05, damping=0.35)
    else:
        same_as = settings_of(method, learning_rate=0.6)
    bench, other = Bench(settings_of(method)), Bench(same_as)
    assert bench.learn(doubled).tolist() == pytest.approx(other.learn(stream).tolist(), rel=1e-9, abs=1e-11)
    assert bench.weights() == pytest.approx(other.weights(), rel=1e-9, abs=1e-12)


@both
@given(stream=streams)
@options(max_examples=40)
def test_a_name_is_asked_for_exactly_when_a_touch_makes_a_nameless_weight_non_zero(method, stream):
    bench = Bench(settings_of(method))
    for i, example in enumerate(stream):
        named = (bench.touches() & NAMED) != 0
        bench.learn([example])
        weights, held = bench.weights(), list(example.row)
        asked = [
            e for e, a in enumerate(held) if weights[a] != 0 and not named[a] and example.label is not None
        ]
        assert bench.named == asked
        for e in asked:
            named[held[e]] = True
        assert ((bench.touches() & NAMED) != 0).tolist() == named.tolist()
        if i % 3 == 0:
            bench.touches()[:] &= ~NAMED  # as when names of zero weights are dropped


@both
def test_names_of_one_call_are_entries_of_the_whole_batch(method):
    bench = Bench(settings_of(method, l1_per_example=0.0, **({"l1": 0.0} if method == "ftrl" else {})))
    stream = [Example(dict.fromkeys(range(i, i + 3), 1.0), i % 2) for i in range(10)]
    bench.learn(stream, cuts=[4, 7])
    first_seen = [3 * i + 2 for i in range(1, 10)]
    assert bench.named == [0, 1, 2, *first_seen]


@both
@given(stream=streams)
@options(max_examples=30)
def test_every_touch_is_dated_and_counted(method, stream):
    bench = Bench(settings_of(method))
    bench.learn(stream)
    learned = [example for example in stream if example.label is not None]
    for a in range(10):
        held = [number for number, example in enumerate(learned, 1) if a in example.row]
        assert int(tally_of(bench.touches())[a]) == len(held)
        assert int(example_of(bench.touches())[a]) == max(held, default=0)


@both
def test_slots_that_are_not_in_use_have_no_weight(method):
    bench = Bench(settings_of(method))
    bench.learn(random_stream(8, 200))
    weights = bench.weights()
    gone = np.flatnonzero(weights)[::2]
    bench.cells[4 * gone] = 0
    assert len(gone) and not bench.weights()[gone].any()
    weights[gone] = 0.0
    assert bench.weights().tolist() == weights.tolist()
    assert bench.learner.weights(bench.cells, 3, 9).tolist() == weights[3:9].tolist()


@both
@pytest.mark.parametrize("pressure", [1e-4, 1e-6])
def test_after_ten_billion_examples_weights_still_follow_the_twin(method, pressure):
    """Base rate 0.1 %, counters and sums as years leave them: large sums must not swallow small gradients."""
    many, tokens = 10_000_000_000, 20
    settings = settings_of(method, l1_per_example=pressure)
    bench, twin = Bench(settings), twin_of(settings)
    chance = random.Random(9)
    twin.learned, twin.accumulated = many, pressure * many
    for a in range(tokens):
        if method == "ftrl":
            twin.z[a] = chance.choice([-1, 1]) * (twin.accumulated + chance.uniform(-3, 3))
            twin.n[a] = chance.uniform(1e2, 1e4)
        else:
            twin.w[a] = chance.uniform(-0.2, 0.2)
    if method == "ftrl":
        twin.constant_z, twin.constant_n = 4e4, many * 1e-3
        first, second = [twin.z[a] for a in range(tokens)], [twin.n[a] for a in range(tokens)]
        constant = (twin.constant_z, twin.constant_n)
    else:
        twin.constant = -6.0
        first, second = [twin.w[a] for a in range(tokens)], [twin.accumulated] * tokens
        constant = (twin.constant, 0.0)
    bench.column(FIRST)[:tokens], bench.column(SECOND)[:tokens] = first, second
    bench.learner.restore({"sums": np.array([twin.accumulated, *constant]), "counts": np.array([many, 0])})

    stream = random_stream(10, 20_000, tokens, unlabelled=0, binary=True, seldom_yes=True)
    start = bench.weights()
    expected = [twin.predict_then_update(*example[:3]) for example in stream]
    assert bench.learn(stream).tolist() == pytest.approx(expected, rel=1e-5)
    after = [twin.weight(a) for a in range(tokens)]
    assert bench.weights()[:tokens] == pytest.approx(after, rel=1e-5, abs=1e-7)
    assert np.abs(start - bench.weights()).max() > 0.01, "the stream moved the weights"
    assert bench.learner.learned == many + 20_000
    assert example_of(bench.touches())[:tokens].min() > many
