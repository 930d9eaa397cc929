"""`bedload converge`: its figures are those of scikit-learn, of a replay and of plain arithmetic."""

import json
import math
import tempfile
from pathlib import Path

import numpy as np
import pytest
from scipy.sparse import csr_matrix
from scipy.special import expit, xlogy
from sklearn.linear_model import LogisticRegression

from simulator import CourierFeed, write_log
from stream.cli.convergence import show_convergence
from stream.cli.main import main
from stream.cli.scenario import courier_settings, write_stream
from stream.errors import BadSettings, UsageError
from stream.runs.converging.held import hold
from stream.runs.converging.job import Wanted, cuts_of, learner_settings
from stream.runs.converging.judging import agreement, excess
from stream.runs.converging.slopes import slope_of
from stream.runs.replay import replay
from stream.snapshots import read_snapshot
from stream.token_names import field_and_token

SEED, LEARNED, FRESH, STRENGTH, RATE, WINDOWS = 5, 3_000, 2_000, 1e-3, 0.3, 3
ASKED = [
    *("--seed", str(SEED), "--messages", str(LEARNED), "--fresh", str(FRESH), "--strength", str(STRENGTH)),
    *("--learner", f"ftrl:{RATE}", "--learner", "truncated-gradient:0.05"),
    *("--learner", "ftrl:0.4:averaged"),
    *("--epochs", "3", "--windows", str(WINDOWS), "--at", "1000,2000", "--scenario", "sudden-change"),
]


@pytest.fixture(scope="module")
def document(tmp_path_factory):
    """What the command prints, and a report beside it."""
    folder = tmp_path_factory.mktemp("converge")
    out = folder / "document.json"
    with pytest.MonkeyPatch.context() as patch, out.open("w") as stream:
        patch.setattr("sys.stdout", stream)
        assert main(["converge", *ASKED, "--json", "--report", str(folder / "report.html")]) == 0
    assert (folder / "report.html").stat().st_mode & 0o777 == 0o600
    return json.loads(out.read_text())


@pytest.fixture(scope="module")
def stream(tmp_path_factory):
    """The same stream again: settings, its rows, what is known of it."""
    log = tmp_path_factory.mktemp("stream") / "stream.jsonl"
    feed = CourierFeed(seed=SEED, messages=LEARNED + FRESH, scenario="sudden-change")
    known = write_stream(feed, log, lambda share, text: None)
    settings = courier_settings(log, [])
    return settings, hold(settings, LEARNED + FRESH, 10**9, lambda share, text: None), known


@pytest.fixture(scope="module")
def matrix(stream):
    """Every message as a row of a scipy matrix, and its outcome."""
    _, held, _ = stream
    rows = held.rows
    shape = (len(rows), rows.count)
    return csr_matrix((rows.values.astype(float), rows.columns, rows.row_ptr), shape), rows.labels


def at(document, messages):
    return next(fit for fit in document["fits"] if fit["messages"] == messages)


def learned(document, messages, name, epochs):
    found = at(document, messages)["learned"]
    return next(one for one in found if (one["name"], one["epochs"]) == (name, epochs))


def log_loss(x, y, weights, intercept):
    margins = x @ weights + intercept
    return np.mean(np.logaddexp(0, margins) - y * margins)


def by_scikit_learn(x, y):
    """Weights and intercept, pressed on a thousandth as hard as a weight."""
    solver = LogisticRegression(
        solver="liblinear", l1_ratio=1.0, C=1 / (STRENGTH * len(y)), intercept_scaling=1_000.0, tol=1e-6,
        max_iter=1_000, random_state=0,
    )  # fmt: skip
    solver.fit(x, y)
    return solver.coef_[0], solver.intercept_[0]


def test_learners_of_one_method_are_told_apart_by_their_rates():
    fast, slow, other = Wanted("ftrl", 0.3), Wanted("ftrl", 0.05), Wanted("ftrl", 0.3, averaged=True)
    named = [one.to_json((fast, slow, other))["name"] for one in (fast, slow, other)]
    assert named == ["ftrl 0.3", "ftrl 0.05", "averaged ftrl"]
    assert fast.to_json((fast, other))["name"] == "ftrl"


def test_looks_are_at_thousands_and_three_thousands_up_to_all_messages():
    assert cuts_of(200_000) == (1_000, 3_000, 10_000, 30_000, 100_000, 200_000)
    assert cuts_of(30_000) == (1_000, 3_000, 10_000, 30_000)
    assert cuts_of(500) == (500,)
    assert cuts_of(900, (70, 5)) == (5, 70, 900)
    with pytest.raises(UsageError, match="after 901 messages, but 900"):
        cuts_of(900, (901,))


