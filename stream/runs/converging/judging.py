"""Weights and the rows that they were fitted to in; objective, loss on fresh messages and support out."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from stream.batch_fits import Rows
from stream.optimality.bound import (
    DualPoint,
    best_intercept,
    entropies,
    log_losses,
    lower_bound,
    residuals_of,
)
from stream.runs.converging.held import Held
from stream.runs.converging.job import Known
from stream.runs.tuning.truth import Planted, Truth, planted_at
from stream.settings import Settings

__all__ = ["Fitted", "Judge", "Support", "agreement", "excess", "mean_loss", "proved", "with_best_intercept"]

Floats = npt.NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class Fitted:
    """Weights float64[columns of the log] and intercept, and the `seconds` they took."""

    weights: Floats
    intercept: float
    seconds: float


@dataclass(frozen=True, slots=True)
class Support:
    """How the non-zero weights agree with those of a reference; None where there is nothing to divide by."""

    precision: float | None
    recall: float | None

    @property
    def f1(self) -> float | None:
        """Their harmonic mean."""
        p, r = self.precision, self.recall
        if p is None or r is None:
            return None
        return 2 * p * r / (p + r) if p + r > 0 else 0.0

    def to_json(self) -> dict[str, Any]:
        """As JSON types."""
        return {"precision": self.precision, "recall": self.recall, "f1": self.f1}


def agreement(found: npt.NDArray[np.bool_], wanted: npt.NDArray[np.bool_]) -> Support:
    """Of columns found and columns wanted, bool[n] each."""
    both, here, there = (int(np.count_nonzero(a)) for a in (found & wanted, found, wanted))
    return Support(both / here if here else None, both / there if there else None)


def mean_loss(rows: Rows, weights: Floats, intercept: float) -> float:
    """Mean log loss of the rows, nats, by example weight."""
    losses = log_losses(rows.margins(weights, intercept), rows.labels)
    return float(np.average(losses, weights=rows.weights))


def excess(rows: Rows, weights: Floats, intercept: float, shares: Floats) -> float:
    """What the weights lose more than the true shares of yes, float64[m], on average over the outcomes' true
    distribution: a mean of Kullback-Leibler divergences, free of the luck of the outcomes."""
    margins = rows.margins(weights, intercept)
    return float(
        np.average(np.logaddexp(0.0, margins) - shares * margins - entropies(shares), weights=rows.weights)
    )


def with_best_intercept(rows: Rows, weights: Floats, intercept: float) -> float:
    """The intercept that fits the rows best; a solver that presses on it a little leaves it beside that."""
    return intercept + best_intercept(rows.margins(weights, intercept), rows.labels, rows.weights)


def proved(rows: Rows, weights: Floats, intercept: float, strength: float) -> float:
    """No weights at all have a lower objective than this, for an intercept that fits the rows best."""
    margins, one = rows.margins(weights, intercept), rows.labels == 1
    residuals = rows.weights * residuals_of(margins, rows.labels)
    up = rows.column_sums(np.where(one, residuals, 0.0))
    down = rows.column_sums(np.where(one, 0.0, residuals))
    return lower_bound(DualPoint.of(margins, rows.labels, rows.weights, up, down), strength).value


class Judge:
    """Judges weights by the messages of one log that come after those they were fitted to."""

    def __init__(self, held: Held, fresh: tuple[int, int], settings: Settings, known: Known | None) -> None:
        self._held, self._settings, self._known = held, settings, known
        self._fresh = held.part(*fresh)
        numbers = held.numbers[held.row_after(fresh[0]) : held.row_after(fresh[1])]
        self._shares = known.shares[numbers] if known else None
        self._places: dict[tuple[Planted, ...], list[frozenset[int]]] = {}

    def objective(self, rows: Rows, fitted: Fitted, strength: float) -> float:
        """Mean log loss and penalty, nats a message."""
        penalty = strength * float(np.abs(fitted.weights).sum())
        return mean_loss(rows, fitted.weights, fitted.intercept) + penalty

    def figures(self, fitted: Fitted, messages: int) -> dict[str, Any]:
        """What can be said of weights that were fitted to so many messages without another fit."""
        loss = more = None
        if len(self._fresh):
            loss = mean_loss(self._fresh, fitted.weights, fitted.intercept)
            if self._shares is not None:
                more = excess(self._fresh, fitted.weights, fitted.intercept, self._shares)
        truth = None if self._known is None else self._against_truth(fitted, self._known, messages)
        return {
            "nnz": int(np.count_nonzero(fitted.weights)),
            "fresh_log_loss": loss,
            "excess_log_loss": more,
            "against_truth": None if truth is None else truth.to_json(),
        }

    def _against_truth(self, fitted: Fitted, known: Known, messages: int) -> Support:
        """By address: a planted token is found where one of its addresses is not zero."""
        places = self._planted(known.planted(messages - 1))
        kept = set(self._held.addresses[fitted.weights != 0].tolist())
        found = sum(not kept.isdisjoint(place) for place in places)
        right = len(kept & frozenset().union(*places))
        return Support(right / len(kept) if kept else None, found / len(places) if places else None)

    def _planted(self, planted: tuple[Planted, ...]) -> list[frozenset[int]]:
        if planted not in self._places:
            self._places[planted] = planted_at(self._settings, Truth(0.0, planted, 0.0))
        return self._places[planted]
