"""However a grid of settings is split up, each of them ends as a replay of its own does."""

from dataclasses import fields

import numpy as np
import pytest

from simulator import CourierFeed, write_log
from stream.errors import BadData, BadSettings, Unavailable
from stream.runs.replay import replay
from stream.runs.tuning import passes as passes_module
from stream.runs.tuning.cluster import workers_of_cluster
from stream.runs.tuning.first_pass import count, digest_of_log, find_strongest
from stream.runs.tuning.grid import BLOCKS, Grid, blocks_of, candidates
from stream.runs.tuning.keeping import KeptTrials
from stream.runs.tuning.merging import merge
from stream.runs.tuning.passes import groups_of, run_passes, workers_on_this_machine
from stream.runs.tuning.trial import OutOfMemory, run_trial
from stream.settings.models import Settings
from stream.snapshots import Snapshots

MESSAGES = 2_500


@pytest.fixture(scope="module")
def folder(tmp_path_factory):
    folder = tmp_path_factory.mktemp("tuning")
    write_log(CourierFeed(seed=11, messages=MESSAGES), folder / "log.jsonl")
    return folder


def settings_in(folder, **sections):
    data = {
        "feed": {"paths": ["log.jsonl"]},
        "message": {"id": "id", "time": "at", "label": "redelivered"},
        "fields": [
            {"path": "note", "kind": "words"},
            {"path": "route", "kind": "category"},
            {"path": "weight_kg", "kind": "quantity"},
        ],
        "metrics": {"window": 700, "slice_by": "route"},
        **sections,
    }
    return Settings.model_validate(data).placed_in(folder)


GRID = Grid(strengths=9, rates=(0.05, 0.3), span=200.0)


def found_by(folder, kept_in, pool=None, workers=1, memory=1 << 32, said=None, settings=None, grid=GRID):
    settings = settings or settings_in(folder)
    facts = find_strongest(settings, lambda *_: None)
    plan = blocks_of(facts.messages)
    kept = KeptTrials(kept_in, settings, digest_of_log(settings)[1], plan)
    lanes = candidates(grid, settings.learner, facts)
    said = [] if said is None else said
    return merge(run_passes(settings, lanes, plan, kept, memory, pool, workers, lambda *_: None, said.append))


def assert_equal(one, other):
    """Every figure of two trials, bit for bit."""
    for field in fields(one):
        mine, theirs = getattr(one, field.name), getattr(other, field.name)
        if field.name == "weights":
            for part in fields(mine):
                a, b = getattr(mine, part.name), getattr(theirs, part.name)
                assert a == b if isinstance(a, tuple) else a.tobytes() == b.tobytes(), part.name
        elif isinstance(mine, np.ndarray):
            assert (mine.dtype, mine.shape) == (theirs.dtype, theirs.shape), field.name
            assert mine.tobytes() == theirs.tobytes(), field.name
        else:
            assert mine == theirs, field.name


@pytest.fixture(scope="module")
def whole(folder, tmp_path_factory):
    """All lanes tried in one pass."""
    return found_by(folder, tmp_path_factory.mktemp("kept"))


@pytest.mark.parametrize("lane", [0, 4, 8, 12, 17])
def test_a_lane_is_a_replay_of_its_own(folder, tmp_path, whole, lane):
    settings = settings_in(folder)
    settings = settings.model_copy(update={"learner": whole.lanes[lane].over(settings.learner)})
    result = replay(settings, tmp_path / "state")
    assert whole.loss[lane] / whole.block_totals[:, 2].sum() == result.summary.log_loss
    assert whole.nnz[lane] == result.nnz
    weights = Snapshots(tmp_path / "state/snapshots", 9).load().weights
    some = np.flatnonzero(whole.weights.values[:, lane])
    assert whole.weights.addresses[some].tobytes() == weights.addresses.tobytes()
    assert whole.weights.values[some, lane].tobytes() == weights.values.tobytes()
    assert whole.weights.messages[some].tobytes() == weights.messages.tobytes()
    assert [whole.weights.names[i] for i in some] == list(weights.names)
    assert whole.weights.intercepts[lane] == weights.intercept


