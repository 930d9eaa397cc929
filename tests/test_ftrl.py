"""What is peculiar to FTRL-Proximal: its identity with gradient descent, and which weights are zero when."""

import math

import numpy as np
import pytest

from stream.coordinate import FIRST, SECOND
from tests.batches import Example
from tests.learner_rig import SLOTS, Bench, random_stream, settings_of, twin_of
from tests.twins import learners_twin as twins


def ftrl(**changed):
    return settings_of("ftrl", **({"l1": 0.0, "l2": 0.0, "l1_per_example": 0.0, "damping": 1.0} | changed))


@pytest.mark.parametrize("seed", range(3))
def test_without_penalties_ftrl_is_descent_with_a_rate_for_each_coordinate(seed):
    """McMahan et al. 2013: with l1 = l2 = 0 the rate of a coordinate is alpha / (beta + sqrt n)."""
    stream = random_stream(seed, 800, tokens=20)
    bench = Bench(ftrl(learning_rate=0.2, damping=0.5))
    descent = twins.Descent(lambda n: 0.2 / (0.5 + math.sqrt(n)))
    expected = [descent.predict_then_update(*example[:3]) for example in stream]
    assert bench.learn(stream).tolist() == pytest.approx(expected, rel=1e-9, abs=1e-10)
    assert bench.weights() == pytest.approx([descent.weight(a) for a in range(SLOTS)], rel=1e-9, abs=1e-10)


def test_n_is_the_sum_of_squared_gradients_and_a_weight_is_zero_within_the_strength_only():
    bench = Bench(ftrl(l1=0.2, l1_per_example=0.01))
    stream = random_stream(11, 1000, tokens=SLOTS)
    margins = bench.learn(stream)
    squares = np.zeros(SLOTS)
    for example, margin in zip(stream, margins, strict=True):
        if example.label is not None:
            for a, x in example.row.items():
                squares[a] += ((twins.sigmoid(margin) - example.label) * example.weight * x) ** 2
    assert bench.column(SECOND) == pytest.approx(squares, rel=1e-9)
    within = np.abs(bench.column(FIRST)) <= 0.2 + bench.learner.strength
    assert (bench.weights() == 0).tolist() == within.tolist()
    assert 0 < within.sum() < SLOTS
    opposite = np.sign(bench.weights()) == -np.sign(bench.column(FIRST))
    assert opposite[~within].all()


def test_at_the_very_edge_of_the_strength_the_weight_is_zero():
    bench = Bench(ftrl(l1=0.5))
    bench.column(FIRST)[:4] = [0.5, -0.5, math.nextafter(0.5, 1), math.nextafter(-0.5, -1)]
    assert (bench.weights()[:4] != 0).tolist() == [False, False, True, True]


@pytest.mark.parametrize("l2", [0.0, 50.0])
def test_without_l1_no_updated_weight_is_exactly_zero(l2):
    bench, free = Bench(ftrl(l2=l2)), Bench(ftrl())
    stream = random_stream(12, 3000, tokens=SLOTS)
    bench.learn(stream)
    free.learn(stream)
    assert np.count_nonzero(bench.weights()) == SLOTS
    norm, free_norm = np.linalg.norm(bench.weights()), np.linalg.norm(free.weights())
    assert norm < 0.9 * free_norm if l2 else norm == free_norm


def test_strength_past_any_useful_leaves_every_weight_zero_and_a_free_intercept():
    """No gradient is larger than |x|: a strength of max |x| an example outgrows every sum of gradients."""
    stream = random_stream(13, 1000, tokens=SLOTS, unlabelled=0, binary=True)
    bench = Bench(ftrl(l1_per_example=1.0))
    margins = bench.learn(stream)
    assert not bench.weights().any() and not bench.named
    assert bench.learner.intercept != 0.0
    assert len(set(margins.tolist())) > 100, "only the intercept, which is not held"
    alone = Bench(ftrl(l1_per_example=1.0))
    assert alone.learn([example._replace(row={}) for example in stream]).tobytes() == margins.tobytes()
    rate = np.mean([example.label for example in stream])
    assert twins.sigmoid(bench.learner.intercept) == pytest.approx(rate, abs=0.1)


def test_strength_grows_by_each_example_and_constant_l1_does_not():
    stream = random_stream(14, 400)
    growing, constant = Bench(ftrl(l1_per_example=0.01)), Bench(ftrl(l1=2.0))
    growing.learn(stream)
    constant.learn(stream)
    pressed = [0.01 * example.weight for example in stream if example.label is not None]
    assert growing.learner.strength == pytest.approx(sum(pressed), rel=1e-12)
    assert constant.learner.strength == 0.0
    early = [Example({0: 1.0}, 1)] * 3
    growing, constant = Bench(ftrl(l1_per_example=0.01)), Bench(ftrl(l1=2.0))
    growing.learn(early)
    constant.learn(early)
    assert growing.weights()[0] > 0 == constant.weights()[0]


def test_a_weight_that_is_not_touched_lapses_as_the_strength_grows():
    bench = Bench(ftrl(l1_per_example=0.01))
    bench.learn([Example({0: 1.0}, 1)] * 4)
    row, seen = bench.cells[:4].copy(), [bench.weights()[0]]
    for _ in range(400):
        bench.learn([Example({1: 1.0}, 1)])
        seen.append(bench.weights()[0])
    assert seen[0] > 0 and seen[-1] == 0.0
    assert seen == sorted(seen, reverse=True)
    assert bench.cells[:4].tobytes() == row.tobytes()


@pytest.mark.parametrize("horizon", [1, 50, 399, 10**6])
def test_strength_stops_growing_at_the_horizon(horizon):
    stream = random_stream(15, 500)
    settings = ftrl(l1_per_example=0.01, horizon=horizon)
    bench, twin = Bench(settings), twin_of(settings)
    expected = [twin.predict_then_update(*example[:3]) for example in stream]
    assert bench.learn(stream).tolist() == pytest.approx(expected, rel=1e-9, abs=1e-11)
    learned = [example.weight for example in stream if example.label is not None]
    assert bench.learner.strength == pytest.approx(0.01 * sum(learned[:horizon]), rel=1e-12)
