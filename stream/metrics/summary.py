"""Sums of one scope in, metrics out: what is reported for a run, a window or a slice."""

from __future__ import annotations

from dataclasses import asdict, dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from stream.metrics.auc_kernel import compare_pairs
from stream.metrics.tally_kernel import POSITIVE, PROBABILITY, WEIGHT, entropy

__all__ = ["Summary", "WindowRow", "summarise"]

Floats = npt.NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class Summary:
    """Metrics of predictions made before each update; None where undefined. docs/metrics.md has the formulas.

    Counts are of messages; everything else is weighted by example weight. `log_loss` in nats;
    the true AUC lies within `auc` ± `auc_error`, where every exactly tied pair adds to the error;
    `auc_error_untied` leaves those out and still holds for an AUC that counts ties one half.
    """

    messages: int
    rejected: int
    labelled: int
    positives: int
    log_loss: float | None
    normalised_entropy: float | None
    auc: float | None
    auc_error: float | None
    auc_error_untied: float | None
    calibration_ratio: float | None
    expected_calibration_error: float | None
    base_rate: float | None

    def to_json(self) -> dict[str, Any]:
        """The fields by name, as JSON types; undefined is None."""
        return asdict(self)


@dataclass(frozen=True, slots=True)
class WindowRow:
    """One window: messages of the run when it closed (rejected ones too), metrics, sizes of the model."""

    through: int
    summary: Summary
    nnz: int
    live: int

    def to_json(self) -> dict[str, Any]:
        """One flat mapping: through, the metrics of the window, nnz, live."""
        return {"through": self.through, **self.summary.to_json(), "nnz": self.nnz, "live": self.live}


def summarise(counts: npt.NDArray[np.int64], loss: float, bins: Floats, entries: Floats) -> Summary:
    """Metrics of one scope; arrays as in `tally_kernel`, and scores as `auc_kernel.joined` gives them."""
    messages, rejected, labelled, positives = (int(count) for count in counts)
    weight = _sum(bins[:, WEIGHT])
    positive = _sum(bins[:, POSITIVE])
    predicted = _sum(bins[:, PROBABILITY])
    log_loss = loss / weight if weight > 0 else None
    base_rate = positive / weight if weight > 0 else None
    entropy_of_rate = entropy(positive, weight - positive) if 0.0 < positive < weight else None
    auc, auc_error, auc_error_untied = _auc(entries)
    gaps = _sum(np.abs(bins[:, POSITIVE] - bins[:, PROBABILITY]))
    return Summary(
        messages=messages,
        rejected=rejected,
        labelled=labelled,
        positives=positives,
        log_loss=log_loss,
        normalised_entropy=log_loss / entropy_of_rate if log_loss is not None and entropy_of_rate else None,
        auc=auc,
        auc_error=auc_error,
        auc_error_untied=auc_error_untied,
        calibration_ratio=predicted / positive if positive > 0 else None,
        expected_calibration_error=gaps / weight if weight > 0 else None,
        base_rate=base_rate,
    )


def _sum(values: Floats) -> float:
    """In order from the first, so that no library's way of pairing terms matters."""
    total = 0.0
    for value in values.tolist():
        total += value
    return total


def _auc(entries: Floats) -> tuple[float | None, float | None, float | None]:
    """AUC, half the undecided share of pairs, and the same without exact ties."""
    if len(entries) == 0:
        return None, None, None
    won, undecided, tied, pairs = compare_pairs(entries)
    if not pairs > 0.0:
        return None, None, None
    return (won + 0.5 * undecided) / pairs, 0.5 * undecided / pairs, 0.5 * max(undecided - tied, 0.0) / pairs