def test_the_batch_fit_is_scikit_learns(document, matrix):
    x, y = matrix
    for messages in (1_000, LEARNED):
        weights, intercept = by_scikit_learn(x[:messages], y[:messages])
        objective = log_loss(x[:messages], y[:messages], weights, intercept)
        objective += STRENGTH * np.abs(weights).sum()
        batch = at(document, messages)["batch"]
        assert batch["objective"] == pytest.approx(objective, rel=1e-5)
        assert batch["lower_bound"] <= objective
        assert batch["proved_gap"] == pytest.approx(1 - batch["lower_bound"] / batch["objective"])
        assert batch["proved_gap"] < 1e-3 and batch["loose"] is False
        assert batch["nnz"] == pytest.approx(np.count_nonzero(weights), abs=3)
        fresh = log_loss(x[LEARNED:], y[LEARNED:], weights, intercept)
        assert batch["fresh_log_loss"] == pytest.approx(fresh, rel=1e-3)


@pytest.mark.parametrize(
    ("name", "wanted"),
    [
        ("ftrl", Wanted("ftrl", RATE)),
        ("truncated-gradient", Wanted("truncated-gradient", 0.05)),
        ("averaged ftrl", Wanted("ftrl", 0.4, averaged=True)),
    ],
)
@pytest.mark.parametrize("epochs", [1, 3])
def test_a_learner_is_the_replay_of_the_first_messages(
    document, stream, matrix, tmp_path, name, wanted, epochs
):
    settings, held, known = stream
    lines = Path(settings.feed.paths[0]).read_bytes().splitlines(keepends=True)
    (tmp_path / "first.jsonl").write_bytes(b"".join(lines[:LEARNED]))
    own = learner_settings(settings, wanted, STRENGTH)
    feed = own.feed.model_copy(update={"paths": (str(tmp_path / "first.jsonl"),)})
    result = replay(own.model_copy(update={"feed": feed}), tmp_path / "state", epochs=epochs)
    weights = read_snapshot(result.snapshot).weights
    dense, (x, y) = held.dense(weights), matrix
    objective = log_loss(x[:LEARNED], y[:LEARNED], dense, weights.intercept)
    objective += STRENGTH * np.abs(dense).sum()
    row = learned(document, LEARNED, name, epochs)
    assert row["nnz"] == len(weights)
    assert row["objective"] == pytest.approx(objective, rel=1e-12)
    best = at(document, LEARNED)["batch"]
    assert row["gap"] == pytest.approx(objective / best["objective"] - 1)
    assert row["gap"] > 0
    fresh = log_loss(x[LEARNED:], y[LEARNED:], dense, weights.intercept)
    assert row["fresh_log_loss"] == pytest.approx(fresh, rel=1e-12)
    assert row["fresh_over_batch"] == pytest.approx(fresh / best["fresh_log_loss"] - 1)
    q, p = known.shares[LEARNED:], expit(x[LEARNED:] @ dense + weights.intercept)
    divergence = np.mean(xlogy(q, q / p) + xlogy(1 - q, (1 - q) / (1 - p)))
    assert row["excess_log_loss"] == pytest.approx(divergence, rel=1e-9)
    assert 0 < row["learning_seconds"] < row["seconds"]
    kept = {field_and_token(token) for token in weights.names}
    planted = {("&".join(p.fields), "&".join(p.tokens)) for p in known.planted(LEARNED - 1)}
    assert planted != {("&".join(p.fields), "&".join(p.tokens)) for p in known.planted(0)}, "the truth moved"
    support = row["against_truth"]
    assert support["precision"] == len(kept & planted) / len(kept)
    assert support["recall"] == len(kept & planted) / len(planted)


def test_more_messages_and_more_passes_come_nearer_to_the_batch_fit(document):
    gaps = {n: [learned(document, n, "ftrl", e)["gap"] for e in (1, 3)] for n in (1_000, 2_000, LEARNED)}
    assert gaps[1_000][0] > gaps[2_000][0] > gaps[LEARNED][0]
    assert all(one > three for one, three in gaps.values())
    one, three = (learned(document, LEARNED, "ftrl", epochs)["against_batch"]["f1"] for epochs in (1, 3))
    assert three > one > 0.6


