"""A snapshot and a log in; the batch optimum of the log, reached from there, out."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

import numpy as np
import numpy.typing as npt

from stream.errors import BadData, CannotCreate
from stream.optimality.held_rows import HeldRows
from stream.optimality.solving import Solution, solve
from stream.runs.certifying.log import Log, Progress
from stream.runs.certifying.numbered import Numbered
from stream.settings import Settings
from stream.weights import Weights

__all__ = ["Refined", "refine"]

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

    The whole log is held in memory. Raises CannotCreate where that takes more than `memory_bytes`, BadData
    where the gap stays larger.
    """
    log = Log(settings, paths, folder)
    addresses, columns = _held(log, memory_bytes, progress).columns()
    steps = 0

    def tell(gap: float) -> None:
        nonlocal steps
        progress(f"refining, step {steps}: within {gap:.1e} of the objective", None)
        steps += 1

    solution = solve(columns, weights.at(addresses), weights.intercept, strength, tolerance, tell)
    if solution.gap > tolerance * solution.objective:
        raise BadData(
            f"refining ended {solution.gap / solution.objective:.1e} of the objective from a proof, where "
            f"{tolerance:g} is wanted: {solution.steps} steps, the last of which hardly helped. At strength "
            f"{strength:g} the penalty is worth {strength * float(columns.weights.sum()):.2g} messages, too "
            "little to hold the weights: give a stronger --strength"
        )
    found = solution.weights.astype(np.float32)
    some = np.flatnonzero(found)
    return Refined(
        Weights(
            addresses[some],
            found[some],
            _names(log, addresses[some], weights, progress),
            np.diff(columns.starts)[some].astype(np.float64),
            solution.intercept,
            len(columns.labels),
            weights.fingerprint,
        ),
        solution,
    )


def _held(log: Log, memory_bytes: int, progress: Progress) -> HeldRows:
    """All labelled messages."""
    held, seen = HeldRows(), 0
    for batch in log.batches("reading the log", progress):
        held.add(batch, batch.labels >= 0, np.arange(seen, seen + len(batch)))
        seen += len(batch)
        if held.entries * ENTRY_BYTES > memory_bytes:
            raise CannotCreate(
                f"refining holds the log in memory: {held.entries:,} tokens of {log.messages:,} messages "
                f"so far take more than {memory_bytes / 1e6:,.3g} MB. Allow more (--memory), or give fewer "
                "files"
            )
    return held


def _names(
    log: Log, addresses: npt.NDArray[np.uint64], before: Weights, progress: Progress
) -> tuple[bytes, ...]:
    """Names from the snapshot, others from as much of the log as it takes."""
    known = dict(zip(before.addresses.tolist(), before.names, strict=True))
    numbered = Numbered(addresses, [known.get(address, b"") for address in addresses.tolist()])
    if not all(numbered.names):
        for batch in log.batches("names", progress):
            numbered.found(batch)
            if all(numbered.names):
                break
    return tuple(numbered.names)
