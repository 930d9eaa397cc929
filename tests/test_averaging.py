"""Averages over the stream: better weights for readers, beside a learner that does not notice them."""

import dataclasses
import json
import os
import random
import signal
import time

import numpy as np
import pytest
from hypothesis import given
from hypothesis import settings as options
from hypothesis import strategies as st

from simulator import CourierFeed, write_log
from stream.arrays_file import ARRAYS
from stream.cli.main import main
from stream.optimality.solving import Columns, solve
from stream.runs.converging.following import after_epochs
from stream.runs.converging.job import Wanted, learner_settings
from stream.runs.learning import LearningRun, pinned
from stream.runs.model import Model
from stream.runs.replay import replay
from stream.runs.retracing import retrace
from stream.snapshots import Snapshots, read_snapshot
from stream.tables import saving
from stream.tables.table import Table
from tests import learner_rig
from tests.certify_rig import Problem
from tests.learner_rig import twin_of
from tests.model_rig import (
    BOUNDS,
    METHODS,
    bytes_of,
    feed,
    names_swept_every,
    random_stream,
    restored,
    settings_of,
)
from tests.replays import BOUNDED, LONG, config_for, courier_lines, last_checkpoint, settings_for, write
from tests.twins.averaging_twin import Averages
from tests.work_child import Workers, topic_from

both = pytest.mark.parametrize("method", METHODS)
bounds = pytest.mark.parametrize(
    "bounds", BOUNDS if LONG else BOUNDS[::4], ids=lambda bound: ",".join(bound) or "unbounded"
)
cut_sets = st.sets(st.integers(1, 239), max_size=12)


# ---- what an average is ------------------------------------------------------------------------------------


def averaging_model(method, every, **changed):
    settings = learner_rig.settings_of(method, averaging=every, **changed)
    return settings, Model(settings_of(method).model_copy(update={"learner": settings}))


@both
@pytest.mark.parametrize("every", [1, 13, 64, 10**6])
@pytest.mark.parametrize("seed", range(6 if LONG else 1))
def test_weights_are_those_of_the_plain_rules(method, every, seed):
    settings, model = averaging_model(method, every)
    plain = Averages(twin_of(settings), every, settings.l2)
    stream = learner_rig.random_stream(seed, 240)
    for i in range(0, 240, 40):
        expected = [plain.predict_then_update(*example[:3]) for example in stream[i : i + 40]]
        assert feed(model, stream[i : i + 40]) == pytest.approx(expected, rel=1e-8, abs=1e-10)
        weights = model.weights()
        non_zero = [a for a in range(learner_rig.SLOTS) if plain.weight(a) != 0]
        assert weights.addresses.tolist() == non_zero and model.nnz() == len(non_zero)
        assert weights.values == pytest.approx([plain.weight(a) for a in non_zero], rel=1e-5)
        assert weights.intercept == pytest.approx(plain.intercept(), rel=1e-8)
        if i == 120:
            model.next_pass()
            plain.fade(1 / 8)
    assert len(non_zero) > 2


@both
def test_the_learner_beside_them_does_not_notice(method):
    stream = random_stream(3, 500)
    plain, averaging = Model(settings_of(method)), Model(settings_of(method, averaging=50))
    assert feed(averaging, stream) == feed(plain, stream)
    state, beside = bytes_of(plain), bytes_of(averaging)
    names = {name for name in state if name.startswith("names.")}  # averages have names of their own
    assert {name: beside[name] for name in state.keys() - names} == {
        name: state[name] for name in state.keys() - names
    }
    assert beside.keys() - state.keys() == {"averages.first", "averages.second", "learner.averages"}


def test_without_the_setting_a_checkpoint_is_that_of_before():
    assert "averaging" not in pinned(settings_of())["learner"]
    assert pinned(settings_of(averaging=7))["learner"]["averaging"] == 7
    assert not any("averages" in name for name in Model(settings_of()).state())


@pytest.mark.parametrize("base_rate", [0.2, 0.004])
def test_they_are_nearer_to_the_batch_fit(base_rate, tmp_path):
    log = tmp_path / "log.jsonl"
    write_log(CourierFeed(seed=3, messages=10_000, base_rate=base_rate, first_words=400, growth=0), log)
    learner = {"learning_rate": 0.5, "l1_per_example": 1e-3 if base_rate > 0.1 else 1e-4}
    problem, excess = None, []
    for averaging in (None, 10**6):
        settings = settings_for([log], learner={**learner, "averaging": averaging})
        found = read_snapshot(replay(settings, tmp_path / str(averaging)).snapshot).weights
        problem = problem or Problem(settings, log)
        best = solved(problem, learner["l1_per_example"])
        here = np.zeros(len(problem.addresses))
        here[np.searchsorted(problem.addresses, found.addresses)] = found.values
        penalty = learner["l1_per_example"] * np.abs(here).sum()
        excess.append(problem.loss(here, found.intercept)[0] + penalty - best)
    assert 0 < excess[1] < 0.7 * excess[0]


