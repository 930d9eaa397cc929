"""A snapshot and a log in; its objective, gradients and a bound on the batch optimum out, in two passes.

Pass one scores the log with the snapshot, takes gradient and curvature of every coordinate, and keeps an even
sample of rows. From these come weights much nearer to the optimum (`nearby`), and with them which coordinates
are near the limit that their gradient has there. Pass two takes the residuals and gradients of those
weights, and keeps rows that hold such coordinates. The bound is made of these residuals once those of the
rows kept are moved so that every coordinate fits (`repaired`): scaling them all down is valid too but tells
little. Pass two also takes names and exact gradients, with the intercept made optimal, of what seemed worst.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from pathlib import Path

import numpy as np
import numpy.typing as npt

from stream.batch import Batch
from stream.errors import BadData
from stream.optimality.bound import (
    Bound,
    DualPoint,
    best_intercept,
    log_losses,
    lower_bound,
    probabilities,
)
from stream.optimality.held_rows import EvenSample, HeldRows
from stream.optimality.nearby import Nearby, Sums, nearby
from stream.optimality.repairing import repaired
from stream.optimality.sums_kernel import add_and_keep, add_sums, begin_again, gather_sums
from stream.runs.certifying.log import Log, Progress, Scored
from stream.runs.certifying.worst import Watched, Worst
from stream.settings import Settings
from stream.settings.models import State
from stream.tables import Table
from stream.tables.lookup import Lookup
from stream.weights import Weights

__all__ = ["Findings", "examine"]

SAMPLE_ROWS = 20_000
SAMPLE_ENTRIES = 1_500_000
KEPT_ENTRIES = 3_000_000
NEAR_LIMIT = 0.5
"""A coordinate is near its limit where its gradient is thought to be beyond this share of it."""
ROOM = 1.0
"""How far rows kept should be able to move the gradient of such a coordinate, in limits."""
WORST = 20
Floats = npt.NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class Findings:
    """What two passes found; figures per unit of example weight, in nats.

    `mean_loss`: of the snapshot with its intercept made optimal for the log, `shift` away from its own;
    `penalty`: strength * sum of |weights|; `plain_bound`: from the snapshot's own residuals, `bound`: the
    better of that and the one from nearby weights; `coordinates`: addresses in labelled messages;
    `worst`: those that break the conditions of an optimum most; `losses`: float64[labelled], like
    `example_weights`; all with that intercept.
    """

    messages: int
    labelled: int
    rejected: int
    total_weight: float
    strength: float
    mean_loss: float
    penalty: float
    shift: float
    plain_bound: float
    bound: float
    scale: float
    coordinates: int
    worst: tuple[Worst, ...]
    losses: Floats
    example_weights: Floats

    @property
    def objective(self) -> float:
        """Mean loss and penalty."""
        return self.mean_loss + self.penalty

    @property
    def gap(self) -> float:
        """The objective is at most this far above that of any weights."""
        return max(self.objective - self.bound, 0.0)


class _Coordinates:
    """Every coordinate of a log's labelled examples, with three numbers each: see `sums_kernel`."""

    def __init__(self) -> None:
        self._table = Table(State())

    def add(self, batch: Batch, margins: Floats) -> None:
        """Pass one."""
        first = 0
        while first < len(batch):
            slots, stopped = self._table.admit(batch, first, len(batch))
            add_sums(
                self._table.floats, slots, batch.row_ptr, batch.values, batch.labels, batch.weights, margins,
                first, stopped,
            )  # fmt: skip
            first = stopped

    def settle(self) -> None:
        """There will be no more coordinates."""
        self.addresses, self._slots = self._table.occupied()

    def sums(self) -> Floats:
        """float64[3, n], in the order of `addresses`."""
        sums = np.empty((3, len(self._slots)))
        gather_sums(self._table.floats, self._slots, sums)
        return sums

    def begin_again(self, near_limit: npt.NDArray[np.bool_]) -> None:
        """Before pass two; `near_limit` bool[n]: coordinates that rows are to be kept for."""
        begin_again(self._table.floats, self._slots, near_limit)

    def add_and_keep(
        self, batch: Batch, margins: Floats, room: float, entries_left: int
    ) -> tuple[int, npt.NDArray[np.bool_]]:
        """Pass two: entries that may still be kept then, -1 where a coordinate is new; the rows to keep."""
        kept = np.empty(len(batch), np.bool_)
        slots = self._table.slots_of(batch.addresses)
        left = add_and_keep(
            self._table.floats, slots, batch.row_ptr, batch.values, batch.labels, batch.weights, margins,
            room, entries_left, KEPT_ENTRIES, kept,
        )  # fmt: skip
        return int(left), kept


