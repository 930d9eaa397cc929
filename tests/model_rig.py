"""A model under small settings, streams that make it grow, forget and name, and its state as bytes."""

import random
from contextlib import contextmanager

import pytest

from stream.runs import table_model
from stream.runs.model import Model
from stream.settings.models import Learner, Settings, Space, State
from tests.batches import Example, batch_of
from tests.twins import learners_twin as twins

TOKENS = 60
METHODS = ["ftrl", "truncated-gradient"]
BOUNDS = [
    {},
    {"admit_after": 3, "admission_halved_every": 17},
    {"idle_after": 23},
    {"max_live": 16},
    {"idle_after": 9, "max_live": 13, "admit_after": 2, "admission_halved_every": 50},
]


def settings_of(method="ftrl", *, space=40, l1_per_example=0.02, averaging=None, **state):
    """Small numbers, which the limits of real settings would not let pass."""
    learner = Learner(method=method, learning_rate=0.5, l1_per_example=l1_per_example, averaging=averaging)
    bounds = State().model_copy(update={"admission_bytes": 1 << 16} | state)
    return Settings(learner=learner, space=Space(address_bits=space)).model_copy(update={"state": bounds})


@contextmanager
def names_swept_every(examples):
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(table_model, "NAMES_SWEPT_EVERY", examples)
        yield


def random_stream(seed, count, unlabelled=0.15):
    """Examples of a planted model; tokens come and go, so that some fall idle and their weights lapse."""
    chance = random.Random(seed)
    truth = [chance.choice([0, 0, 0, 2, -2]) for _ in range(TOKENS)]
    stream = []
    for i in range(count):
        here = (i // 40) % 4 * 10
        held = chance.sample(range(here, here + 30), chance.randint(0, 5))
        margin = sum(truth[a] for a in held)
        label = None if chance.random() < unlabelled else int(chance.random() < twins.sigmoid(margin))
        row = {a * 0x9E3779B97F % (1 << 40): chance.choice([1.0, 1.0, 1.0, 0.5]) for a in held}
        stream.append(Example(row, label, chance.choice([1.0, 1.0, 2.0, 0.0]), chance.choice([0, 0, 1])))
    return stream


def feed(model, stream, cuts=()):
    """Margins of the stream, in batches that end at `cuts`."""
    ends = sorted({*(cut for cut in cuts if cut < len(stream)), len(stream)})
    margins = []
    for first, last in zip([0, *ends], ends, strict=False):
        margins += model.predict_then_update(batch_of(stream[first:last])).tolist()
    return margins


def bytes_of(model):
    return {name: (array.dtype.str, array.shape, array.tobytes()) for name, array in model.state().items()}


def restored(model, settings):
    """A new model that goes on from copies of the arrays of another."""
    other = Model(settings)
    other.restore({name: array.copy() for name, array in model.state().items()})
    return other
