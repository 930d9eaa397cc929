"""One-pass weights against a batch fit of the same penalised loss by scikit-learn's L1 logistic regression.

The batch problem: minimise mean(log loss) + penalty * sum |w| over weights and a free intercept. A batch
strength S on the sum of losses is a penalty of S / N on their mean, which is what `l1_per_example` says.
liblinear counts the intercept among the weights it presses on; an intercept column of 100 makes that a
hundredth, and the intercept is solved for afterwards. That the fit is the optimum is not taken on trust: a
dual bound (Koh, Kim and Boyd, JMLR 8:1519-1555, 2007) says how low any weights could come.
"""

from pathlib import Path

import numpy as np
import pytest
from scipy.sparse import csr_matrix
from scipy.special import expit, xlogy
from sklearn.linear_model import LogisticRegression

from simulator import CourierFeed, write_log
from stream.decoding import Decoder
from stream.features import Batcher
from stream.runs.replay import replay
from stream.settings import Settings
from stream.snapshots import read_snapshot
from stream.sources import LogSource

pytestmark = pytest.mark.slow

CHECKS = Path(__file__).parent.parent / "docs" / "checks.md"
MESSAGES = 100_000
RATE = 0.2


@pytest.fixture(scope="module")
def log_file(tmp_path_factory):
    path = tmp_path_factory.mktemp("courier") / "handoffs.jsonl"
    write_log(CourierFeed(seed=7, messages=MESSAGES), path)
    return path


def settings_for(log_file, **learner):
    categories = ("route", "stop", "hour", "sender", "locker")
    return Settings.model_validate(
        {
            "feed": {"paths": [str(log_file)]},
            "message": {"label": "redelivered"},
            "fields": [
                {"path": "note", "kind": "words"},
                *({"path": path, "kind": "category"} for path in categories),
            ],
            "crosses": [{"paths": ["route", "hour"]}],
            "learner": {"learning_rate": RATE, **learner},
        }
    )


class BatchProblem:
    """The rows of a log as `x`, CSR (messages, distinct addresses); outcomes as `y`, float64 of 0 and 1."""

    def __init__(self, settings):
        source = LogSource(settings.feed.paths, Path(), settings.feed.max_line_bytes)
        decoder, batcher = Decoder(settings), Batcher(settings)
        addresses, values, lengths, labels = [], [], [], []
        while len(block := source.read(4_096)):
            examples, _ = decoder.decode(block)
            batch, _ = batcher.batch(examples)
            addresses.append(batch.addresses.copy())
            values.append(batch.values.astype(float))
            lengths.append(np.diff(batch.row_ptr))
            labels.append(batch.labels.astype(float))
        source.close()
        self.addresses, columns = np.unique(np.concatenate(addresses), return_inverse=True)
        row_ptr = np.concatenate([[0], np.cumsum(np.concatenate(lengths))])
        shape = (MESSAGES, len(self.addresses))
        self.x = csr_matrix((np.concatenate(values), columns, row_ptr), shape)
        self.y = np.concatenate(labels)

    def fit(self, strength):
        """Weights and intercept of the batch optimum."""
        solver = LogisticRegression(
            l1_ratio=1.0,
            C=1 / strength,
            solver="liblinear",
            intercept_scaling=100.0,
            tol=1e-6,
            max_iter=500,
            random_state=0,
        )
        solver.fit(self.x, self.y)
        weights = solver.coef_[0]
        return weights, self.best_intercept(weights, solver.intercept_[0])

    def best_intercept(self, weights, intercept):
        """Newton's method for the unpenalised constant, the weights held."""
        margins = self.x @ weights
        for _ in range(20):
            p = expit(margins + intercept)
            intercept += (self.y - p).sum() / (p * (1 - p)).sum()
        return intercept

    def objective(self, weights, intercept, strength):
        margins = self.x @ weights + intercept
        return np.mean(np.logaddexp(0, margins) - self.y * margins) + self.penalty(weights, strength)

    def penalty(self, weights, strength):
        return strength / MESSAGES * np.abs(weights).sum()

    def lower_bound(self, weights, intercept, strength):
        """No weights reach less; holds whatever the weights, where the intercept is the best one for them."""
        p = expit(self.x @ weights + intercept)
        steepest = np.abs(self.x.T @ (self.y - p)).max()
        scale = min(1.0, strength / steepest)
        u = scale * np.abs(self.y - p)
        return -np.mean(xlogy(u, u) + xlogy(1 - u, 1 - u))

    def strongest_useful(self):
        """Total strength from which on the optimum has no weight: max over columns of |x.(y - mean y)|."""
        return np.abs(self.x.T @ (self.y - self.y.mean())).max()


