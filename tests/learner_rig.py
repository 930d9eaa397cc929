"""A learner over rows in a plain array, address a in slot a, so no table takes part; and its twin."""

import math
import random

import numpy as np
import pytest

from stream.coordinate import TOUCH
from stream.learners import Learner
from stream.settings.models import Learner as Settings
from tests.batches import Example, batch_of
from tests.twins import learners_twin as twins

SLOTS = 40


def settings_of(method, **changed):
    """Settings with every part of the method at work."""
    own = {"ftrl": {"l1": 0.05, "l2": 0.1, "damping": 0.7}, "truncated-gradient": {}}[method]
    return Settings(method=method, **({"learning_rate": 0.3, "l1_per_example": 0.004} | own | changed))


def twin_of(settings):
    if settings.method == "ftrl":
        return twins.Ftrl(
            settings.learning_rate,
            settings.damping,
            settings.l2,
            l1=settings.l1,
            l1_per_example=settings.l1_per_example,
            horizon=settings.horizon or math.inf,
        )
    return twins.TruncatedGradient(settings.learning_rate, l1_per_example=settings.l1_per_example)


class Bench:
    """A learner over an array in which slot a is the row of address a."""

    def __init__(self, settings):
        self.learner = Learner(settings)
        self.cells = np.zeros(4 * SLOTS, np.uint64)
        self.cells[::4] = 1

    def learn(self, examples, cuts=(), without=()):
        """Margins of the examples; one batch, learned in pieces that end at `cuts`."""
        batch = batch_of(examples)
        slots = batch.addresses.astype(np.int64)
        slots[np.isin(slots, list(without))] = -1
        self.named = []
        margins = np.empty(0)
        ends = sorted({*cuts, len(examples)})
        for first, last in zip([0, *ends], ends, strict=False):
            margins, named = self.learner.predict_then_update(self.cells, batch, slots, first, last)
            self.named += named.tolist()
        return margins[: len(examples)].copy()

    def weights(self):
        return self.learner.weights(self.cells, 0, SLOTS)

    def column(self, cell):
        """FIRST or SECOND of every row."""
        return self.cells.view(np.float64)[int(cell) :: 4]

    def touches(self):
        return self.cells[int(TOUCH) :: 4]

    def bits(self):
        state = self.learner.state()
        return self.cells.tobytes(), state["sums"].tobytes(), state["counts"].tobytes()


def random_stream(seed, count, tokens=12, longest=6, unlabelled=0.1, binary=False, seldom_yes=False):
    """Examples of a planted model: values of several sizes, some without a label, some of odd weight."""
    chance = random.Random(seed)
    truth = [chance.choice([0, 0, 1.5, -1.5]) for _ in range(tokens)]
    examples = []
    for _ in range(count):
        held = chance.sample(range(tokens), chance.randint(0, min(longest, tokens)))
        sizes = [1.0] if binary else [1.0, 1.0, 1.0, -1.0, 0.0078125, 0.5, 3.0, 20.0]
        row = {a: chance.choice(sizes) for a in held}
        margin = sum(truth[a] * x for a, x in row.items()) - (5 if seldom_yes else 0)
        label = None if chance.random() < unlabelled else int(chance.random() < twins.sigmoid(margin))
        weight = 1.0 if binary else chance.choice([1.0, 1.0, 1.0, 0.5, 3.0, 0.0])
        examples.append(Example(row, label, weight))
    return examples


def assert_same_weights(bench, twin):
    expected = [twin.weight(a) for a in range(SLOTS)]
    assert bench.weights() == pytest.approx(expected, rel=1e-9, abs=1e-12)
    assert [w == 0 for w in bench.weights()] == [w == 0 for w in expected]
    assert bench.learner.intercept == pytest.approx(twin.intercept(), rel=1e-9, abs=1e-12)
    assert bench.learner.learned == twin.learned
    assert bench.learner.strength == pytest.approx(twin.accumulated, rel=1e-12)