def examine(
    settings: Settings,
    paths: tuple[str, ...],
    folder: Path,
    weights: Weights,
    strength: float,
    progress: Progress = lambda stage, fraction: None,
    *,
    on_sum: float = 0.0,
) -> Findings:
    """Goes through the log twice. `strength`: per example; `on_sum`: on the sum of the losses of all messages
    that the weights learned, each at the mean weight of the log's; not both 0. Raises BadData without
    labelled messages of both labels or where the log changes on the way, and what reading raises."""
    log = Log(settings, paths, folder)
    scored, coordinates, sample = _first(log, weights, progress)
    labels, example_weights, margins = scored.labels, scored.weights, scored.margins
    total = _total_of_both(labels, example_weights)
    strength += on_sum / ((weights.learned or len(labels)) * total / len(labels))
    shift = best_intercept(margins, labels, example_weights)
    losses = log_losses(margins + shift, labels)
    up, down, curve = coordinates.sums()
    plain = lower_bound(DualPoint.of(margins, labels, example_weights, up, down), strength)
    # A token that is present counts 1: its curvature says how its gradient moves with the intercept.
    watched = Watched(coordinates.addresses, (down - up + shift * curve) / total, weights, strength)
    pull = float((example_weights * (probabilities(margins) - labels)).sum())
    progress("a nearby optimum", None)
    near = _near(weights, coordinates.addresses, Sums(up, down, curve, pull, total), sample, strength * total)
    pulls = example_weights * (probabilities(margins + shift) - labels)
    better = _second(log, near, coordinates, scored, watched, pulls, weights, strength, progress)
    best = max(plain, better, key=lambda bound: bound.value)
    return Findings(
        messages=log.messages,
        labelled=len(labels),
        rejected=log.rejected,
        total_weight=total,
        strength=strength,
        mean_loss=float((losses * example_weights).sum()) / total,
        penalty=strength * float(np.abs(weights.values.astype(np.float64)).sum()),
        shift=shift,
        plain_bound=plain.value,
        bound=best.value,
        scale=best.scale,
        coordinates=len(coordinates.addresses),
        worst=watched.worst(total, WORST),
        losses=losses,
        example_weights=example_weights,
    )


def _first(log: Log, weights: Weights, progress: Progress) -> tuple[Scored, _Coordinates, HeldRows]:
    """Pass one: margins and labels, sums, and an even sample of the rows."""
    scored, coordinates, sample = Scored(), _Coordinates(), EvenSample(SAMPLE_ROWS, SAMPLE_ENTRIES)
    lookup = Lookup(weights)
    for batch in log.batches("gradients", progress):
        margins, _ = lookup.score(batch)
        sample.add(batch, _numbers(batch, scored.count))
        scored.add(batch, margins)
        coordinates.add(batch, margins)
    coordinates.settle()
    return scored, coordinates, sample.held


def _numbers(batch: Batch, before: int) -> npt.NDArray[np.int64]:
    """Which of the log's labelled examples those of a batch are, -1 without a label: int64[m]."""
    there = batch.labels >= 0
    return np.where(there, before + np.cumsum(there) - 1, -1)


def _near(
    weights: Weights,
    addresses: npt.NDArray[np.uint64],
    sums: Sums,
    sample: HeldRows,
    strength: float,
) -> Nearby:
    columns_at, columns = sample.columns()
    places = np.searchsorted(addresses, columns_at)
    return nearby(sums, weights.at(addresses), weights.intercept, columns, places, strength)


def _second(
    log: Log,
    near: Nearby,
    coordinates: _Coordinates,
    scored: Scored,
    watched: Watched,
    pulls: Floats,
    weights: Weights,
    strength: float,
    progress: Progress,
) -> Bound:
    """Pass two: the bound from the residuals at `near`; `watched` gets each batch and its part of `pulls`."""
    margins_of, held, before, labels = Scored(), HeldRows(), log.messages, scored.labels
    limit = strength * float(scored.weights.sum())
    coordinates.begin_again((np.abs(near.gradient) > NEAR_LIMIT * limit) | (near.weights != 0.0))
    lookup, left = Lookup(_as_weights(near, coordinates.addresses, weights)), KEPT_ENTRIES
    for batch in log.batches("bound", progress):
        margins, _ = lookup.score(batch)
        before_batch = margins_of.count
        numbers = _numbers(batch, before_batch)
        margins_of.add(batch, margins)
        there = batch.labels >= 0
        left, kept = coordinates.add_and_keep(batch, margins, ROOM * limit, left)
        if left < 0 or not np.array_equal(batch.labels[there], labels[before_batch : margins_of.count]):
            raise _changed(before, log.messages)
        held.add(batch, kept, numbers)
        of_batch = np.zeros(len(batch))
        of_batch[there] = pulls[before_batch : margins_of.count]
        watched.add(batch, of_batch)
    if log.messages != before or not np.array_equal(margins_of.weights, scored.weights):
        raise _changed(before, log.messages)
    up, down, _ = coordinates.sums()
    point = DualPoint.of(margins_of.margins, labels, scored.weights, up, down)
    plain = lower_bound(point, strength)
    if not held.entries:
        return plain
    progress("bound", None)
    columns_at, columns = held.columns()
    places = np.searchsorted(coordinates.addresses, columns_at)
    moved = repaired(point, strength, columns, held.numbers, places, near)
    return max(plain, lower_bound(moved, strength), key=lambda bound: bound.value)


def _as_weights(near: Nearby, addresses: npt.NDArray[np.uint64], like: Weights) -> Weights:
    some = np.flatnonzero(near.weights.astype(np.float32))
    return replace(
        like,
        addresses=addresses[some],
        values=near.weights[some].astype(np.float32),
        names=(b"",) * len(some),
        messages=np.zeros(len(some)),
        intercept=near.intercept,
    )


def _changed(before: int, now: int) -> BadData:
    return BadData(
        f"the log changed between two readings: {before:,} messages, then others within {now:,}. Give files "
        "that nothing is written to any more"
    )


def _total_of_both(labels: npt.NDArray[np.int8], weights: Floats) -> float:
    """Total example weight. Raises BadData where not both labels have some: the batch fit has no end then."""
    total, positive = float(weights.sum()), float(weights[labels == 1].sum())
    if not 0.0 < positive < total:
        raise BadData(
            f"the log has {len(labels):,} labelled messages, and not both labels have weight there: no batch "
            "fit to compare with. Check message.label, or give a longer log"
        )
    return total
