"""Rows and a strength in; the weights of a batch fit, and how far it can be from the optimum, out."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from stream.batch_fits import Rows, batch_fit
from stream.batch_fits.fits import Solver
from stream.errors import BadData
from stream.runs.converging.judging import Fitted, mean_loss, proved, with_best_intercept

__all__ = ["Optimum", "fitted"]

LOOSE = 0.01
"""Proved gap past which gaps against a batch fit say little."""


@dataclass(frozen=True, slots=True)
class Optimum:
    """A batch fit of some rows; no weights have an objective below `lower_bound`, nats a message."""

    fitted: Fitted
    objective: float
    lower_bound: float

    @property
    def proved_gap(self) -> float:
        """The fit is at most this share of its objective above the optimum."""
        return max(self.objective - self.lower_bound, 0.0) / self.objective

    @property
    def loose(self) -> bool:
        """It is proved too loosely to measure gaps against."""
        return self.proved_gap > LOOSE


def fitted(solver: Solver, rows: Rows, strength: float, columns: int) -> Optimum:
    """The batch fit, with the intercept that fits best. `columns`: of the whole log.

    Raises BadData where the rows have one outcome only, or none.
    """
    if not len(rows):
        raise BadData(
            "none of these messages has an outcome (message.label): a batch fit needs some. Look later "
            "(--at), or cut fewer windows (--windows)"
        )
    if not 0 < int(rows.labels.sum()) < len(rows):
        raise BadData(
            f"all {len(rows):,} outcomes are the same: a batch fit needs some of both kinds. Look "
            "later (--at), or cut fewer windows (--windows)"
        )
    squeezed, there = rows.squeezed()
    found = batch_fit(solver, squeezed, strength)
    weights = np.zeros(columns)
    weights[there] = found.weights
    intercept = with_best_intercept(rows, weights, found.intercept)
    objective = mean_loss(rows, weights, intercept) + strength * float(np.abs(weights).sum())
    bound = proved(rows, weights, intercept, strength)
    return Optimum(Fitted(weights, intercept, found.seconds), objective, bound)
