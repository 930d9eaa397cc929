"""A snapshot and a log in; its objective, gradients and a bound on the batch optimum out, in two passes.

First a look at the beginning of the log: its most frequent coordinates, and the intercept that fits it. Pass
one scores the log with the snapshot and takes the gradient in every coordinate, with the full curvature of
the frequent ones. From these
come weights nearer to the optimum: a Newton step where the curvature is full, a damped step for each
coordinate elsewhere. Pass two takes the residuals and gradients of those; the bound is made of them, since
scaling down the snapshot's own gives one that is valid but tells little (docs/proof.md has both). It also
takes names and exact gradients, with the intercept made optimal, of what seemed worst in pass one.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass, field, replace
from pathlib import Path

import numpy as np
import numpy.typing as npt

from stream.batch import Batch
from stream.decoding import Decoder
from stream.errors import BadData
from stream.features import Batcher
from stream.message import Block
from stream.optimality.bound import Bound, best_intercept, log_losses, lower_bound, probabilities
from stream.optimality.sums_kernel import add_sums, gather_sums, solve_model
from stream.runs.certifying.worst import Watched, Worst
from stream.settings import Settings
from stream.settings.models import State
from stream.sources import LogSource
from stream.tables import Table
from stream.tables.lookup import Lookup
from stream.weights import Weights

__all__ = ["Findings", "Log", "Progress", "Scored", "examine", "places_of"]

BLOCK = 4_096
LOOKED_AT = 20_000
FREQUENT = 1_000
DAMPING = 0.3
ROUNDS = 200
FARTHEST = 1e3
WORST = 20
Floats = npt.NDArray[np.float64]
Progress = Callable[[str, float | None], None]


@dataclass
class Scored:
    """Labelled examples of a log and their margins: labels int8[m], weights and margins float64[m]."""

    _labels: list[npt.NDArray[np.int8]] = field(default_factory=list)
    _weights: list[Floats] = field(default_factory=list)
    _margins: list[Floats] = field(default_factory=list)

    def add(self, batch: Batch, margins: Floats) -> None:
        """Takes down the labelled examples of a batch."""
        there = batch.labels >= 0
        self._labels.append(batch.labels[there])
        self._weights.append(batch.weights[there])
        self._margins.append(margins[there])

    @property
    def labels(self) -> npt.NDArray[np.int8]:
        """int8[m]."""
        return np.concatenate([np.empty(0, np.int8), *self._labels])

    @property
    def weights(self) -> Floats:
        """float64[m]."""
        return np.concatenate([np.empty(0), *self._weights])

    @property
    def margins(self) -> Floats:
        """float64[m]."""
        return np.concatenate([np.empty(0), *self._margins])


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


class Log:
    """A log as batches, as often as wanted."""

    def __init__(self, settings: Settings, paths: tuple[str, ...], folder: Path) -> None:
        self._settings, self._paths, self._folder = settings, paths, folder
        self.messages = self.rejected = 0

    def batches(self, stage: str, progress: Progress, most: int | None = None) -> Iterator[Batch]:
        """All batches, or those of the first `most` messages."""
        decoder, batcher = Decoder(self._settings), Batcher(self._settings)
        source = LogSource(self._paths, self._folder, self._settings.feed.max_line_bytes)
        self.messages = self.rejected = 0
        try:
            while len(block := source.read(BLOCK)):
                yield self._batch(block, decoder, batcher)
                progress(stage, source.fraction_read())
                if most is not None and self.messages >= most:
                    return
        finally:
            source.close()

    def _batch(self, block: Block, decoder: Decoder, batcher: Batcher) -> Batch:
        examples, _ = decoder.decode(block)
        batch, _ = batcher.batch(examples)
        self.messages += len(block)
        self.rejected += len(block) - len(batch)
        return batch


class _Sums:
    """The sums of `sums_kernel` over a log; `frequent`: addresses with full curvature, ascending."""

    def __init__(self, frequent: npt.NDArray[np.uint64]) -> None:
        self._table = Table(State())
        self.frequent = frequent
        self.full = np.zeros((len(frequent) + 1, len(frequent) + 1)) if len(frequent) else np.zeros((1, 1))
        self._held = np.zeros(len(frequent) + 1, np.int64)

    def add(self, batch: Batch, margins: Floats) -> None:
        places = np.zeros(0, np.int64)
        if len(self.frequent):
            places = np.searchsorted(self.frequent, batch.addresses)
            places[places == len(self.frequent)] = 0
            places[self.frequent[places] != batch.addresses] = -1
        longest = int(np.max(np.diff(batch.row_ptr), initial=0))
        if len(self._held) < longest + 1:
            self._held = np.zeros(longest + 1, np.int64)
        first = 0
        while first < len(batch):
            slots, stopped = self._table.admit(batch, first, len(batch))
            add_sums(
                self._table.floats, slots, batch.row_ptr, batch.values, batch.labels, batch.weights, margins,
                first, stopped, places, self.full, self._held,
            )  # fmt: skip
            first = stopped

    def found(self) -> tuple[npt.NDArray[np.uint64], Floats]:
        """Addresses uint64[n], ascending, and their three sums, float64[3, n]."""
        addresses, slots = self._table.occupied()
        sums = np.empty((3, len(slots)))
        gather_sums(self._table.cells, self._table.floats, slots, sums)
        return addresses, sums


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
    frequent, moved = _look(log, weights, progress)
    begun = replace(weights, intercept=weights.intercept + moved)
    sums, scored = _Sums(frequent), Scored()
    lookup = Lookup(begun)
    for batch in log.batches("gradients", progress):
        margins, _ = lookup.score(batch)
        scored.add(batch, margins)
        sums.add(batch, margins)
    labels, example_weights, margins = scored.labels, scored.weights, scored.margins
    total = _total_of_both(labels, example_weights)
    strength += on_sum / ((weights.learned or len(labels)) * total / len(labels))
    shift = best_intercept(margins, labels, example_weights)
    losses = log_losses(margins + shift, labels)
    addresses, (up, down, curve) = sums.found()
    plain = lower_bound(margins, labels, example_weights, up, down, strength)
    # A token that is present counts 1: its curvature says how its gradient moves with the intercept.
    watched = Watched(addresses, (down - up + shift * curve) / total, weights, strength)
    pull = float((example_weights * (probabilities(margins) - labels)).sum())
    near = _nearer(begun, addresses, (up, down, curve), sums, pull, strength * total)
    pulls = example_weights * (probabilities(margins + shift) - labels)
    better = _second(log, near, scored, watched, pulls, strength, progress)
    best = max(plain, better, key=lambda bound: bound.value)
    return Findings(
        messages=log.messages,
        labelled=len(labels),
        rejected=log.rejected,
        total_weight=total,
        strength=strength,
        mean_loss=float((losses * example_weights).sum()) / total,
        penalty=strength * float(np.abs(weights.values.astype(np.float64)).sum()),
        shift=moved + shift,
        plain_bound=plain.value,
        bound=best.value,
        scale=best.scale,
        coordinates=len(addresses),
        worst=watched.worst(total, WORST),
        losses=losses,
        example_weights=example_weights,
    )


def _second(
    log: Log,
    near: Weights,
    scored: Scored,
    watched: Watched,
    pulls: Floats,
    strength: float,
    progress: Progress,
) -> Bound:
    """The bound from the residuals of `near`; `watched` is given each batch with its part of `pulls`."""
    sums, margins_of = _Sums(np.empty(0, np.uint64)), Scored()
    lookup, labels, before, done = Lookup(near), scored.labels, log.messages, 0
    for batch in log.batches("bound", progress):
        margins, _ = lookup.score(batch)
        margins_of.add(batch, margins)
        sums.add(batch, margins)
        there = batch.labels >= 0
        end = done + int(there.sum())
        if not np.array_equal(batch.labels[there], labels[done:end]):
            raise _changed(before, log.messages)
        of_batch = np.zeros(len(batch))
        of_batch[there] = pulls[done:end]
        watched.add(batch, of_batch)
        done = end
    if log.messages != before or not np.array_equal(margins_of.weights, scored.weights):
        raise _changed(before, log.messages)
    _, (up, down, _) = sums.found()
    return lower_bound(margins_of.margins, labels, scored.weights, up, down, strength)


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


def _look(log: Log, weights: Weights, progress: Progress) -> tuple[npt.NDArray[np.uint64], float]:
    """Of the first messages: addresses in most of them, ascending; by how much their intercept is off."""
    scored, lookup = Scored(), Lookup(weights)
    parts = [np.empty(0, np.uint64)]
    for batch in log.batches("frequent tokens", progress, LOOKED_AT):
        scored.add(batch, lookup.score(batch)[0])
        parts.append(batch.addresses.copy())
    found, counts = np.unique(np.concatenate(parts), return_counts=True)
    most = np.sort(found[np.argsort(-counts, kind="stable")[:FREQUENT]])
    return most, best_intercept(scored.margins, scored.labels, scored.weights)


def _nearer(
    weights: Weights,
    addresses: npt.NDArray[np.uint64],
    sums: tuple[Floats, Floats, Floats],
    taken: _Sums,
    pull: float,
    strength: float,
) -> Weights:
    """Weights nearer to the optimum by one step of a second-order model.

    `pull`: gradient of the sum of losses in the intercept; `strength` on that sum.
    """
    up, down, curve = sums
    gradient = down - up
    here = np.zeros(len(addresses))
    at, there = places_of(addresses, weights.addresses)
    here[at] = weights.values[there]
    with np.errstate(divide="ignore", invalid="ignore"):
        steep = curve / DAMPING
        wanted = here - gradient / steep
        moved = np.sign(wanted) * np.maximum(np.abs(wanted) - strength / steep, 0.0)
    moved = np.where(curve > 0, moved, 0.0)
    at, there = places_of(addresses, taken.frequent)
    known = np.append(np.flatnonzero(there), len(taken.frequent))
    full = (np.tril(taken.full) + np.tril(taken.full, -1).T)[np.ix_(known, known)]
    step = np.zeros(len(known))
    solve_model(np.append(gradient[at], pull), full, np.append(here[at], 0.0), strength, step, ROUNDS)
    moved[at] = here[at] + step[:-1]
    moved = np.clip(np.nan_to_num(moved), -FARTHEST, FARTHEST)  # any weights do for the bound
    some = np.flatnonzero(moved.astype(np.float32))
    return Weights(
        addresses[some],
        moved[some].astype(np.float32),
        (b"",) * len(some),
        np.zeros(len(some)),
        weights.intercept + float(np.clip(step[-1], -FARTHEST, FARTHEST)),
        weights.learned,
        weights.fingerprint,
    )


def places_of(
    addresses: npt.NDArray[np.uint64], wanted: npt.NDArray[np.uint64]
) -> tuple[npt.NDArray[np.int64], npt.NDArray[np.bool_]]:
    """Where those of `wanted` stand that are among `addresses` (ascending), and which these are."""
    places = np.searchsorted(addresses, wanted)
    there = places < len(addresses)
    there[there] = addresses[places[there]] == wanted[there]
    return places[there], there
