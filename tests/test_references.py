"""The refined optimum of Spambase's path against solvers that share nothing with ours, and by the command.

Every objective is computed by `objective` of tests/evidence/references.py, in float64, on the exact columns.
"""

import json

import numpy as np
import pytest
from threadpoolctl import threadpool_limits

from stream.cli.main import main
from stream.optimality.solving import solve
from stream.snapshots import read_snapshot
from stream.token_names import field_and_token
from tests.evidence.references import SHARES, SOLVERS, by_bedload, columns_of, objective, strongest
from tests.spambase import spambase_or_skip

pytestmark = pytest.mark.slow


@pytest.fixture(scope="module", autouse=True)
def one_thread():
    """Two would wait for each other more than they work, at 57 columns."""
    with threadpool_limits(1):
        yield


PUBLISHED = 0.357061012506
"""The optimum at a tenth, computed for this project with general libraries."""


@pytest.fixture(scope="module")
def spambase():
    x, y, names = spambase_or_skip()
    return x, y, names, strongest(x, y)


@pytest.fixture(scope="module")
def refined(spambase):
    x, y, _, most = spambase
    return by_bedload(x, y, SHARES * most)


@pytest.mark.parametrize("solver", ["liblinear", "skglm", "glmnet"])
def test_at_20_strengths_other_solvers_agree_with_the_refined_optimum(solver, spambase, refined):
    x, y, _, most = spambase
    theirs = SOLVERS[solver](x, y, SHARES * most)
    for share, ours, (weights, intercept) in zip(SHARES, refined, theirs, strict=True):
        optimum = objective(x, y, ours.weights, ours.intercept, share * most)
        assert objective(x, y, weights, intercept, share * most) == pytest.approx(optimum, rel=1e-6), share
        assert objective(x, y, weights, intercept, share * most) >= ours.bound, share


def test_the_refined_optimum_is_proved_and_its_objective_is_the_plain_one(spambase, refined):
    x, y, _, most = spambase
    for share, ours in zip(SHARES, refined, strict=True):
        assert ours.gap <= 1e-8 * ours.objective, share
        plain = objective(x, y, ours.weights, ours.intercept, share * most)
        assert ours.objective == pytest.approx(plain, abs=1e-12), share
    assert [np.count_nonzero(refined[i].weights) for i in (0, -1)] == [7, 56]


def test_saga_agrees_at_a_tenth_and_so_does_the_published_optimum(spambase):
    x, y, _, most = spambase
    ours = solve(columns_of(x, y), np.zeros(x.shape[1]), 0.0, 0.1 * most, 1e-12)
    assert objective(x, y, ours.weights, ours.intercept, 0.1 * most) == pytest.approx(PUBLISHED, abs=1e-11)
    ((weights, intercept),) = SOLVERS["saga"](x, y, [0.1 * most])
    assert objective(x, y, weights, intercept, 0.1 * most) == pytest.approx(PUBLISHED, rel=1e-6)


@pytest.fixture(scope="module")
def learned(spambase, tmp_path_factory):
    """A folder with the rows as messages, settings for them and the state of one replay."""
    folder = tmp_path_factory.mktemp("spambase")
    x, y, names, most = spambase
    with (folder / "log.jsonl").open("w", encoding="utf-8") as log:
        for i in np.random.default_rng(0).permutation(len(y)):
            log.write(json.dumps({**dict(zip(names, x[i].tolist(), strict=True)), "spam": bool(y[i])}) + "\n")
    fields = "".join(f'[[fields]]\npath = "{name}"\nkind = "quantity"\n' for name in names)
    (folder / "bedload.toml").write_text(
        f'[feed]\npaths = ["log.jsonl"]\n[message]\nlabel = "spam"\n{fields}'
        f"[learner]\nlearning_rate = 0.05\nl1_per_example = {0.1 * most!r}\n"
    )
    assert (
        main(["replay", "--config", str(folder / "bedload.toml"), "--state", str(folder / "state"), "--json"])
        == 0
    )
    return folder


@pytest.mark.parametrize("share", [0.1, 0.02])
def test_certify_refines_a_log_of_these_rows_to_the_same_optimum(
    share, spambase, learned, tmp_path, monkeypatch, capsys
):
    """Columns reach the learner as float32, so it solves a problem that is off by some 1e-10."""
    x, y, names, most = spambase
    monkeypatch.chdir(learned)
    capsys.readouterr()
    refining = ["certify", "--config", "bedload.toml", "--state", "state", "--refine", "--json"]
    assert main([*refining, "--strength", repr(share * most), "--out", str(tmp_path / "optimum")]) == 0
    found = json.loads(capsys.readouterr().out)
    optimum = solve(columns_of(x, y), np.zeros(x.shape[1]), 0.0, share * most, 1e-10).objective
    if share == 0.1:
        assert optimum == pytest.approx(PUBLISHED, abs=1e-10)
    assert found["lower_bound"] < optimum < found["objective"]
    assert found["refined_objective"] == pytest.approx(optimum, abs=1e-9)
    assert found["refined_gap"] <= 1e-6 * found["refined_objective"]
    weights = read_snapshot(tmp_path / "optimum").weights
    dense = np.zeros(len(names))
    dense[[names.index(field_and_token(name)[0]) for name in weights.names]] = weights.values
    reached = objective(x, y, dense, weights.intercept, share * most)
    assert reached == pytest.approx(optimum, abs=1e-9)


def test_where_r_has_no_glmnet_the_comparison_is_skipped_out_loud_or_fails_in_ci(monkeypatch):
    monkeypatch.setenv("PATH", "/nowhere")
    monkeypatch.setenv("BEDLOAD_REQUIRE_R", "0")
    with pytest.raises(pytest.skip.Exception, match=r"NOT TESTED.*no Rscript.*r-cran-glmnet"):
        SOLVERS["glmnet"](np.zeros((2, 1)), np.zeros(2, bool), [1.0])
    monkeypatch.setenv("BEDLOAD_REQUIRE_R", "1")
    with pytest.raises(pytest.fail.Exception, match=r"BEDLOAD_REQUIRE_R=1.*no Rscript"):
        SOLVERS["glmnet"](np.zeros((2, 1)), np.zeros(2, bool), [1.0])
