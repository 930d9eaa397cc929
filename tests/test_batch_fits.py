"""Batch fits by general libraries: the same optimum from each, its intercept included, and its proof."""

import builtins

import numpy as np
import pytest

from stream.batch_fits import Rows, batch_fit
from stream.errors import BadData, UsageError
from stream.optimality.solving import Columns, solve
from stream.runs.converging.fitting import fitted
from tests.replays import LONG

STRENGTH = 0.02


def rows_of(seed=0, weighted=True, base=-1.5):
    """300 examples over 30 columns, column 7 empty, and every tenth example without any."""
    draw = np.random.default_rng(seed)
    x = (draw.random((300, 30)) < 0.15) * draw.integers(1, 4, (300, 30))
    x[:, 7], x[::10] = 0, 0
    truth = np.where(np.arange(30) < 5, draw.normal(size=30) * 2, 0.0)
    labels = (draw.random(300) < 1 / (1 + np.exp(-(x @ truth + base)))).astype(np.int8)
    row, column = np.nonzero(x)
    row_ptr = np.concatenate([[0], np.cumsum(np.count_nonzero(x, axis=1))])
    weights = draw.uniform(0.5, 2.0, 300) if weighted else np.ones(300)
    values = x[row, column].astype(np.float32)
    return Rows(row_ptr, column.astype(np.int32), values, labels, weights, 30), x.astype(float)


def optimum_of(rows):
    """By the solver of `certify --refine`, which shares nothing with these."""
    columns = rows.columns.astype(np.int64)
    log = Columns.of(columns, rows.row_ptr, rows.values, rows.labels, rows.weights, rows.count)
    return solve(log, np.zeros(rows.count), 0.0, STRENGTH, 1e-12)


def test_sums_over_rows_and_columns_are_those_of_the_matrix():
    rows, x = rows_of()
    weights, each = np.linspace(-1, 1, 30), np.linspace(0, 2, 300)
    assert rows.margins(weights, 0.5) == pytest.approx(x @ weights + 0.5, abs=1e-12)
    assert rows.column_sums(each) == pytest.approx(each @ x, abs=1e-9)
    part = rows.part(100, 160)
    assert part.margins(weights, 0.0) == pytest.approx(x[100:160] @ weights, abs=1e-12)
    squeezed, left = rows.squeezed()
    assert 7 not in left
    assert squeezed.margins(weights[left], 0.0) == pytest.approx(x @ weights, abs=1e-12)


@pytest.mark.parametrize("weighted", [True, False])
@pytest.mark.parametrize("solver", ["liblinear", "saga", pytest.param("skglm", marks=pytest.mark.slow)])
def test_a_batch_fit_is_the_optimum_of_the_mean_loss_with_a_free_intercept(solver, weighted):
    if solver == "skglm" and not LONG:
        pytest.skip("skglm compiles for half a minute: LONG_TESTS=1")
    rows, _ = rows_of(weighted=weighted)
    if solver == "skglm" and weighted:
        with pytest.raises(UsageError, match="no example weights"):
            batch_fit(solver, rows, STRENGTH)
        return
    best = optimum_of(rows)
    found = fitted(solver, rows, STRENGTH, 40)
    assert found.objective == pytest.approx(best.objective, rel=1e-6)
    assert found.lower_bound <= best.objective + 1e-12
    assert found.proved_gap < 1e-3
    assert found.fitted.weights[:30] == pytest.approx(best.weights, abs=1e-3)
    assert np.array_equal(found.fitted.weights[:30] != 0, best.weights != 0)
    assert found.fitted.intercept == pytest.approx(best.intercept, abs=1e-3)
    assert not found.fitted.weights[30:].any()
    assert found.fitted.seconds > 0


def test_a_fit_that_stopped_early_is_not_proved(monkeypatch):
    from stream.batch_fits import fits

    monkeypatch.setitem(fits.SCIKIT_LEARN, "saga", {"tol": 0.3, "max_iter": 1})
    rows, _ = rows_of()
    found = fitted("saga", rows, STRENGTH, 30)
    assert found.proved_gap > 1e-2
    assert found.lower_bound <= optimum_of(rows).objective < found.objective


def test_messages_with_one_outcome_alone_have_no_batch_fit():
    rows, _ = rows_of(base=-60.0)
    with pytest.raises(BadData, match="outcomes are the same"):
        fitted("liblinear", rows, STRENGTH, 30)


@pytest.mark.parametrize(
    ("solver", "missing"), [("liblinear", "sklearn"), ("saga", "sklearn"), ("skglm", "skglm")]
)
def test_without_the_library_the_cure_is_told(solver, missing, monkeypatch):
    there = builtins.__import__

    def gone(name, *others):
        if name.split(".")[0] == missing:
            raise ImportError(name)
        return there(name, *others)

    monkeypatch.setattr(builtins, "__import__", gone)
    with pytest.raises(UsageError, match=r"bedload\[batch\]"):
        batch_fit(solver, rows_of()[0], STRENGTH)
