"""The batch optimum that certify --refine finds is that of a general solver, and proved by its own bound."""

import json

import numpy as np
import pytest
from sklearn.linear_model import LogisticRegression

from simulator import CourierFeed, write_log
from stream.cli.main import main
from stream.errors import CannotCreate
from stream.optimality import solving
from stream.optimality.solving import Columns, solve
from stream.runs.certifying.refining import refine
from stream.runs.replay import replay
from stream.settings.models import Settings
from stream.snapshots import read_snapshot


def columns_of(x, labels, weights):
    """A small dense problem as columns."""
    rows, places = np.nonzero(np.ones_like(x))
    row_ptr = np.arange(0, x.size + 1, x.shape[1])
    return Columns.of(places, row_ptr, x[rows, places].astype(np.float32), labels, weights, x.shape[1])


def objective(x, labels, weights, w, intercept, strength):
    margins = x @ w + intercept
    losses = np.logaddexp(0, np.where(labels == 1, -margins, margins))
    return (losses * weights).sum() / weights.sum() + strength * np.abs(w).sum()


@pytest.mark.parametrize("seed", range(12))
def test_the_optimum_is_that_of_a_general_solver(seed):
    draw = np.random.default_rng(seed)
    m, n = 200, 8
    x = draw.normal(size=(m, n)).astype(np.float32).astype(float)
    x[:, 3] = 0.0
    weights = draw.choice([0.5, 1.0, 3.0], m)
    labels = (draw.random(m) < 1 / (1 + np.exp(1.5 - x[:, 0] * 2 + x[:, 1]))).astype(np.int8)
    strength = float(draw.choice([0.1, 0.02, 0.004]))
    found = solve(columns_of(x, labels, weights), draw.normal(size=n), 0.3, strength, 1e-9)
    general = LogisticRegression(
        l1_ratio=1.0, solver="saga", C=1 / (strength * weights.sum()), tol=1e-10, max_iter=100_000
    ).fit(x, labels, sample_weight=weights)
    expected = objective(x, labels, weights, general.coef_[0], general.intercept_[0], strength)
    assert found.objective <= expected + 1e-9
    assert found.objective == pytest.approx(
        objective(x, labels, weights, found.weights, found.intercept, strength), abs=1e-12
    )
    assert found.bound <= expected and found.gap <= 1e-8
    assert found.weights[3] == 0.0


@pytest.fixture(scope="module")
def learned(tmp_path_factory):
    folder = tmp_path_factory.mktemp("refine")
    write_log(CourierFeed(seed=3, messages=8_000), folder / "log.jsonl")
    write_log(CourierFeed(seed=3, messages=10_000), folder / "more.jsonl")
    later = (folder / "more.jsonl").read_text().splitlines(keepends=True)[8_000:]
    (folder / "later.jsonl").write_text("".join(later))
    (folder / "bedload.toml").write_text(
        '[feed]\npaths = ["log.jsonl"]\n[message]\nlabel = "redelivered"\n'
        '[[fields]]\npath = "note"\nkind = "words"\n[[fields]]\npath = "route"\nkind = "category"\n'
        "[learner]\nlearning_rate = 0.2\nl1_per_example = 2e-3\n"
    )
    return folder


def test_refining_is_told_proved_and_left_as_a_snapshot(learned, monkeypatch, capsys):
    monkeypatch.chdir(learned)
    assert main(["replay", "--state", "state", "--json"]) == 0
    capsys.readouterr()
    refining = ["certify", "--state", "state", "--config", "bedload.toml", "--refine"]
    assert main([*refining, "--fresh", "later.jsonl", "--out", "optimum", "--json"]) == 0
    found = json.loads(capsys.readouterr().out)
    assert found["refined_gap"] <= 1e-6 * found["refined_objective"]
    assert found["lower_bound"] <= found["refined_objective"] < found["objective"]
    assert found["fresh_messages"] == 2_000
    assert found["fresh_log_loss"] != found["fresh_log_loss_refined"]
    weights = read_snapshot(learned / "optimum").weights
    assert len(weights) == found["refined_nnz"] and all(weights.names)
    assert main(["certify", "--snapshot", "./optimum", "--config", "bedload.toml", "--json"]) == 0
    again = json.loads(capsys.readouterr().out)
    assert again["objective"] == pytest.approx(found["refined_objective"]) and again["gap"] < 1e-6
    assert main([*refining, "--out", "optimum"]) == 73
    assert main(["certify", "--state", "state", "--fresh", "later.jsonl"]) == 64
    capsys.readouterr()
    assert main(refining) == 0
    text = capsys.readouterr().out
    assert "batch optimum: objective" in text and max(map(len, text.splitlines())) <= 100


def test_a_later_log_without_outcomes_is_refused_before_the_work(learned, tmp_path, monkeypatch, capsys):
    monkeypatch.chdir(learned)
    refining = [
        "certify",
        "--state",
        "state",
        "--config",
        "bedload.toml",
        "--refine",
        "--out",
        str(tmp_path / "o"),
    ]
    (tmp_path / "bare.jsonl").write_text('{"note": "left at the door"}\n' * 3)
    assert main([*refining, "--fresh", str(tmp_path / "bare.jsonl")]) == 65
    told = capsys.readouterr().err
    assert "none of 3 messages has an outcome" in told and "redelivered" in told
    assert not (tmp_path / "o").exists()


def test_an_optimum_that_is_not_reached_is_no_optimum(learned, tmp_path, monkeypatch, capsys):
    monkeypatch.setattr(solving, "MOST_STEPS", 3)
    monkeypatch.chdir(learned)
    refining = [
        "certify",
        "--state",
        "state",
        "--config",
        "bedload.toml",
        "--refine",
        "--out",
        str(tmp_path / "o"),
    ]
    assert main([*refining, "--strength", "1e-5"]) == 65
    told = capsys.readouterr().err
    assert "1e-06 is wanted: 3 steps" in told and "--strength" in told
    assert not (tmp_path / "o").exists()


@pytest.mark.parametrize("far", [10.0, 80.0])
@pytest.mark.parametrize("strength", [1e-3, 1e-5])
def test_weights_far_out_where_losses_are_flat_find_back(strength, far):
    draw = np.random.default_rng(1)
    x = (draw.random((200, 60)) < 0.05).astype(float)
    labels = (draw.random(200) < 0.3).astype(np.int8)
    log = columns_of(x, labels, np.ones(200))
    found = solve(log, far * draw.normal(size=60), 0.0, strength, 1e-6)
    near = solve(log, np.zeros(60), 0.0, strength, 1e-6)
    assert found.gap <= 1e-6 * found.objective and found.objective == pytest.approx(near.objective, rel=2e-6)


def test_a_log_too_large_for_the_memory_is_refused(learned, tmp_path):
    settings = Settings.model_validate(
        {
            "feed": {"paths": ["log.jsonl"]},
            "message": {"label": "redelivered"},
            "fields": [{"path": "note", "kind": "words"}],
            "learner": {"l1_per_example": 1e-3},
        }
    ).placed_in(learned)
    weights = read_snapshot(replay(settings, tmp_path / "state").snapshot).weights
    with pytest.raises(CannotCreate, match="--memory"):
        refine(settings, ("log.jsonl",), learned, weights, 1e-3, 100_000)
