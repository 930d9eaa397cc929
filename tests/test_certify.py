"""Certificates: never below the truth by another solver, tight, exact at the optimum, refused with cause."""

import json
from dataclasses import replace

import numpy as np
import pytest

from simulator import CourierFeed, write_log
from stream.batch import Batch
from stream.cli.main import main
from stream.errors import BadData, BadSettings, UsageError
from stream.optimality.held_rows import EvenSample
from stream.runs.certifying import passes
from stream.runs.certifying.certify import certify
from stream.runs.replay import replay
from stream.snapshots import read_snapshot
from tests.certify_rig import Problem, settings_of, write
from tests.replays import config_for
from tests.replays import settings_for as courier_settings

PROBLEMS = 200
SHARES = (1.5, 0.5, 0.1, 0.01, 1e-3)
"""Of the strength from which on all weights are zero."""


def drawn(seed):
    """Messages of a small problem; every fifth separable, every fourth unbalanced, every third weighted."""
    draw = np.random.default_rng(seed)
    size = int(draw.integers(12, 60))
    tilt = draw.normal(size=3) * 2
    messages = []
    for i in range(size):
        load, depth, code = draw.normal(), draw.normal() * 3, int(draw.integers(0, 4))
        margin = tilt[0] * load + tilt[1] * depth + tilt[2] * (code == 1)
        if seed % 4 == 1:
            margin -= 3.0
        late = margin > 0 if seed % 5 == 0 else draw.random() < 1 / (1 + np.exp(-margin))
        message = {"late": bool(late), "load": round(load, 3), "depth": round(depth, 3), "void": 0}
        message["bank"] = ("full", "half", None)[i % 3]
        message["codes"] = [f"c{code}", f"twin{code}", f"own{i}" if i % 7 == 0 else "all"]
        if seed % 3 == 0:
            message["counts"] = float(draw.choice([0.0, 0.25, 1.0, 7.5]))
        messages.append(message)
    for late in (True, False):
        messages.append({"late": late, "load": 0.5, "codes": ["all"]})
    unlabelled = {"late": None, "load": 1.0, "codes": ["nowhere else"]}
    return [*messages, unlabelled]