@pytest.fixture(scope="module")
def problem(log_file):
    return BatchProblem(settings_for(log_file))


@pytest.fixture
def learn(log_file, problem, tmp_path):
    """Replays the log; the snapshot's weights by column, its intercept, and the result."""

    def learn(epochs=1, **learner):
        folder = tmp_path / f"{epochs} {learner}"
        result = replay(settings_for(log_file, **learner), folder, epochs=epochs)
        found = read_snapshot(result.snapshot).weights
        weights = np.zeros(len(problem.addresses))
        columns = np.searchsorted(problem.addresses, found.addresses)
        assert np.array_equal(problem.addresses[columns], found.addresses)
        weights[columns] = found.values
        return weights, found.intercept, result

    return learn


@pytest.mark.parametrize("strength", [10, 50])
def test_one_pass_is_within_two_percent_of_the_batch_optimum_and_five_within_half_a_percent(
    strength, problem, learn
):
    weights, intercept = problem.fit(strength)
    optimum = problem.objective(weights, intercept, strength)
    bound = problem.lower_bound(weights, intercept, strength)
    assert bound <= optimum <= bound * (1 + 5e-4)
    measured = [optimum, np.count_nonzero(weights)]
    for epochs, most in ((1, 0.02), (5, 0.005)):
        learned, constant, result = learn(epochs, l1_per_example=strength / MESSAGES)
        reached = problem.objective(learned, constant, strength)
        assert optimum < reached <= bound * (1 + most)
        assert 1 / 1.5 <= result.nnz / np.count_nonzero(weights) <= 1.5
        measured += [100 * (reached / optimum - 1), result.nnz]
    assert documented(strength) == pytest.approx(measured, rel=0.05, abs=0.01)


def documented(strength):
    """The figures in the row of docs/checks.md for a batch strength."""
    rows = CHECKS.read_text(encoding="utf-8").splitlines()
    cells = next(row for row in rows if row.startswith(f"| {strength} |")).replace("%", "").split("|")
    return [float(cell) for cell in cells[2:-1]]


def test_one_pass_finds_the_tokens_that_the_batch_fit_finds(problem, learn):
    weights, _ = problem.fit(50)
    learned, _, _ = learn(l1_per_example=50 / MESSAGES)
    both = np.count_nonzero((weights != 0) & (learned != 0))
    assert 2 * both / (np.count_nonzero(weights) + np.count_nonzero(learned)) > 0.8
    strongest = np.argsort(-np.abs(weights))[:50]
    assert np.array_equal(np.sign(learned[strongest]), np.sign(weights[strongest]))


@pytest.mark.parametrize("penalty", [{}, {"l2": 1.0}, {"l2": 1_000.0}])
def test_without_l1_no_weight_is_exactly_zero(penalty, problem, learn):
    weights, _, result = learn(l1_per_example=0.0, **penalty)
    assert np.count_nonzero(weights) == result.nnz == result.live == len(problem.addresses)


def test_l2_makes_weights_small(problem, learn):
    sizes = [np.abs(learn(l1_per_example=0.0, l2=l2)[0]).sum() for l2 in (0.0, 100.0, 10_000.0)]
    assert sizes[0] > 2 * sizes[1] > 4 * sizes[2]


def test_past_the_largest_useful_strength_every_weight_is_exactly_zero(problem, learn):
    largest = problem.strongest_useful() / MESSAGES
    for times in (1.001, 2.0, 100.0):
        weights, intercept, result = learn(l1_per_example=times * largest)
        assert not weights.any()
        assert result.nnz == 0
        assert expit(intercept) == pytest.approx(problem.y.mean(), abs=0.01)
    weights, _, _ = learn(l1_per_example=0.5 * largest)
    assert 0 < np.count_nonzero(weights) < 10
