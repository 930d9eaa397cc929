"""What is peculiar to truncated gradient: T1's properties, eager against lazy, the published bound."""

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from stream.learners.truncated_gradient import truncate
from tests.batches import Example
from tests.learner_rig import SLOTS, Bench, assert_same_weights, random_stream, settings_of, twin_of
from tests.twins import learners_twin as twins

amounts = st.floats(0, 1e6)


@given(st.floats(-1e6, 1e6), amounts, amounts)
def test_truncation_shrinks_never_flips_a_sign_and_adds_up(w, a, b):
    """T1 of Langford, Li, Zhang 2009 at theta infinite: the soft threshold."""
    once = truncate(w, a)
    assert abs(once) <= abs(w) and once * w >= 0
    assert once == 0.0 if abs(w) <= a else abs(w) - abs(once) == pytest.approx(a, abs=1e-9)
    assert truncate(once, b) == pytest.approx(truncate(w, a + b), abs=1e-9)
    assert truncate(w, 0.0) == w
    assert truncate(-w, a) == -once


@pytest.mark.parametrize("seed", range(3))
def test_without_gravity_truncated_gradient_is_plain_descent(seed):
    stream = random_stream(seed, 800, tokens=20)
    bench = Bench(settings_of("truncated-gradient", learning_rate=0.05, l1_per_example=0.0))
    descent = twins.Descent(lambda n: 0.05)
    expected = [descent.predict_then_update(*example[:3]) for example in stream]
    assert bench.learn(stream).tolist() == pytest.approx(expected, rel=1e-9, abs=1e-11)
    assert bench.weights() == pytest.approx([descent.weight(a) for a in range(SLOTS)], rel=1e-9, abs=1e-11)


def test_rows_left_alone_for_long_catch_up_with_eager_truncation():
    settings = settings_of("truncated-gradient", learning_rate=0.5, l1_per_example=0.001)
    bench, twin = Bench(settings), twin_of(settings)
    strong = [Example({0: 20.0, 1: 2.0, 2: -2.0}, 1), Example({3: 1.0}, 0)]
    quiet = [Example({4: 1.0}, k % 2) for k in range(900)]
    again = [Example({0: 1.0, 1: 1.0, 2: 1.0, 3: 1.0}, 0)]
    for stream in (strong, quiet, again, quiet, again):
        expected = [twin.predict_then_update(*example[:3]) for example in stream]
        assert bench.learn(stream).tolist() == pytest.approx(expected, rel=1e-9, abs=1e-11)
        assert_same_weights(bench, twin)


def penalised_loss(margins, labels, norms, gravity):
    """mean(L + g |w|_1), the logistic loss in nats."""
    loss = np.logaddexp(0.0, np.where(labels == 1, -margins, margins))
    return float(np.mean(loss + gravity * norms))


@pytest.mark.parametrize("seed", range(3))
@pytest.mark.parametrize(("eta", "gravity"), [(0.01, 0.01), (0.03, 0.001), (0.06, 0.003)])
def test_the_published_regret_bound_holds(seed, eta, gravity):
    """Langford et al. 2009, theta infinite, K = 1, |x| <= C (from memory, no text at hand): for any fixed w
    mean(L + g |w|_1) online <= eta C^2 / 2 + |w|^2 / (2 eta T) + mean(L + g |w|_1) of the fixed w.
    """
    tokens, longest = 12, 6
    stream = random_stream(seed, 1500, tokens, longest, unlabelled=0, binary=True)
    labels = np.array([example.label for example in stream])
    bench = Bench(settings_of("truncated-gradient", learning_rate=eta, l1_per_example=gravity))
    margins, norms = [], []
    for example in stream:
        norms.append(np.abs(bench.weights()).sum())
        margins.append(bench.learn([example])[0])
    online = penalised_loss(np.array(margins), labels, np.array(norms), gravity)

    x = np.zeros((len(stream), tokens + 1))
    x[:, tokens] = 1.0
    for i, example in enumerate(stream):
        x[i, list(example.row)] = list(example.row.values())
    fitted = np.zeros(tokens + 1)
    for _ in range(500):  # proximal gradient steps towards the batch optimum
        fitted -= 1.0 * x.T @ (1 / (1 + np.exp(-x @ fitted)) - labels) / len(stream)
        fitted[:tokens] = np.sign(fitted[:tokens]) * np.maximum(np.abs(fitted[:tokens]) - gravity, 0)
    final = np.append(bench.weights()[:tokens], bench.learner.intercept)
    squared = float((x**2).sum(axis=1).max())
    for fixed in (np.zeros(tokens + 1), fitted, final, 0.5 * fitted):
        best = penalised_loss(x @ fixed, labels, np.abs(fixed[:tokens]).sum(), gravity)
        assert online <= eta * squared / 2 + fixed @ fixed / (2 * eta * len(stream)) + best
    assert online < math.log(2), "something was learned"
