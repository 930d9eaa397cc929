"""The published regret bound of truncated gradient on Spambase, for a grid of rates and gravities."""

import numpy as np
import pytest
from threadpoolctl import threadpool_limits

from tests.evidence.regret import GRAVITIES, RATES, Feed
from tests.twins import learners_twin as twins

pytestmark = pytest.mark.slow


@pytest.fixture(scope="module", autouse=True)
def one_thread():
    """Two would wait for each other more than they work, at 57 columns."""
    with threadpool_limits(1):
        yield


@pytest.fixture(scope="module")
def feed():
    return Feed("shuffled")


@pytest.mark.parametrize("rate", RATES)
@pytest.mark.parametrize("place", range(len(GRAVITIES)))
def test_no_fixed_weights_lose_so_little_that_the_bound_is_broken(rate, place, feed):
    gravity = feed.gravities[place]
    found = feed.learn(rate, gravity)
    fixed = feed.fixed(rate, gravity, found.last)
    allowed = [feed.allowed(rate, gravity, weights) for weights in fixed]
    assert found.lost(gravity) <= min(allowed)
    assert allowed[-1] <= min(allowed) + 1e-3, "the last are meant to be the hardest"


def test_at_small_rates_the_bound_is_nearly_reached_so_that_it_can_fail(feed):
    rate, gravity = RATES[0], feed.gravities[1]
    lost, hardest = feed.learn(rate, gravity).lost(gravity), feed.tightest(rate, gravity)
    assert 0.99 * feed.allowed(rate, gravity, hardest) < lost


def test_the_plain_twin_loses_the_same(feed):
    rate, gravity = 1e-3, feed.gravities[3]
    twin, columns = twins.TruncatedGradient(rate, l1_per_example=gravity), range(feed.x.shape[1])
    margins, norms = [], []
    for row, label in zip(feed.exact.tolist(), feed.y.tolist(), strict=True):
        margins.append(twin.predict_then_update(dict(enumerate(row)), label))
        norms.append(sum(abs(twin.weight(column)) for column in columns))
    last = np.array([*(twin.weight(column) for column in columns), twin.intercept()])
    slow, fast = feed.passed(np.array(margins), np.array(norms), last), feed.learn(rate, gravity)
    assert fast.losses == pytest.approx(slow.losses, rel=1e-9)
    assert fast.norms == pytest.approx(slow.norms, rel=1e-9)
    assert fast.last == pytest.approx(last, rel=1e-9, abs=1e-12)
    assert slow.lost(gravity) <= min(
        feed.allowed(rate, gravity, one) for one in feed.fixed(rate, gravity, last)
    )