def solved(problem, strength):
    X = problem.X.tocsc()
    log = Columns(
        X.indptr.astype(np.int64), X.indices, X.data.astype(np.float32), problem.y.astype(np.int8), problem.o
    )
    return solve(log, np.zeros(X.shape[1]), 0.0, strength, 1e-7).objective


# ---- exact, however it is cut, stopped or written ----------------------------------------------------------


@both
@bounds
@given(
    seed=st.integers(0, 999),
    cuts=cut_sets,
    stops=cut_sets,
    period=st.sampled_from([1, 7, 64]),
    every=st.sampled_from([1, 5, 70, 10**9]),
)
@options(max_examples=40 if LONG else 5)
def test_cuts_and_restarts_change_no_byte_of_the_state(method, bounds, seed, cuts, stops, period, every):
    settings, stream = settings_of(method, averaging=every, **bounds), random_stream(seed, 240)
    with names_swept_every(period):
        whole, cut, stopped = Model(settings), Model(settings), Model(settings)
        margins = feed(whole, stream)
        assert feed(cut, stream, cuts) == margins
        first = 0
        for last in [*sorted(stops), len(stream)]:
            feed(stopped, stream[first:last], [c - first for c in cuts if first < c < last])
            stopped, first = restored(stopped, settings), last
        for other in (cut, stopped):
            assert bytes_of(whole) == bytes_of(other)
            assert_same(whole.weights(), other.weights())
        assert all(whole.weights().names), "every weight has its name"


def assert_same(one, other):
    for field in dataclasses.fields(one):
        mine, others = getattr(one, field.name), getattr(other, field.name)
        assert mine.tobytes() == others.tobytes() if isinstance(mine, np.ndarray) else mine == others


real_gather = Table._gather


@both
@bounds
@given(seed=st.integers(0, 999), begin=st.integers(0, 160), step=st.integers(0, 30))
@options(max_examples=40 if LONG else 5)
def test_a_checkpoint_in_the_background_is_that_of_its_moment(method, bounds, seed, begin, step):
    settings, stream = settings_of(method, averaging=60, **bounds), random_stream(seed, 240)
    with names_swept_every(64), pytest.MonkeyPatch.context() as patch:
        patch.setattr(saving, "PIECE", 7)
        model, at = Model(settings), begin
        feed(model, stream[:begin])
        expected, weights = bytes_of(model), model.weights()

        def gather(table, addresses, limit):
            nonlocal at
            found = real_gather(table, addresses, limit)
            feed(model, stream[at : at + step])
            at += step
            return found

        patch.setattr(Table, "_gather", gather)
        view = model.begin_saving(weights=True)
        feed(model, stream[at : at + step])
        at += step
        pieces = list(view.rows.pieces)
        arrays = {name: np.concatenate([piece[name] for piece in pieces]) for name in view.rows.dtypes}
        arrays |= view.rest()
        assert {name: (a.dtype.str, a.shape, a.tobytes()) for name, a in arrays.items()} == expected
        assert_same(view.weights(), weights)


def test_growth_of_the_table_leaves_no_trace():
    settings = settings_of(averaging=100, l1_per_example=1e-4)
    stream = [
        learner_rig.Example({(i * 20 + k) * 0x9E3779B97F4A7 % (1 << 40): 1.0 for k in range(20)}, i % 2)
        for i in range(400)
    ]
    grown, small = Model(settings), Model(settings)
    feed(grown, stream)
    assert grown.live == 8_000
    for example in stream:
        feed(small, [example])
        if small.learned % 97 == 0:
            small = restored(small, settings)
    assert bytes_of(grown) == bytes_of(small)


def test_what_has_an_average_is_not_removed():
    """The learner's own weight of token 7 is back at zero, that of its average is not, and it falls idle."""
    settings = settings_of("ftrl", averaging=10**6, idle_after=4)
    others = [learner_rig.Example({9: 1.0}, i % 2) for i in range(8)]
    found = 0
    for seed in range(300):
        chance = random.Random(seed)
        stream = [learner_rig.Example({7: 1.0}, chance.randint(0, 1)) for _ in range(30)] + others
        plain = Averages(twin_of(settings.learner), 10**6)
        for example in stream:
            plain.predict_then_update(*example[:3])
        if plain.twin.weight(7) == 0 and plain.weight(7) != 0:
            model = Model(settings)
            feed(model, stream)
            assert 7 in model.weights().addresses
            found += 1
    assert found > 5


