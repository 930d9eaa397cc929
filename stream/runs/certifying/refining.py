"""A snapshot and a log in; the batch optimum of the log, reached from there, and what it is worth out."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

import numpy as np
import numpy.typing as npt

from stream.errors import CannotCreate
from stream.optimality.bound import log_losses
from stream.optimality.solving import Columns, Solution, solve
from stream.runs.certifying.log import Log, Progress, Scored
from stream.runs.certifying.passes import places_of
from stream.settings import Settings
from stream.tables import NamePile
from stream.tables.lookup import Lookup
from stream.weights import Weights

__all__ = ["Refined", "fresh_loss", "refine"]

ENTRY_BYTES = 40
"""Of memory for each token of a message while rows become columns."""
TOLERANCE = 1e-6


@dataclass(frozen=True, slots=True)
class Refined:
    """The optimum as weights of a snapshot, with the solution that it comes from."""

    weights: Weights
    solution: Solution


def refine(
    settings: Settings,
    paths: tuple[str, ...],
    folder: Path,
    weights: Weights,
    strength: float,
    memory_bytes: int,
    progress: Progress = lambda stage, fraction: None,
    tolerance: float = TOLERANCE,
) -> Refined:
    """Solves the batch problem of the log, beginning at `weights`, until the gap is under `tolerance` of the
    objective.

    The whole log is held in memory. Raises CannotCreate where that takes more than `memory_bytes`.
    """
    log, pile = Log(settings, paths, folder), NamePile()
    known = np.empty(0, np.uint64)
    parts: list[tuple[npt.NDArray[np.uint64], npt.NDArray[np.float32], npt.NDArray[np.int64]]] = []
    labels, example_weights, entries = [], [], 0
    for batch in log.batches("reading the log", progress):
        there = batch.labels >= 0
        lengths = np.diff(batch.row_ptr)
        kept = np.repeat(there, lengths)
        parts.append((batch.addresses[kept].copy(), batch.values[kept].copy(), lengths[there]))
        labels.append(batch.labels[there])
        example_weights.append(batch.weights[there])
        entries += int(kept.sum())
        if entries * ENTRY_BYTES > memory_bytes:
            raise CannotCreate(
                f"refining holds the log in memory: {entries:,} tokens of {log.messages:,} messages so far "
                f"take more than {memory_bytes / 1e6:,.0f} MB. Allow more (--memory), or give fewer files"
            )
        fresh, first = np.unique(batch.addresses, return_index=True)
        new = ~np.isin(fresh, known, assume_unique=True)
        pile.record(batch, first[new])
        known = np.union1d(known, fresh[new]) if new.any() else known
    addresses, columns = np.unique(np.concatenate([part[0] for part in parts]), return_inverse=True)
    row_ptr = np.concatenate([np.zeros(1, np.int64), np.cumsum(np.concatenate([part[2] for part in parts]))])
    values = np.concatenate([part[1] for part in parts])
    held = Columns.of(
        columns.astype(np.int64), row_ptr, values, np.concatenate(labels), np.concatenate(example_weights),
        len(addresses),
    )  # fmt: skip
    start = np.zeros(len(addresses))
    at, there = places_of(addresses, weights.addresses)
    start[at] = weights.values[there]
    steps = 0

    def tell(gap: float) -> None:
        nonlocal steps
        progress(f"refining, step {steps}: within {gap:.1e} of the objective", None)
        steps += 1

    solution = solve(held, start, weights.intercept, strength, tolerance, tell)
    found = solution.weights.astype(np.float32)
    some = np.flatnonzero(found)
    return Refined(
        Weights(
            addresses[some],
            found[some],
            pile.at(addresses[some]),
            np.diff(held.starts)[some].astype(np.float64),
            solution.intercept,
            len(held.labels),
            weights.fingerprint,
        ),
        solution,
    )


def fresh_loss(
    settings: Settings,
    paths: tuple[str, ...],
    folder: Path,
    models: tuple[Weights, ...],
    progress: Progress = lambda stage, fraction: None,
) -> tuple[int, list[float]]:
    """Labelled messages of other logs, and the mean log loss of each of `models` on them."""
    log, lookups = Log(settings, paths, folder), [Lookup(model) for model in models]
    scored = [Scored() for _ in models]
    for batch in log.batches("fresh messages", progress):
        for lookup, found in zip(lookups, scored, strict=True):
            found.add(batch, lookup.score(batch)[0])
    weight = float(scored[0].weights.sum())
    losses = [float((log_losses(one.margins, one.labels) * one.weights).sum()) / weight for one in scored]
    return len(scored[0].labels), losses
