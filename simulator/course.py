"""A feed in, its course out: from which message on how much of the later truth holds, at which base rate."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from simulator.feed import SEASON_STEPS, CourierFeed

__all__ = ["Course", "course_of"]

DRIFT_STEPS = 32
SUDDEN = ("sudden-change", "new-vocabulary")

Ints = npt.NDArray[np.int64]
Floats = npt.NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class Course:
    """Steps of the truth, in order. `first`: int64[k], the message from which on each holds, 0 for the first;
    `share`: float64[k], multiples of 1/32, how far each weight is on its way from the first truth (0) to the
    later one (1); `rate`: float64[k], the base rate."""

    first: Ints
    share: Floats
    rate: Floats

    def __len__(self) -> int:
        return len(self.first)

    def step_of(self, message: Ints) -> Ints:
        """int64[m]: the step in which each message is."""
        return np.searchsorted(self.first, message, side="right").astype(np.int64) - 1


def course_of(feed: CourierFeed) -> Course:
    """The course of the feed's scenario, which ends with its messages."""
    first, share, rate = np.zeros(1, np.int64), np.zeros(1), np.full(1, feed.base_rate)
    if feed.scenario in SUDDEN:
        first, share = np.array([0, feed.turning_point]), np.array([0.0, 1.0])
    elif feed.scenario == "base-rate-shift":
        first, rate = np.array([0, feed.turning_point]), np.array([feed.base_rate, feed.later_rate])
    elif feed.scenario == "slow-drift":
        step = np.arange(DRIFT_STEPS + 1)
        first, share = step * feed.messages // (DRIFT_STEPS + 1), step / DRIFT_STEPS
    elif feed.scenario == "seasonal":
        season = feed.season_days * feed.messages_per_day
        step = np.arange(int(feed.messages / season * SEASON_STEPS) + 2)
        first = (step * (season / SEASON_STEPS)).astype(np.int64)
        at = step % SEASON_STEPS
        share = np.minimum(at, SEASON_STEPS - at) / (SEASON_STEPS // 2)
    share, rate = np.broadcast_to(share, first.shape), np.broadcast_to(rate, first.shape)
    # where several steps begin at one message the last one holds; none begins behind the end
    kept = np.append(first[1:] != first[:-1], True) & (first < feed.messages)
    return Course(first[kept].astype(np.int64), share[kept].astype(np.float64), rate[kept])
