"""Trials of some lanes in, one trial of all of them out; and back."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

import numpy as np

from stream.runs.lane_model import LaneWeights
from stream.runs.tuning.trial import Trial

__all__ = ["merge", "part_of"]


def part_of(trial: Trial, first: int, last: int) -> Trial:
    """Lanes first to last - 1 alone, as if they had been tried alone."""
    here = slice(first, last)
    weights = trial.weights
    some = weights.values[:, here].any(axis=1)
    return replace(
        trial,
        lanes=trial.lanes[here],
        loss=trial.loss[here],
        block_loss=trial.block_loss[:, here],
        block_nnz=trial.block_nnz[:, here],
        bins=trial.bins[:, here],
        slice_loss=trial.slice_loss[:, here],
        refused=trial.refused[here],
        weights=LaneWeights(
            weights.addresses[some],
            weights.values[some, here],
            weights.kept[some, here],
            tuple(weights.names[place] for place in np.flatnonzero(some).tolist()),
            weights.messages[some],
            weights.intercepts[here],
        ),
    )


def merge(trials: Sequence[Trial]) -> Trial:
    """All lanes of trials over the same log and plan, in their order."""
    return replace(
        trials[0],
        lanes=tuple(lane for trial in trials for lane in trial.lanes),
        loss=np.concatenate([trial.loss for trial in trials]),
        block_loss=np.concatenate([trial.block_loss for trial in trials], axis=1),
        block_nnz=np.concatenate([trial.block_nnz for trial in trials], axis=1),
        bins=np.concatenate([trial.bins for trial in trials], axis=1),
        slice_loss=np.concatenate([trial.slice_loss for trial in trials], axis=1),
        refused=np.concatenate([trial.refused for trial in trials]),
        weights=_merged([trial.weights for trial in trials]),
    )


def _merged(parts: Sequence[LaneWeights]) -> LaneWeights:
    addresses = np.unique(np.concatenate([part.addresses for part in parts]))
    lanes = [len(part.intercepts) for part in parts]
    values = np.zeros((len(addresses), sum(lanes)), np.float32)
    kept = np.zeros_like(values)
    messages = np.zeros(len(addresses))
    names = [b""] * len(addresses)
    first = 0
    for part, count in zip(parts, lanes, strict=True):
        places = np.searchsorted(addresses, part.addresses)
        values[places, first : first + count] = part.values
        kept[places, first : first + count] = part.kept
        messages[places] = part.messages
        for place, name in zip(places.tolist(), part.names, strict=True):
            names[place] = name
        first += count
    intercepts = np.concatenate([part.intercepts for part in parts])
    return LaneWeights(addresses, values, kept, tuple(names), messages, intercepts)