# ---- through the runs --------------------------------------------------------------------------------------

AVERAGES = {**BOUNDED, "learner": {**BOUNDED["learner"], "averaging": 1_500}}


@pytest.fixture(scope="module")
def log(tmp_path_factory):
    return write(
        tmp_path_factory.mktemp("log") / "log.jsonl",
        courier_lines(tmp_path_factory.mktemp("feed") / "log.jsonl")[:4_000],
    )


def test_a_replay_stopped_in_its_second_pass_resumes_to_the_same_bytes(log, tmp_path, monkeypatch):
    settings = settings_for([log], AVERAGES)
    replay(settings, tmp_path / "whole", epochs=2)
    for stop in (2_500, 7_000):
        folder = tmp_path / str(stop)
        with monkeypatch.context() as patch:
            stop_after(patch, stop)
            with pytest.raises(Stopped):
                replay(settings, folder, epochs=2)
        replay(settings, folder, resume=True, epochs=2)
        assert last_checkpoint(folder) == last_checkpoint(tmp_path / "whole")
        assert snapshot_of(folder) == snapshot_of(tmp_path / "whole")


def test_converge_averages_over_passes_as_replay_does(log, tmp_path):
    own = settings_for([log], learner={"averaging": 99})
    averaged = learner_settings(own, Wanted("ftrl", 0.2, averaged=True), 5e-4)
    last = learner_settings(own, Wanted("ftrl", 0.2), 5e-4)
    for settings in (averaged, last):
        found = after_epochs(settings, 4_000, 2, lambda share, text: None).weights
        folder = tmp_path / str(settings is last)
        assert_same(found, read_snapshot(replay(settings, folder, epochs=2).snapshot).weights)
    assert averaged.learner.averaging > 4_000 and last.learner.averaging is None


class Stopped(Exception):
    pass


def stop_after(patch, messages):
    step = LearningRun.step

    def until(run, source, limit):
        if run.messages >= messages:
            raise Stopped
        return step(run, source, limit)

    patch.setattr(LearningRun, "step", until)


def snapshot_of(folder):
    """The weights of the newest snapshot, as bytes."""
    return (Snapshots(folder / "snapshots", 9).list()[0].path / ARRAYS).read_bytes()


def test_a_killed_worker_gives_the_weights_that_its_journal_gives(log, tmp_path):
    settings = settings_for([], AVERAGES, worker={"checkpoint_every_s": 0.05, "snapshot_every_s": 0.05})
    topic, folder, workers = tmp_path / "topic.json", tmp_path / "state", Workers()
    lines = log.read_text(encoding="latin-1").splitlines()
    topic.write_text(json.dumps([lines[::2], lines[1::2]]))
    try:
        for kill in range(10 if LONG else 2):
            workers.start(settings, folder, topic=str(topic), seed=kill, until_end=True)
            time.sleep(0.05 + 0.1 * (kill % 4))
            os.kill(workers.pid, signal.SIGKILL)
            assert workers.wait() in (-signal.SIGKILL, 0)
        workers.start(settings, folder, topic=str(topic), seed=99, until_end=True)
        assert workers.wait() == 0
    finally:
        workers.close()
    again = tmp_path / "again"
    found = retrace(settings, again, folder, source=topic_from(topic, 9))
    assert found.differences == []
    assert last_checkpoint(again) == last_checkpoint(folder)
    assert snapshot_of(again) == snapshot_of(folder)


@pytest.mark.parametrize(
    ("before", "change", "said"),
    [
        (None, "learner.averaging=500", "learner.averaging: 500 here, null there"),
        (500, "learner.averaging=600", "learner.averaging: 600 here, 500 there"),
        (500, "learner.l1=3.0", "learner.l1: 3.0 here"),
    ],
)
def test_a_live_model_does_not_take_what_averages_cannot_live_through(
    before, change, said, log, tmp_path, capsys
):
    config = config_for(settings_for([log], learner={"averaging": before}), tmp_path)
    assert main(["replay", "--config", config]) == 0
    capsys.readouterr()
    arguments = ["replay", "--config", config, "--resume", "--accept-settings", "--set", change]
    assert main(arguments) == 78
    assert said in capsys.readouterr().err


def test_another_strength_and_rate_are_taken_and_no_weight_moves(log, tmp_path):
    settings = settings_for([log], learner={"averaging": 10_000})
    before = read_snapshot(replay(settings, tmp_path / "state").snapshot).weights
    changed = settings_for([log], learner={"averaging": 10_000, "learning_rate": 0.7, "l1_per_example": 1e-3})
    result = replay(changed, tmp_path / "state", resume=True, accept_settings=True)
    assert_same(read_snapshot(result.snapshot).weights, before)
