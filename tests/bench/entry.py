"""How many messages a new token needs before it has a weight: at the start, and after 1e8 messages."""

from __future__ import annotations

import math
from itertools import count

import numpy as np
import numpy.typing as npt

from stream.learners import Learner
from stream.settings.models import Learner as LearnerSettings
from stream.settings.models import State
from stream.tables import Table
from tests.bench.drawn import BLOCK, block_of, draw_labels
from tests.bench.figures import Figure

__all__ = ["entry"]

SHARE = 0.001
BASE_RATE = 0.2
LIFT = 2.0
L1_PER_EXAMPLE = 1e-4
HORIZON_SHARE = 0.1
"""Horizon as a share of the messages before: 1e7 of 1e8."""


def entry(learned_before: int, tokens: int, block: int = BLOCK) -> list[Figure]:
    """Medians over `tokens` tokens, each alone in 0.1 % of messages that it lifts by 2 in log-odds."""
    horizon = int(learned_before * HORIZON_SHARE)
    cases = {
        "at the start": (None, 0),
        f"after {learned_before:,}": (None, learned_before),
        f"the same, horizon {horizon:,}": (horizon, learned_before),
    }
    figures = []
    for name, (limit, before) in cases.items():
        settings = LearnerSettings(l1_per_example=L1_PER_EXAMPLE, horizon=limit)
        state = _state_after(before, settings, block)
        delays = np.array([_delay(settings, state, before, seed, block) for seed in range(tokens)])
        messages, holding = np.median(delays, axis=0)
        details = {
            "of these held the token": float(holding),
            "least": float(delays[:, 0].min()),
            "most": float(delays[:, 0].max()),
        }
        figures.append(Figure(f"messages before a weight, {name}", float(messages), "", details=details))
    return figures


def _state_after(messages: int, settings: LearnerSettings, block: int) -> dict[str, npt.NDArray[np.generic]]:
    """A learner that has seen `messages` without any of the tokens."""
    learner, cells = Learner(settings), Table(State()).cells
    batch, slots = block_of(np.zeros(1), seed=0, size=block), np.zeros(0, np.int64)
    probabilities = np.full(block, BASE_RATE)
    for first in range(0, messages, block):
        draw_labels(probabilities, first + 1, batch.labels)
        learner.predict_then_update(cells, batch, slots, 0, min(block, messages - first))
    return learner.state()


def _delay(
    settings: LearnerSettings, state: dict[str, npt.NDArray[np.generic]], before: int, seed: int, block: int
) -> tuple[int, int]:
    """Messages up to the one that gives the token a weight, and how many of them hold it."""
    learner, table = Learner(settings), Table(State())
    learner.restore(state)
    batch = block_of(np.array([SHARE]), seed=seed + 1, size=block)
    table.admit(batch, 0, block)
    slots = table.slots_of(batch.addresses)
    odds = math.exp(LIFT) * BASE_RATE / (1.0 - BASE_RATE)
    probabilities = np.where(np.diff(batch.row_ptr) > 0, odds / (1.0 + odds), BASE_RATE)
    for blocks in count():
        first = blocks * block
        draw_labels(probabilities, (seed + 1) * 10**12 + before + first + 1, batch.labels)
        _, named = learner.predict_then_update(table.cells, batch, slots, 0, block)
        if len(named):
            token = int(named[0])  # the token is the only one, so entries count its messages
            message = int(np.searchsorted(batch.row_ptr, token, side="right")) - 1
            return first + message + 1, blocks * len(slots) + token + 1
    raise AssertionError("count() does not end")
