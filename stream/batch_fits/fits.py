"""Rows and a strength in, the L1 logistic fit of a general library out.

All minimise (1/W) sum o loss + strength * sum |w| with a free intercept; scikit-learn says
C = 1 / (strength W). liblinear presses on its intercept too: an intercept column of INTERCEPT_SCALE makes
that a thousandth. How near a fit came to the optimum is for the caller to prove.
"""

from __future__ import annotations

import time
import warnings
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from typing import Any, Literal

import numpy as np
import numpy.typing as npt

from stream.batch_fits.rows import Rows
from stream.errors import UsageError

__all__ = ["BatchFit", "Solver", "batch_fit", "refuse_missing"]

Solver = Literal["liblinear", "saga", "skglm"]
INTERCEPT_SCALE = 1_000.0
SCIKIT_LEARN: dict[str, dict[str, Any]] = {
    "liblinear": {"tol": 1e-7, "max_iter": 2_000, "intercept_scaling": INTERCEPT_SCALE},
    "saga": {"tol": 1e-6, "max_iter": 2_000},
}
SKGLM_TOLERANCE = 1e-7


@dataclass(frozen=True, slots=True)
class BatchFit:
    """Weights float64[count] and intercept; `seconds`: from rows to weights."""

    weights: npt.NDArray[np.float64]
    intercept: float
    seconds: float


def batch_fit(solver: Solver, rows: Rows, strength: float) -> BatchFit:
    """Fits the rows, which must have both labels. `strength`: per unit of example weight, > 0.

    Raises UsageError where the library is missing, or cannot do what is asked.
    """
    refuse_missing(solver)
    with _quiet():
        return _skglm(rows, strength) if solver == "skglm" else _scikit_learn(solver, rows, strength)


def refuse_missing(solver: Solver) -> None:
    """Raises UsageError where the library is not installed."""
    library = "skglm" if solver == "skglm" else "scikit-learn"
    try:
        import scipy.sparse
        import sklearn.linear_model

        if solver == "skglm":
            import skglm  # noqa: F401
    except ImportError:
        raise UsageError(
            f"a batch fit by {solver} needs {library}, which is not installed: install bedload[batch]"
        ) from None
    del scipy, sklearn


@contextmanager
def _quiet() -> Iterator[None]:
    """Without a word about convergence, which the caller measures."""
    from sklearn.exceptions import ConvergenceWarning

    with warnings.catch_warnings():
        warnings.simplefilter("ignore", ConvergenceWarning)
        yield


def _matrix(rows: Rows) -> Any:
    from scipy.sparse import csr_matrix

    shape = (len(rows), rows.count)
    return csr_matrix((rows.values.astype(np.float64), rows.columns, rows.row_ptr.astype(np.int32)), shape)


def _scikit_learn(solver: Solver, rows: Rows, strength: float) -> BatchFit:
    from sklearn.linear_model import LogisticRegression

    matrix = _matrix(rows)
    began = time.perf_counter()
    model = LogisticRegression(
        solver=solver,
        l1_ratio=1.0,
        C=1.0 / (strength * float(rows.weights.sum())),
        random_state=0,
        **SCIKIT_LEARN[solver],
    )
    model.fit(matrix, rows.labels, rows.weights)
    seconds = time.perf_counter() - began
    return BatchFit(np.asarray(model.coef_[0], np.float64), float(model.intercept_[0]), seconds)


def _skglm(rows: Rows, strength: float) -> BatchFit:
    from skglm.datafits import Logistic
    from skglm.penalties import L1
    from skglm.solvers import ProxNewton

    if np.ptp(rows.weights) > 0:
        raise UsageError("skglm's logistic loss takes no example weights: choose liblinear or saga")
    solver = ProxNewton(tol=SKGLM_TOLERANCE, max_iter=100, fit_intercept=True)

    def solve(some: Rows) -> npt.NDArray[np.float64]:
        signs = np.where(some.labels == 1, 1.0, -1.0)
        found, _, _ = solver.solve(_matrix(some).tocsc(), signs, Logistic(), L1(strength))
        return np.asarray(found, np.float64)

    solve(rows.part(0, min(len(rows), 100)))  # it compiles as it meets its first problem
    began = time.perf_counter()
    found = solve(rows)
    return BatchFit(found[:-1], float(found[-1]), time.perf_counter() - began)
