"""Many settings side by side are, bit for bit, what each gives in a run of its own."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import settings as options
from hypothesis import strategies as st

from stream.learners.lanes import Lanes
from stream.runs.lane_model import LaneModel
from stream.runs.model import Model
from tests.batches import Example, batch_of
from tests.model_rig import METHODS, names_swept_every, random_stream, settings_of

both = pytest.mark.parametrize("method", METHODS)
STRENGTHS = [0.2, 0.05, 0.02, 0.01, 3e-3, 1e-3, 1e-4, 0.0, 0.03, 0.5, 0.011]


def lanes_of(settings, strengths=STRENGTHS, rates=(0.5,), **changes):
    """Settings of the learner, one for each lane."""
    learner = settings.learner
    return [
        learner.model_copy(update={"learning_rate": rate, "l1_per_example": strength, **changes})
        for rate in rates
        for strength in strengths
    ]


def feed(model, stream, cuts):
    ends = sorted({*(cut for cut in cuts if cut < len(stream)), len(stream)})
    margins = [
        model.predict_then_update(batch_of(stream[first:last])).copy()
        for first, last in zip([0, *ends], ends, strict=False)
    ]
    return np.concatenate(margins)


def assert_lane_is(found, lane, alone):
    """The weights of one lane are those of a model of its own, with names and message counts."""
    expected = alone.weights()
    some = np.flatnonzero(found.values[:, lane])
    assert found.addresses[some].tobytes() == expected.addresses.tobytes()
    assert found.values[some, lane].tobytes() == expected.values.tobytes()
    assert found.messages[some].tobytes() == expected.messages.tobytes()
    assert np.float64(found.intercepts[lane]).tobytes() == np.float64(expected.intercept).tobytes()
    spelled = [found.names[i].rpartition(b" ")[0] for i in some]  # two spellings have each address
    assert spelled == [name.rpartition(b" ")[0] for name in expected.names]


@both
@given(
    seed=st.integers(0, 999),
    cuts=st.sets(st.integers(1, 299), max_size=5),
    lanes=st.integers(1, len(STRENGTHS)),
    admit_after=st.sampled_from([1, 3]),
    changes=st.sampled_from([{}, {"horizon": 40}, {"l1": 0.7, "l2": 0.3}]),
)
@options(max_examples=15)
def test_each_lane_has_the_bits_of_a_run_of_its_own(method, seed, cuts, lanes, admit_after, changes):
    if method != "ftrl":
        changes = {}
    settings = settings_of(method, admit_after=admit_after, admission_halved_every=17)
    chosen = lanes_of(settings, STRENGTHS[:lanes], (0.5, 0.05), **changes)
    stream = random_stream(seed, 300)
    with names_swept_every(64):
        together = LaneModel(settings, chosen)
        margins = feed(together, stream, cuts)
        found = together.weights()
        nonzeros = together.nnz(), together.block_nnz[-1]
        for lane, learner in enumerate(chosen):
            alone = Model(settings.model_copy(update={"learner": learner}))
            assert feed(alone, stream, ()).tobytes() == np.ascontiguousarray(margins[:, lane]).tobytes()
            assert_lane_is(found, lane, alone)
            assert nonzeros[1][lane] == alone.nnz()
        assert nonzeros[0] == sum(nonzeros[1])


@both
def test_what_one_lane_refuses_the_others_learn(method):
    """A weight of 1e120 on a value of 3e38 is too much for some learning rates, not for all."""
    settings = settings_of(method, l1_per_example=0.0)
    chosen = lanes_of(settings, [0.0, 1e-3], (0.5, 1e-6, 1e-9) if method == "ftrl" else (0.5, 1e-9))
    stream = [
        Example({1: 1.0, 2: 3e38}, 1, 1e120),
        Example({1: 2.0, 3: 1e30}, 0, 1e-9),
        Example({2: 3e38, 3: 1e38}, 1, 1.0),
        Example({1: 1.0, 3: 1.0}, 0, 1.0),
    ]
    together = LaneModel(settings, chosen)
    margins = feed(together, stream, ())
    refused = together._lanes.refused
    assert refused.any()
    for lane, learner in enumerate(chosen):
        alone = Model(settings.model_copy(update={"learner": learner}))
        assert feed(alone, stream, ()).tobytes() == np.ascontiguousarray(margins[:, lane]).tobytes()
        assert refused[lane] == alone.refused_updates
        found, expected = together.weights(), alone.weights()
        some = np.flatnonzero(found.values[:, lane])
        assert found.values[some, lane].tobytes() == expected.values.tobytes()


@both
@pytest.mark.parametrize("bounds", [{"idle_after": 23}, {"max_live": 16}, {"idle_after": 9, "max_live": 13}])
def test_under_bounds_the_memory_of_lanes_is_given_back(method, bounds):
    settings = settings_of(method, **bounds)
    together = LaneModel(settings, lanes_of(settings, [0.3, 0.1]))
    with names_swept_every(64):
        margins = feed(together, random_stream(5, 900), range(7, 900, 7))
    assert np.isfinite(margins).all()
    rows = int(together._lanes._used[0]) - 1
    assert rows <= together.live + 30, "rows given up by the table are used again"
    one = LaneModel(settings, lanes_of(settings, [0.1]))
    alone = Model(settings.model_copy(update={"learner": lanes_of(settings, [0.1])[0]}))
    with names_swept_every(64):
        stream = random_stream(5, 900)
        assert feed(one, stream, range(7, 900, 7))[:, 0].tobytes() == feed(alone, stream, ()).tobytes()
    assert_lane_is(one.weights(), 0, alone)


def test_frozen_lanes_score_and_learn_nothing():
    settings = settings_of()
    model = LaneModel(settings, lanes_of(settings, [0.01]))
    stream = random_stream(3, 200)
    feed(model, stream[:100], ())
    before = model.weights()
    model.frozen = True
    margins = feed(model, stream[100:], ())
    after = model.weights()
    assert before.values.tobytes() == after.values.tobytes() and len(margins) == 100
    assert np.ptp(margins) > 0


def test_kept_is_the_share_of_blocks_at_whose_end_a_weight_was_not_zero():
    settings = settings_of()
    model = LaneModel(settings, lanes_of(settings, [0.02, 0.001]))
    stream, expected = random_stream(8, 300), {}
    for start in range(0, 300, 30):
        feed(model, stream[start : start + 30], ())
        model.nnz()
        found = model.weights()
        for address, values in zip(found.addresses.tolist(), found.values, strict=True):
            expected[address] = expected.get(address, 0) + (values != 0)
    found = model.weights()
    assert 0 < np.median(found.kept) < found.kept.max() <= 1
    for address, kept in zip(found.addresses.tolist(), found.kept, strict=True):
        assert np.allclose(kept, expected[address] / 10)


def test_lanes_that_are_no_multiple_of_eight_are_filled_up_unseen():
    settings = settings_of()
    lanes = Lanes(lanes_of(settings, [0.1] * 9))
    assert lanes.count == 9 and len(lanes.intercepts) == 9 and len(lanes.refused) == 9