def test_windows_hold_the_losses_that_a_replay_prints_and_those_of_batch_fits(
    document, stream, matrix, tmp_path
):
    settings, _, known = stream
    (windows,) = document["windows"]
    size = LEARNED // WINDOWS
    assert windows["through"] == [size, 2 * size, 3 * size]
    own = learner_settings(settings, Wanted("ftrl", RATE), STRENGTH)
    metrics = own.metrics.model_copy(update={"window": size})
    rows = []
    replay(own.model_copy(update={"metrics": metrics}), tmp_path, on_window=rows.append)
    assert [one["name"] for one in windows["learners"]] == ["ftrl 0.3", "truncated-gradient", "ftrl 0.4"]
    assert windows["learners"][0]["losses"] == [row.summary.log_loss for row in rows[:WINDOWS]]
    x, y = matrix
    q = known.shares[size : 2 * size]
    outcome = y[size : 2 * size]
    truth = -np.mean(outcome * np.log(q) + (1 - outcome) * np.log(1 - q))
    assert windows["truth"][1] == pytest.approx(truth)
    batch = windows["batch"]
    assert batch["all_before"][0] is batch["last_window"][0] is None
    assert batch["all_before"][1] == batch["last_window"][1], "the window before is everything before"
    solution = by_scikit_learn(x[size : 2 * size], y[size : 2 * size])
    last = log_loss(x[2 * size : 3 * size], y[2 * size : 3 * size], *solution)
    assert batch["last_window"][2] == pytest.approx(last, rel=1e-3)
    assert sum(batch["hindsight"][1:]) < sum(batch["all_before"][1:]), "it has seen what it is judged by"
    assert windows["means"]["batch"]["all_before"] == pytest.approx(sum(batch["all_before"][1:]) / 2)


def test_the_support_is_counted_against_batch_fit_and_truth(document):
    found, wanted = np.array([1, 1, 1, 0, 0], bool), np.array([0, 1, 1, 1, 1], bool)
    support = agreement(found, wanted)
    assert (support.precision, support.recall) == (2 / 3, 2 / 4)
    assert support.f1 == pytest.approx(2 * (2 / 3) * 0.5 / (2 / 3 + 0.5))
    nothing = agreement(np.zeros(5, bool), wanted)
    assert (nothing.precision, nothing.recall, nothing.f1) == (None, 0.0, None)
    truth = at(document, LEARNED)["batch"]["against_truth"]
    assert 0.1 < truth["recall"] < 0.8 < 1.0 + truth["precision"]


def test_the_truth_has_no_excess_over_itself(stream):
    _, held, known = stream
    fresh = held.part(LEARNED, LEARNED + FRESH)
    shares = known.shares[LEARNED:]
    constant = math.log(shares.mean() / (1 - shares.mean()))
    nothing = np.zeros(len(held.addresses))
    assert excess(fresh, nothing, constant, np.full(FRESH, shares.mean())) == pytest.approx(0, abs=1e-12)
    assert excess(fresh, nothing, constant, shares) > 0.05


def test_a_power_of_the_messages_is_found_with_its_error():
    messages = [1_000, 3_000, 10_000, 30_000, 100_000]
    exact = slope_of(messages, [2.5 * m**-0.75 for m in messages])
    assert (exact.exponent, exact.factor, exact.points) == (pytest.approx(-0.75), pytest.approx(2.5), 5)
    assert exact.error < 1e-9
    noisy = [2.5 * m**-0.75 * f for m, f in zip(messages, (1.2, 0.8, 1.1, 0.9, 1.05), strict=True)]
    coefficients, covariance = np.polyfit(np.log(messages), np.log(noisy), 1, cov=True)
    found = slope_of(messages, noisy)
    assert found.exponent == pytest.approx(coefficients[0])
    assert found.error == pytest.approx(math.sqrt(covariance[0, 0]))
    assert slope_of(messages, [0.1, None, 0.0, -0.1, 0.05]) is None


def test_slopes_are_those_of_the_rows(document):
    slope = next(s for s in document["slopes"] if (s["name"], s["epochs"], s["of"]) == ("ftrl", 1, "gap"))
    gaps = [learned(document, n, "ftrl", 1)["gap"] for n in (1_000, 2_000, LEARNED)]
    again = slope_of([1_000, 2_000, LEARNED], gaps)
    assert (slope["exponent"], slope["error"]) == (again.exponent, again.error)


