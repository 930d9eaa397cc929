"""Tuning against a batch path of real data: UCI Spambase, scikit-learn's L1 logistic regression.

4601 messages x 57 columns ln(x + 0.1), standardised, by `numpy.random.default_rng(0).permutation`, since the
file has one class first. Minimised: mean(log loss) + strength * sum |w|, the intercept free. Fifty epochs of
all strengths are learned at once, from a log of fifty files that are one and the same; that this is what
`replay --epochs 50` does is tested with one strength. docs/checks.md has the figures.
"""

import json
from pathlib import Path

import numpy as np
import pytest
from scipy.special import expit
from sklearn.linear_model import LogisticRegression

from stream.runs.replay import replay
from stream.runs.tuning.first_pass import count, find_strongest
from stream.runs.tuning.grid import Grid, blocks_of, candidates
from stream.runs.tuning.keeping import KeptTrials
from stream.runs.tuning.merging import merge
from stream.runs.tuning.passes import groups_of
from stream.runs.tuning.tune import Job, tune
from stream.settings import Settings
from stream.snapshots import read_snapshot
from stream.token_names import field_and_token
from tests.spambase import spambase_or_skip

pytestmark = pytest.mark.slow

LAMBDA_MAX = 0.27617925654
"""max_j |x_j.(y - mean y)| / N, computed with numpy."""
EPOCHS = 50
SHARES = tuple(float(share) for share in np.geomspace(0.5, 0.05, 10))
SETS = (0.5, 0.2, 0.1)
STRONG = (0.99, 0.9, 0.8, 0.65)
"""Shares of lambda_max: where the objective is compared, where the non-zero sets are; where paths begin."""
ALL = sorted({*SHARES, *SETS, *STRONG}, reverse=True)
CHECKS = Path(__file__).parent.parent / "docs" / "checks.md"


@pytest.fixture(scope="module")
def spambase():
    x, y, names = spambase_or_skip()
    order = np.random.default_rng(0).permutation(len(y))
    return x[order], y[order], names


@pytest.fixture(scope="module")
def folder(spambase, tmp_path_factory):
    folder = tmp_path_factory.mktemp("spambase")
    x, y, names = spambase
    with (folder / "epoch-01.jsonl").open("w", encoding="utf-8") as log:
        for row, label in zip(x.tolist(), y.tolist(), strict=True):
            log.write(json.dumps({**dict(zip(names, row, strict=True)), "spam": label}) + "\n")
    for epoch in range(2, EPOCHS + 1):
        (folder / f"epoch-{epoch:02}.jsonl").symlink_to("epoch-01.jsonl")
    return folder


def settings_for(spambase, folder, files, strength=1e-4):
    return Settings.model_validate(
        {
            "feed": {"paths": [str(folder / files)]},
            "message": {"label": "spam"},
            "fields": [{"path": name, "kind": "quantity"} for name in spambase[2]],
            "learner": {"learning_rate": 0.05, "l1_per_example": strength},
        }
    )


class BatchPath:
    """Optima of the batch problem, by share of lambda_max."""

    def __init__(self, x, y):
        self.x, self.y = x, y
        self.optima = {share: self._fit(share * LAMBDA_MAX) for share in ALL}

    def _fit(self, strength):
        """Weights and intercept, which liblinear presses on a little, and which is solved for afterwards."""
        solver = LogisticRegression(
            l1_ratio=1.0,
            C=1 / (strength * len(self.y)),
            solver="liblinear",
            intercept_scaling=100.0,
            tol=1e-9,
            max_iter=10_000,
            random_state=0,
        )
        solver.fit(self.x, self.y)
        weights, intercept = solver.coef_[0], float(solver.intercept_[0])
        for _ in range(20):
            p = expit(self.x @ weights + intercept)
            intercept += (self.y - p).sum() / (p * (1 - p)).sum()
        return weights, intercept

    def objective(self, weights, intercept, share):
        margins = self.x @ weights + intercept
        return (
            np.mean(np.logaddexp(0, margins) - self.y * margins) + share * LAMBDA_MAX * np.abs(weights).sum()
        )

    def pressure(self, share):
        """|x.(y - p)| / N of each column at the optimum, over the strength: 1 where a weight is not zero."""
        weights, intercept = self.optima[share]
        residuals = self.y - expit(self.x @ weights + intercept)
        return np.abs(self.x.T @ residuals) / len(self.y) / (share * LAMBDA_MAX)


@pytest.fixture(scope="module")
def batch(spambase):
    return BatchPath(*spambase[:2])