def test_the_strongest_strength_is_the_least_that_leaves_no_weight(folder, whole):
    """lambda_max of a batch fit: at it no weight; the online weights may differ, since they see less."""
    settings = settings_in(folder)
    facts = find_strongest(settings, lambda *_: None)
    assert whole.lanes[0].l1_per_example == facts.strongest
    assert whole.lanes[8].l1_per_example == pytest.approx(facts.strongest / 200, rel=1e-5)
    assert facts.messages == count(settings, lambda *_: None).messages == MESSAGES
    assert facts.first_time_ms < facts.last_time_ms
    assert whole.nnz[0] <= 5 < whole.nnz[8]


def test_blocks_and_slices_add_up_to_the_whole(whole):
    assert whole.block_totals.shape == (BLOCKS, 4) and whole.block_totals[:, 0].sum() == MESSAGES
    np.testing.assert_allclose(whole.block_loss.sum(axis=0), whole.loss, rtol=1e-12)
    np.testing.assert_allclose(whole.slice_loss.sum(axis=0), whole.loss, rtol=1e-12)
    np.testing.assert_allclose(whole.bins[0, :, :, 0].sum(axis=1), whole.block_totals[:, 2].sum())
    np.testing.assert_allclose(whole.bins[1, :, :, 0].sum(axis=1), whole.block_totals[56:, 2].sum())
    assert (whole.block_totals[:, 0] >= MESSAGES // BLOCKS).all()


def test_too_little_memory_splits_the_grid_and_changes_nothing(folder, tmp_path, whole):
    said = []
    found = found_by(folder, tmp_path, memory=850_000, said=said)
    assert any("gone through twice" in text for text in said)
    assert_equal(found, whole)
    with pytest.raises(BadSettings, match="--memory"):
        found_by(folder, tmp_path / "other", memory=100_000)


def test_several_processes_change_nothing(folder, tmp_path, whole):
    with workers_on_this_machine(2) as pool:
        assert_equal(found_by(folder, tmp_path, pool=pool, workers=2), whole)


def test_a_cluster_changes_nothing(folder, tmp_path, whole):
    distributed = pytest.importorskip("distributed")
    with (
        distributed.LocalCluster(n_workers=1, threads_per_worker=2, processes=False, dashboard_address=None)
        as cluster,
        workers_of_cluster(cluster.scheduler_address) as (pool, threads),
    ):  # fmt: skip
        assert threads == 2
        assert_equal(found_by(folder, tmp_path, pool=pool, workers=threads), whole)


def test_a_cluster_that_is_not_there_is_told():
    pytest.importorskip("distributed")
    with (
        pytest.raises(Unavailable, match="no scheduler answers"),
        workers_of_cluster("tcp://127.0.0.1:1"),
    ):
        pass


def test_an_interrupted_tune_goes_on_with_what_was_finished(folder, tmp_path, whole, monkeypatch):
    tried = []

    def one_pass_then_stop(settings, lanes, *more):
        if tried:
            raise KeyboardInterrupt
        tried.append(lanes)
        return run_trial(settings, lanes, *more)

    with monkeypatch.context() as patch:
        patch.setattr(passes_module, "run_trial", one_pass_then_stop)
        with pytest.raises(KeyboardInterrupt):
            found_by(folder, tmp_path, workers=3)
    finished = {lane for lanes in tried for lane in lanes}
    rest = []
    monkeypatch.setattr(
        passes_module,
        "run_trial",
        lambda s, lanes, *more: (rest.extend(lanes), run_trial(s, lanes, *more))[1],
    )
    said = []
    assert_equal(found_by(folder, tmp_path, said=said), whole)
    assert not finished & set(rest) and len(finished) + len(rest) == len(whole.lanes)
    assert any("tried before" in text for text in said)


def test_a_trial_that_was_kept_broken_is_made_again(folder, tmp_path, whole):
    found_by(folder, tmp_path)
    broken = sorted(path for path in tmp_path.iterdir())[0] / "arrays.safetensors"
    data = bytearray(broken.read_bytes())
    data[-1] ^= 1
    broken.write_bytes(data)
    assert_equal(found_by(folder, tmp_path), whole)
    assert (tmp_path / "broken").is_dir()


def test_other_settings_or_data_are_not_taken_for_those_tried(folder, tmp_path):
    settings = settings_in(folder)
    plan = blocks_of(MESSAGES)
    lanes = groups_of(candidates(Grid((0.1,)), settings.learner, count(settings, lambda *_: None)))[0]

    def name(digest="d", plan=plan, lanes=lanes, **sections):
        return KeptTrials(tmp_path, settings_in(folder, **sections), digest, plan).name(lanes)

    names = [
        name(),
        name(digest="e"),
        name(plan=blocks_of(MESSAGES, 0.5)),
        name(plan=blocks_of(MESSAGES + 80)),
        name(lanes=lanes * 2),
        name(space={"seed": 1}),
        name(learner={"damping": 2.0}),
        name(state={"admit_after": 2}),
        name(metrics={"window": 701}),
        name(message={"label": "redelivered"}),
    ]
    assert len(set(names)) == len(names)


def test_frozen_blocks_are_scored_by_the_weights_of_their_beginning(folder):
    settings = settings_in(folder)
    lanes = candidates(GRID, settings.learner, find_strongest(settings, lambda *_: None))[:3]
    learned = run_trial(settings, lanes, blocks_of(MESSAGES), 1 << 32)
    frozen = run_trial(settings, lanes, blocks_of(MESSAGES, 0.5), 1 << 32)
    assert learned.block_loss[:40].tobytes() == frozen.block_loss[:40].tobytes()
    assert (learned.block_loss[41:] != frozen.block_loss[41:]).any()
    assert (frozen.block_nnz[10:] == frozen.block_nnz[10]).all(), "no weight moves once frozen"
    assert (learned.block_nnz[10:] != learned.block_nnz[10]).any()


@pytest.mark.parametrize(
    ("grid", "expected"),
    [
        (Grid((1e-3, 1e-2, 1e-3)), [(0.1, 1e-2, 0.0), (0.1, 1e-3, 0.0)]),
        (Grid((5.0,), (0.2, 0.4), over="l1"), [(0.2, 1e-4, 5.0), (0.4, 1e-4, 5.0)]),
    ],
)
def test_given_strengths_are_tried_from_strong_to_weak(folder, grid, expected):
    settings = settings_in(folder, learner={"l1_per_example": 1e-4})
    facts = count(settings, lambda *_: None)
    found = [
        (lane.learning_rate, lane.l1_per_example, lane.l1)
        for lane in candidates(grid, settings.learner, facts)
    ]
    assert found == expected


def test_what_cannot_be_tuned_is_said(folder, tmp_path):
    settings = settings_in(folder, learner={"method": "truncated-gradient"})
    with pytest.raises(BadSettings, match="--over l1 is for ftrl"):
        candidates(Grid((1.0,), over="l1"), settings.learner, count(settings, lambda *_: None))
    with pytest.raises(BadData, match="too few"):
        blocks_of(399)
    (tmp_path / "log.jsonl").write_text('{"note":"a","redelivered":true}\n' * 500)
    same = settings_in(tmp_path, metrics={}, fields=[{"path": "note", "kind": "words"}])
    with pytest.raises(BadData, match="one label only"):
        candidates(Grid(), same.learner, find_strongest(same, lambda *_: None))
    with pytest.raises(BadSettings, match="standard input"):
        digest_of_log(settings_in(folder, feed={"paths": ["-"]}))
    lanes = candidates(Grid((0.1,)), settings_in(folder).learner, count(settings, lambda *_: None))
    with pytest.raises(OutOfMemory):
        run_trial(settings_in(folder), lanes, blocks_of(MESSAGES), 10_000)
    with pytest.raises(BadData, match="has more now"):
        run_trial(settings_in(folder), lanes, blocks_of(MESSAGES - 100), 1 << 32)