@pytest.mark.parametrize("part", range(4))
def test_the_bound_is_never_above_what_another_solver_reaches(part, tmp_path):
    for seed in range(part, PROBLEMS, 4):
        path = write(tmp_path / f"{seed}.jsonl", drawn(seed))
        settings = settings_of(path)
        problem = Problem(settings, path)
        draw = np.random.default_rng(seed)
        strength = SHARES[seed % 5] * problem.strongest() * draw.uniform(0.8, 1.2)
        best = problem.optimum(strength)
        reached = problem.objective(best, strength)
        scale = (0.0, 1e-4, 1e-2, 1.0, 30.0)[(seed // 5) % 5]
        for w in (best, best + scale * draw.normal(size=len(best)) * (draw.random(len(best)) < 0.5)):
            intercept = float(draw.normal())
            found = certify(problem.snapshot(settings, w, intercept), [str(path)], strength=strength)
            found, rounded = found.findings, w.astype(np.float32).astype(float)
            objective = problem.objective(rounded, strength)
            assert found.objective == pytest.approx(objective, rel=1e-9), seed
            assert found.bound <= reached + 1e-12, seed
            assert found.plain_bound <= found.bound, seed
            assert found.gap >= objective - reached - 1e-12, seed


def test_the_bound_minds_every_token(tmp_path):
    """Each log has one token that tells something: leaving out any other changes nothing, that one does."""
    for telling in range(3):
        codes = ["a", "b", "c"]
        late = [i % 3 == 0 for i in range(30)]
        messages = [
            {"late": y, "codes": [c for k, c in enumerate(codes) if k != telling or y != (i % 10 == 0)]}
            for i, y in enumerate(late)
        ]
        path = write(tmp_path / f"{telling}.jsonl", messages)
        settings = settings_of(path)
        problem = Problem(settings, path)
        strength = 0.1 * problem.strongest()
        best = problem.objective(problem.optimum(strength), strength)
        zeros = problem.snapshot(settings, np.zeros(len(problem.addresses)))
        assert certify(zeros, [str(path)], strength=strength).findings.bound <= best + 1e-12


def test_at_the_optimum_the_gap_is_nothing(tmp_path):
    for seed in range(20):
        path = write(tmp_path / f"{seed}.jsonl", drawn(seed))
        settings = settings_of(path)
        problem = Problem(settings, path)
        strength = (0.5, 0.1)[seed % 2] * problem.strongest()
        best = problem.optimum(strength)
        snapshot = problem.snapshot(settings, best, problem.intercept_for(best) + 0.7)
        found = certify(snapshot, [str(path)], strength=strength).findings
        assert found.gap < 1e-7 * found.objective, seed
        assert found.shift == pytest.approx(-0.7, abs=1e-5)


@pytest.fixture(scope="module")
def courier(tmp_path_factory):
    """A courier log that was learned: its settings, its file, the snapshot."""
    folder = tmp_path_factory.mktemp("courier")
    write_log(CourierFeed(seed=3, messages=6_000), folder / "log.jsonl")
    settings = courier_settings(
        [folder / "log.jsonl"],
        learner={"l1_per_example": 1e-3},
        state={"folder": str(folder / "state")},
    )
    done = replay(settings, folder / "state")
    return settings, folder / "log.jsonl", read_snapshot(done.snapshot)


def test_on_a_learned_log_the_bound_tells_something(courier):
    settings, path, snapshot = courier
    problem = Problem(settings, path)
    w = np.zeros(len(problem.addresses))
    w[np.searchsorted(problem.addresses, snapshot.weights.addresses)] = snapshot.weights.values
    strength = settings.learner.l1_per_example
    below = problem.objective(w, strength) - problem.objective(problem.optimum(strength, w), strength)
    found = certify(snapshot, [str(path)])
    assert found.l1_per_example == strength
    assert 0 < below <= found.findings.gap <= 3 * below
    assert found.findings.gap < (found.findings.objective - found.findings.plain_bound) / 5


@pytest.mark.parametrize("strength", [1e-3, 3e-4])
def test_a_small_sample_of_the_rows_tells_much_too(courier, monkeypatch, strength):
    settings, path, snapshot = courier
    problem = Problem(settings, path)
    w = np.zeros(len(problem.addresses))
    w[np.searchsorted(problem.addresses, snapshot.weights.addresses)] = snapshot.weights.values
    below = problem.objective(w, strength) - problem.objective(problem.optimum(strength, w), strength)
    monkeypatch.setattr(passes, "SAMPLE_ROWS", 2_000)
    monkeypatch.setattr(passes, "KEPT_ENTRIES", 40_000)
    found = certify(snapshot, [str(path)], strength=strength).findings
    assert below <= found.gap <= 5 * below  # 9 and more without nearby weights, or without moving residuals


def test_a_sample_is_even_and_within_its_size():
    sample = EvenSample(most_rows=300, most_entries=10_000)
    for begin in range(0, 5_000, 500):
        rows = range(begin, begin + 500)
        batch = Batch(
            row_ptr=np.arange(0, 1_001, 2),
            addresses=np.array([(r % 7, 10) for r in rows], np.uint64).ravel(),
            values=np.ones(1_000, np.float32),
            labels=np.array([r % 2 for r in rows], np.int8),
            weights=np.ones(500),
            texts=np.empty(0, np.uint8),
            text_starts=np.zeros(1_000, np.int64),
            text_lengths=np.zeros(1_000, np.int32),
        )
        sample.add(batch, np.arange(begin, begin + 500))
    numbers = sample.held.numbers
    assert 150 <= len(numbers) <= 300 and sample.held.entries == 2 * len(numbers)
    groups = np.unique(numbers // 64)
    assert len(set(np.diff(groups))) == 1 and groups[0] == 0
    addresses, columns = sample.held.columns()
    assert addresses.tolist() == [*range(7), 10]
    assert columns.labels.tolist() == (numbers % 2).tolist()
    assert np.diff(columns.starts).tolist() == [*np.bincount(numbers % 7), len(numbers)]


def test_the_worst_coordinates_are_those_of_the_whole_gradient(courier):
    settings, path, snapshot = courier
    problem, strength = Problem(settings, path), settings.learner.l1_per_example
    w = np.zeros(len(problem.addresses))
    w[np.searchsorted(problem.addresses, snapshot.weights.addresses)] = snapshot.weights.values
    planted = problem.names.index(b"stop\x1flocker")
    w[planted] += 1.5
    gradient = problem.loss(w, problem.intercept_for(w))[1]
    broken = np.where(
        w == 0, np.maximum(np.abs(gradient) - strength, 0), np.abs(gradient + strength * np.sign(w))
    )
    moved = problem.snapshot(settings, w, snapshot.weights.intercept, names=(b"",) * np.count_nonzero(w))
    document = certify(moved, [str(path)]).to_json()
    order = np.argsort(-broken)[:20]
    worst = document["worst"]
    assert (worst[0]["field"], worst[0]["token"]) == ("stop", "locker")
    assert [row["address"] for row in worst] == problem.addresses[order].tolist()
    assert [row["field"].encode() for row in worst] == [problem.names[i].partition(b"\x1f")[0] for i in order]
    assert [row["gradient"] for row in worst] == pytest.approx(gradient[order].tolist(), rel=1e-4)
    assert [row["violation"] for row in worst] == pytest.approx(broken[order].tolist(), rel=1e-4)
    assert [row["weight"] for row in worst] == pytest.approx(w[order].tolist(), rel=1e-6)


def test_tokens_that_only_snapshot_or_log_has_count(tmp_path):
    path = write(tmp_path / "log.jsonl", drawn(7))
    settings = settings_of(path)
    problem = Problem(settings, path)
    plain = certify(problem.snapshot(settings, np.zeros(len(problem.addresses))), [str(path)], strength=1e-3)
    gradient = problem.loss(np.zeros(len(problem.addresses)), problem.intercept_for(0 * problem.addresses))[1]
    assert plain.findings.worst[0].violation == pytest.approx(np.abs(gradient).max() - 1e-3)
    strength = 2 * problem.strongest()
    elsewhere = write(tmp_path / "other.jsonl", [{"late": True, "codes": ["a token of last year"]}])
    other = Problem(settings, elsewhere)
    found = certify(other.snapshot(settings, np.array([2.0])), [str(path)], strength=strength)
    assert found.findings.penalty == pytest.approx(2 * strength)
    assert found.findings.mean_loss == pytest.approx(plain.findings.mean_loss)
    (row,) = found.findings.worst
    assert (row.name, row.gradient) == (b"codes\x1fa token of last year", 0.0)
    assert row.violation == pytest.approx(strength)
    assert found.findings.gap == pytest.approx(2 * strength)


def test_unlabelled_and_rejected_messages_change_no_figure_but_the_counts(tmp_path):
    messages = drawn(12)
    path, longer = write(tmp_path / "a.jsonl", messages), tmp_path / "b.jsonl"
    settings = settings_of(path)
    lines = path.read_text() + '{"late": 3}\n{"late"\n{"load": 4.5, "codes": ["unheard"]}\n'
    longer.write_text(lines)
    problem = Problem(settings, path)
    snapshot = problem.snapshot(settings, np.ones(len(problem.addresses)))
    few, more = (certify(snapshot, [str(file)], strength=0.01).to_json() for file in (path, longer))
    counts = {"messages": 3, "rejected": 2, "labelled": 0, "coordinates": 0}
    assert {key: more[key] - few[key] for key in counts} == counts
    for key in ("objective", "lower_bound", "gap", "mean_loss", "penalty", "plain_bound"):
        assert more[key] == pytest.approx(few[key], rel=1e-12)
    strict = replace_reject_share(settings)
    with pytest.raises(BadData, match=r"^2 of .* messages were rejected"):
        certify(snapshot, [str(longer)], strict, strength=0.01)


def replace_reject_share(settings):
    message = settings.message.model_copy(update={"max_reject_share": 0.0})
    return settings.model_copy(update={"message": message})


@pytest.mark.parametrize(
    ("learner", "learned", "expected"),
    [
        ({"l1_per_example": 2e-3}, 5, 2e-3),
        ({"l1_per_example": 2e-3, "horizon": 100}, 100, 2e-3),
        ({"l1_per_example": 2e-3, "horizon": 100}, 400, 5e-4),
        ({"l1_per_example": 2e-3, "l1": 3.0}, 100, 2e-3 + 0.03 / 1.5),
        ({"l1_per_example": 0.0, "l1": 3.0, "horizon": 10}, 100, 0.03 / 1.5),
    ],
)
def test_the_strength_is_what_pressed_on_each_unit_of_learned_weight(learner, learned, expected, tmp_path):
    messages = [{"late": i % 2 == 0, "load": i, "counts": 1.0 + i % 2} for i in range(10)]
    path = write(tmp_path / "log.jsonl", messages)
    settings = settings_of(path, learner=learner)
    problem = Problem(settings, path)
    snapshot = problem.snapshot(settings, np.array([0.1]), learned=learned)
    assert certify(snapshot, [str(path)]).l1_per_example == pytest.approx(expected, rel=1e-12)
    assert certify(snapshot, [str(path)], strength=0.25).l1_per_example == 0.25


@pytest.fixture
def small(tmp_path):
    path = write(tmp_path / "log.jsonl", drawn(3))
    settings = settings_of(path)
    problem = Problem(settings, path)
    return settings, path, problem.snapshot(settings, np.full(len(problem.addresses), 0.2))


def test_strength_0_is_refused_with_the_reason(small):
    _, path, snapshot = small
    with pytest.raises(BadSettings, match="no optimum at all"):
        certify(snapshot, [str(path)], strength=0.0)
    about = replace(snapshot.about, settings=settings_of(path, learner={"l1_per_example": 0.0}).model_dump())
    with pytest.raises(BadSettings, match="strength to certify is 0"):
        certify(replace(snapshot, about=about), [str(path)])


def test_l2_is_refused_unless_the_batch_fit_is_named(small):
    _, path, snapshot = small
    about = replace(snapshot.about, settings=settings_of(path, learner={"l2": 0.5}).model_dump())
    snapshot = replace(snapshot, about=about)
    with pytest.raises(BadSettings, match=r"learner\.l2 = 0\.5, and the bound is for the L1 penalty alone"):
        certify(snapshot, [str(path)])
    assert certify(snapshot, [str(path)], strength=0.01).l1_per_example == 0.01


def test_a_log_of_one_label_is_refused(small, tmp_path):
    _, _, snapshot = small
    for late in (True, False, None):
        path = write(tmp_path / "one.jsonl", [{"late": late, "load": 1.0}] * 5)
        with pytest.raises(BadData, match="not both labels have weight there"):
            certify(snapshot, [str(path)], strength=0.01)
    path = write(tmp_path / "one.jsonl", [{"late": True, "counts": 0.0}, {"late": False}])
    with pytest.raises(BadData, match="2 labelled messages, and not both"):
        certify(snapshot, [str(path)], strength=0.01)


def test_what_cannot_be_read_twice_or_another_way_is_refused(small):
    settings, path, snapshot = small
    with pytest.raises(UsageError, match="more than once"):
        certify(snapshot, ["-"])
    unlabelled = settings.model_copy(update={"message": settings.message.model_copy(update={"label": None})})
    with pytest.raises(BadSettings, match=r"message\.label names no outcome"):
        certify(snapshot, [str(path)], unlabelled)
    with pytest.raises(BadSettings, match="another feature space"):
        certify(snapshot, [str(path)], settings_of(path, space={"seed": 9}))


@pytest.mark.parametrize("change", ["grown", "turned", "shrunk"])
def test_a_log_that_changes_between_readings_is_refused(small, change):
    _, path, snapshot = small

    moments = ["bound" if change == "grown" else "gradients"]

    def meddle(stage, fraction):
        if stage in moments:
            moments.clear()
            lines = path.read_text().splitlines(keepends=True)
            other = {"grown": [*lines, lines[0]], "turned": lines[::-1], "shrunk": lines[:-2]}
            path.write_text("".join(other[change]))

    with pytest.raises(BadData, match="the log changed between two readings"):
        certify(snapshot, [str(path)], strength=0.01, progress=meddle)


def test_windows_are_the_last_whole_ones_of_labelled_messages(small, tmp_path):
    _, path, snapshot = small
    settings = settings_of(path, metrics={"window": 10})
    found = certify(snapshot, [str(path)], settings, strength=0.01)
    labelled = found.findings.labelled
    problem = Problem(settings, path)
    w = np.full(len(problem.addresses), 0.2, np.float32).astype(float)
    margins = problem.X @ w + problem.intercept_for(w)
    losses = np.logaddexp(0, np.where(problem.y == 1, -margins, margins)) * problem.o
    assert len(found.windows) == min(5, labelled // 10) > 1
    for back, window in enumerate(reversed(found.windows)):
        end = labelled - 10 * back
        assert (window.first, window.last) == (end - 9, end)
        part = slice(end - 10, end)
        assert window.mean_loss == pytest.approx(losses[part].sum() / problem.o[part].sum())


def test_the_command_shows_it_within_100_columns_and_as_json(courier, tmp_path, capsys, monkeypatch):
    settings, path, _ = courier
    config = config_for(settings, tmp_path)
    assert main(["certify", "--config", config]) == 0
    text = capsys.readouterr().out
    assert max(map(len, text.splitlines())) <= 100
    assert main(["certify", str(path), "--config", config, "--json"]) == 0
    document = json.loads(capsys.readouterr().out)
    assert {"objective", "lower_bound", "gap", "l1_per_example", "messages", "worst"} <= set(document)
    assert document["gap"] == pytest.approx(document["objective"] - document["lower_bound"])
    assert document["objective"] == pytest.approx(document["mean_loss"] + document["penalty"])
    for shown in (f"{document['gap']:.6f}", f"{document['lower_bound']:.6f}", document["worst"][0]["token"]):
        assert shown in text
    assert [document[key] for key in ("messages", "labelled", "rejected")] == [6_000, 6_000, 0]
    assert [w["last"] for w in document["windows"]] == [1_500, 3_000, 4_500, 6_000]
    monkeypatch.chdir(tmp_path.parent)
    state = str(path.parent / "state")
    for arguments, code, said in (
        (["--config", config, "-"], 64, "save standard input to a file"),
        (["--state", state], 64, "which log?"),
        (["--config", config, "--strength", "0"], 78, "strength to certify is 0"),
        (["--config", config, "--strength", "-1"], 64, "give a number above 0"),
        (["--state", state, "absent.jsonl"], 66, "or leave it out for those of feed.paths"),
    ):
        assert main(["certify", *arguments]) == code, arguments
        assert said in capsys.readouterr().err