def test_a_log_of_ones_own_is_compared_without_a_truth(tmp_path, monkeypatch, capsys):
    monkeypatch.chdir(tmp_path)
    write_log(CourierFeed(seed=1, messages=2_400), "log.jsonl")
    lines = (tmp_path / "log.jsonl").read_bytes().splitlines(keepends=True)
    lines[10:12] = [b"{}\n", b'{"note": 7, "redelivered": true}\n']
    (tmp_path / "log.jsonl").write_bytes(b"".join(lines))
    (tmp_path / "bedload.toml").write_text(
        '[feed]\nkind = "topic"\nservers = ["a:1"]\ntopic = "t"\n[message]\nlabel = "redelivered"\n'
        '[[fields]]\npath = "note"\nkind = "words"\n[learner]\nlearning_rate = 0.25\nl1_per_example = 2e-3\n'
    )
    assert main(["converge", "log.jsonl", "--epochs", "1", "--learner", "ftrl"]) == 0
    shown = capsys.readouterr()
    assert "1,920 messages learned, 480 fresh" in shown.out
    assert "ftrl 0.25" in shown.out and "0.002" in shown.out
    assert "truth" not in shown.out and "excess" not in shown.out.split("gap: how far")[0]
    assert "1 rejected" in shown.err
    assert max(map(len, shown.out.splitlines())) <= 100
    assert main(["converge", "log.jsonl", "--messages", "2000", "--fresh", "500"]) == 65
    assert "2,400 messages, fewer than" in capsys.readouterr().err
    assert main(["converge", "log.jsonl", "--fresh", "2400"]) == 65
    assert "no more than the 2,400 fresh ones" in capsys.readouterr().err


def test_tables_fit_100_columns(document, capsys):
    show_convergence(document, None)
    out = capsys.readouterr().out
    assert max(map(len, out.splitlines())) <= 100
    for text in (
        "batch fit",
        "ftrl x3",
        "truncated x3",
        "averaged x3",
        "hindsight",
        "exponent",
        "truth P/R/F1",
    ):
        assert text in out


@pytest.mark.parametrize(
    ("asked", "code", "said"),
    [
        (["--strength", "0"], 64, "above 0"),
        (["--scenario", "stready"], 64, "bedload: --scenario: scenario is 'stready'; there are steady"),
        (["--learner", "sgd"], 64, "ftrl, truncated-gradient"),
        (["--learner", "ftrl:fast"], 64, "number above 0"),
        (["--windows", "1"], 64, "2 or more"),
        (["--at", "10,x"], 64, "whole numbers"),
        (["-", "--set", "message.label=y"], 64, "more than once"),
        (["--set", "learner.l2=1"], 78, "learner.l2=0"),
        (["--set", "learner.horizon=50"], 78, "horizon"),
        (["--memory", "1KB", "--fresh", "100"], 73, "--memory"),
        (["--report", "nowhere/report.html"], 73, "no folder"),
    ],
)
def test_what_cannot_be_compared_is_refused_with_the_cure(asked, code, said, capsys, tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    assert main(["converge", "--messages", "300", "--fresh", "100", *asked]) == code
    shown = capsys.readouterr()
    assert said in shown.err
    assert shown.out == ""


def test_an_interrupted_run_leaves_nothing_behind(tmp_path, monkeypatch, capsys):
    monkeypatch.setattr(tempfile, "tempdir", str(tmp_path))
    asked = []

    def interrupted(settings, *others, **more):
        asked.extend(tmp_path.rglob("stream.jsonl"))
        raise KeyboardInterrupt

    monkeypatch.setattr("stream.runs.converging.converge.converge", interrupted)
    assert main(["converge", "--messages", "300", "--fresh", "100"]) == 130
    assert len(asked) == 1, "the stream lay in the temporary folder"
    assert list(tmp_path.iterdir()) == []


def test_a_scenario_is_read_by_the_fields_of_a_settings_file(tmp_path, monkeypatch, capsys):
    monkeypatch.chdir(tmp_path)
    (tmp_path / "own.toml").write_text(
        '[feed]\nkind = "topic"\nservers = ["a:1"]\ntopic = "t"\n[message]\nlabel = "redelivered"\n'
        '[[fields]]\npath = "stop"\nkind = "category"\n'
    )
    asked = ["--config", "own.toml", "--messages", "500", "--fresh", "100", "--epochs", "1"]
    assert main(["converge", *asked, "--learner", "ftrl", "--json"]) == 0
    document = json.loads(capsys.readouterr().out)
    assert document["log"]["different_tokens"] == 8
    assert document["fits"][0]["batch"]["against_truth"]["recall"] < 0.05, "most tokens are planted elsewhere"


def test_a_scenario_and_a_log_at_once_are_refused(capsys):
    assert main(["converge", "log.jsonl", "--scenario", "steady"]) == 64
    assert "leave --scenario" in capsys.readouterr().err


def test_a_horizon_is_refused_by_the_key(stream):
    settings, _, _ = stream
    own = settings.model_copy(update={"learner": settings.learner.model_copy(update={"horizon": 5_000})})
    with pytest.raises(BadSettings, match="horizon = 5,000"):
        learner_settings(own, Wanted("ftrl", 0.1), STRENGTH)
