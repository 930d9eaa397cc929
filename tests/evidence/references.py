"""A dense problem and strengths in, what each batch solver finds at every strength out.

Minimised: mean(log loss) + strength * sum |w|, the intercept free. Each solver has units of its own. To
liblinear and saga, C is 1 / (strength * N); liblinear presses on its intercept as on a column of its scale,
so that is made large and the best intercept solved for afterwards. skglm and glmnet take the strength itself.
"""

import os
import shutil
import subprocess
import sys
import tempfile
from pathlib import Path

import numpy as np
import pytest
from scipy.special import expit
from sklearn.linear_model import LogisticRegression

from stream.optimality.solving import Columns, solve
from tests.spambase import spambase_or_skip

__all__ = ["SHARES", "SOLVERS", "by_bedload", "columns_of", "compare", "objective", "strongest"]

HERE = Path(__file__).parent
NO_GLMNET = 3
"""Exit code of the script."""
ALONE = {"NUMBA_DISABLE_JIT": "1", "OMP_NUM_THREADS": "1", "OPENBLAS_NUM_THREADS": "1"}
SHARES = np.geomspace(0.5, 0.001, 20)
"""Of the strength from which on there is no weight: 7 of 57 weights at the strongest, 56 at the weakest."""


def objective(x, y, weights, intercept, strength):
    """The one arithmetic by which all are judged: x float64[m, n], y bool[m], weights float64[n]."""
    margins = x @ weights + intercept
    losses = np.maximum(margins, 0) - y * margins + np.log1p(np.exp(-np.abs(margins)))
    return float(losses.mean() + strength * np.abs(weights).sum())


def strongest(x, y):
    """From this strength on the optimum has no weight."""
    return float(np.abs(x.T @ (y - y.mean())).max() / len(y))


def columns_of(x, y):
    """A dense problem as columns, its values as they are."""
    m, n = x.shape
    rows = np.tile(np.arange(m, dtype=np.int32), n)
    return Columns(np.arange(0, m * n + 1, m), rows, x.T.ravel(), y.astype(np.int8), np.ones(m))


def by_bedload(x, y, strengths, tolerance=1e-9):
    """Solutions of the solver behind `certify --refine`, each from where the one before ended."""
    log, weights, intercept, found = columns_of(x, y), np.zeros(x.shape[1]), 0.0, []
    for strength in strengths:
        found.append(solve(log, weights, intercept, strength, tolerance))
        weights, intercept = found[-1].weights, found[-1].intercept
    return found


def by_liblinear(x, y, strengths):
    """scikit-learn's; (weights, intercept) of each strength."""
    found = []
    for strength in strengths:
        solver = LogisticRegression(
            l1_ratio=1.0,
            C=1 / (strength * len(y)),
            solver="liblinear",
            intercept_scaling=1000.0,
            tol=1e-6,
            max_iter=10_000,
            random_state=0,
        ).fit(x, y)
        found.append((solver.coef_[0], best_intercept(x, y, solver.coef_[0], solver.intercept_[0])))
    return found


def by_saga(x, y, strengths):
    """scikit-learn's."""
    found = []
    for strength in strengths:
        solver = LogisticRegression(
            l1_ratio=1.0, C=1 / (strength * len(y)), solver="saga", tol=1e-5, max_iter=10_000, random_state=0
        ).fit(x, y)
        found.append((solver.coef_[0], float(solver.intercept_[0])))
    return found


def best_intercept(x, y, weights, intercept):
    """Newton's method, the weights held."""
    margins = x @ weights
    for _ in range(20):
        p = expit(margins + intercept)
        intercept += (y - p).sum() / (p * (1 - p)).sum()
    return float(intercept)


def by_skglm(x, y, strengths):
    """In a process of its own, uncompiled: it compiles anew at each start, which takes half a minute."""
    with tempfile.TemporaryDirectory() as folder:
        problem, answer = Path(folder) / "problem.npz", Path(folder) / "answer.npy"
        np.savez(problem, x=x, y=y, strengths=strengths)
        _run([sys.executable, str(HERE / "skglm_path.py"), str(problem), str(answer)])
        return [(row[1:], float(row[0])) for row in np.load(answer)]


def by_glmnet(x, y, strengths):
    """Debian's r-cran-glmnet. Where it is not there: skipped, or failed under BEDLOAD_REQUIRE_R=1 (CI's)."""
    if shutil.which("Rscript") is None:
        _give_up("there is no Rscript (Debian: apt-get install r-base-core r-cran-glmnet)")
    with tempfile.TemporaryDirectory() as folder:
        numbers, answer = Path(folder) / "numbers", Path(folder) / "answer"
        parts = [np.array(x.shape, float), np.array([len(strengths)], float), y.astype(float), x.T.ravel()]
        np.concatenate([*parts, strengths]).tofile(numbers)
        command = ["Rscript", "--vanilla", str(HERE / "glmnet_path.R"), str(numbers), str(answer)]
        if _run(command, fine=(0, NO_GLMNET)) == NO_GLMNET:
            _give_up("R has no glmnet (Debian: apt-get install r-cran-glmnet)")
        rows = np.fromfile(answer).reshape(len(strengths), x.shape[1] + 1)
        return [(row[1:], float(row[0])) for row in rows]


def _give_up(trouble):
    if os.environ.get("BEDLOAD_REQUIRE_R") == "1":
        pytest.fail(f"BEDLOAD_REQUIRE_R=1, but {trouble}")
    pytest.skip(f"NOT TESTED, for want of glmnet: {trouble}")


def compare():
    """Prints how far the objective of each is from that of the refined optimum, over Spambase's path."""
    x, y, _ = spambase_or_skip()
    strengths = SHARES * strongest(x, y)
    ours = by_bedload(x, y, strengths)
    optima = [
        objective(x, y, one.weights, one.intercept, strength)
        for one, strength in zip(ours, strengths, strict=True)
    ]
    print(f"refined: gap at most {max(one.gap / one.objective for one in ours):.1e} of the objective")
    for name, solver in SOLVERS.items():
        theirs = zip(solver(x, y, strengths), strengths, optima, strict=True)
        off = [objective(x, y, *found, strength) / optimum - 1 for found, strength, optimum in theirs]
        print(f"{name}: {min(off):.1e} to {max(off):.1e} of the objective above", flush=True)


def _run(command, fine=(0,)):
    environment = {**os.environ, **ALONE}
    done = subprocess.run(command, env=environment, capture_output=True, text=True, timeout=300)
    assert done.returncode in fine, done.stderr
    return done.returncode


SOLVERS = {"glmnet": by_glmnet, "skglm": by_skglm, "liblinear": by_liblinear, "saga": by_saga}