@pytest.fixture(scope="module")
def tuned(spambase, folder, tmp_path_factory):
    """The document of a tune over fifty epochs, with a strength for each share, and the weights behind it."""
    grid, trials = Grid(tuple(share * LAMBDA_MAX for share in ALL)), tmp_path_factory.mktemp("trials")
    settings = settings_for(spambase, folder, "epoch-*.jsonl")
    found = tune(settings, trials, Job(grid))
    facts = count(settings, lambda *_: None)
    plan = blocks_of(facts.messages)
    kept = KeptTrials(trials, settings, found["log"]["digest"], plan)
    parts = [kept.load(group) for group in groups_of(candidates(grid, settings.learner, facts))]
    return found, merge(parts).weights


@pytest.fixture(scope="module")
def online(spambase, tuned):
    """float64[57] weights and the intercept after fifty epochs, by share of lambda_max."""
    document, weights = tuned
    names = [field_and_token(name)[0] for name in weights.names]
    columns = [spambase[2].index(name) for name in names]
    found = {}
    for share in ALL:
        lane = int(np.argmin(np.abs(np.array(document["paths"]["strengths"]) - share * LAMBDA_MAX)))
        dense = np.zeros(len(spambase[2]))
        dense[columns] = weights.values[:, lane]
        found[share] = dense, float(weights.intercepts[lane])
    return found


def test_the_strongest_strength_is_lambda_max(spambase, folder):
    x, y, _ = spambase
    assert np.abs(x.T @ (y - y.mean())).max() / len(y) == pytest.approx(LAMBDA_MAX, rel=1e-9)
    facts = find_strongest(settings_for(spambase, folder, "epoch-01.jsonl"), lambda *_: None)
    assert facts.strongest == pytest.approx(LAMBDA_MAX, abs=1e-6)
    assert (facts.messages, facts.coordinates) == (4601, 57)


def test_a_replay_of_fifty_epochs_ends_with_the_weights_of_its_strength(spambase, folder, online, tmp_path):
    share = 0.1
    settings = settings_for(spambase, folder, "epoch-01.jsonl", share * LAMBDA_MAX)
    weights = read_snapshot(replay(settings, tmp_path / "state", epochs=EPOCHS).snapshot).weights
    found = {
        field_and_token(name)[0]: value
        for name, value in zip(weights.names, weights.values.tolist(), strict=True)
    }
    dense, intercept = online[share]
    assert found == {spambase[2][column]: dense[column] for column in np.flatnonzero(dense)}
    assert weights.intercept == intercept


def test_fifty_epochs_end_within_a_ten_thousandth_of_the_batch_optimum(batch, online):
    rows = []
    for share in SHARES:
        optimum = batch.objective(*batch.optima[share], share)
        above = batch.objective(*online[share], share) / optimum - 1
        assert 0 <= above <= 1e-4, share
        kept = [np.count_nonzero(weights) for weights, _ in (batch.optima[share], online[share])]
        rows.append(f"| {share:.3f} | {optimum:.6f} | {above:.1e} | {kept[0]} | {kept[1]} |")
    page = CHECKS.read_text(encoding="utf-8")
    assert all(row in page for row in rows), "\n".join(rows)


@pytest.mark.parametrize("share", SETS)
def test_the_non_zero_columns_are_those_of_the_batch_optimum(spambase, batch, online, share):
    one, other = batch.optima[share][0] != 0, online[share][0] != 0
    at_the_edge = np.abs(batch.pressure(share) - 1) < 0.01
    free = at_the_edge & (batch.optima[share][0] == 0)
    differ = (one != other) & ~free
    assert [spambase[2][column] for column in np.flatnonzero(differ)] == []
    assert one.sum() >= 7


def test_in_the_path_picture_a_column_enters_and_as_the_strength_falls_another_overtakes_it(
    tuned, batch, spambase
):
    """`charExclamation` has the first weight; `hp` enters later and ends as the largest, in both paths."""
    names, paths = spambase[2], tuned[0]["paths"]
    assert paths["strengths"] == [share * LAMBDA_MAX for share in ALL]
    drawn = {token["field"]: np.abs(token["weights"]) for token in paths["tokens"]}
    optimal = dict(zip(names, np.abs([batch.optima[share][0] for share in ALL]).T, strict=True))
    for path in (drawn, optimal):
        first, later = path["charExclamation"], path["hp"]
        assert [name for name in path if path[name][0]] == ["charExclamation"]
        entry = int(np.flatnonzero(later)[0])
        assert entry > 0 and later[entry] < first[entry]
        assert later[-1] > first[-1]
        assert max(path, key=lambda name: path[name][-1]) == "hp"
