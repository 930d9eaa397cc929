"""Blocks of a feed as they are written in, the truth behind them and what came of it out."""

from __future__ import annotations

import json
import math
from dataclasses import asdict, dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from simulator.companions import companion
from simulator.courier import Courier, FeedBlock
from simulator.faults import Faults
from simulator.outcomes import time_text

__all__ = ["Tally", "Truth"]


@dataclass(frozen=True, slots=True)
class Truth:
    """What a simulated log was drawn from, and what came out.

    `intercept`: that of the first message;
    `weights`: {field, token, weight} of each token whose true weight is not zero;
    `crosses`: {fields, tokens, weight}, the same for a route and an hour together;
    `later_weights`, `later_crosses`: the same, zeros too, of those that are another at share 1;
    `course`: {message, at, share, intercept} of each step, the first message where it holds and its time:
    from there on each weight is weight + share * (later weight - weight);
    `companions`: {field, token, companion}: the one never stands without the other;
    `messages`: of the feed, also those that faults kept from it;
    `mean_probability`: mean of the true probabilities, before label noise;
    `redelivered_share`: share of outcomes written as true; `flipped`: outcomes that label noise turned;
    `words`: words in all notes; `words_known`: streets, codes and shops, of each, at the end;
    `records`: {written, missing, duplicates, malformed, reordered} as simulator.faults.Transport counts them;
    `outcomes`: {written, lost, repeated, waiting} as simulator.outcomes.LateOutcomes counts them, or None
    where they stand in the messages;
    `settings`: of the feed; `faults`: their shares.
    """

    intercept: float
    weights: list[dict[str, Any]]
    crosses: list[dict[str, Any]]
    later_weights: list[dict[str, Any]]
    later_crosses: list[dict[str, Any]]
    course: list[dict[str, Any]]
    companions: list[dict[str, str]]
    messages: int
    mean_probability: float
    redelivered_share: float
    flipped: int
    words: int
    words_known: int
    records: dict[str, Any]
    outcomes: dict[str, Any] | None
    settings: dict[str, Any]
    faults: dict[str, float]

    def to_json(self) -> str:
        """One indented JSON document, ending in a line end."""
        return json.dumps(asdict(self), ensure_ascii=False, indent=1) + "\n"


class Tally:
    """Sums over the messages written; probabilities are summed exactly rounded, part by part."""

    def __init__(self, courier: Courier) -> None:
        self._courier = courier
        self._course: list[dict[str, Any]] = []
        self.messages = 0
        self._words = 0
        self._redelivered = 0
        self._flipped = 0
        self._probability: list[float] = []

    def add(self, block: FeedBlock, rows: slice) -> None:
        """Counts these messages of a block in, which come next."""
        probability = block.probability[rows].tolist()
        self._add_steps(block.first + rows.start, block.second[rows])
        self.messages += len(probability)
        self._words += int(block.words[rows].sum())
        self._redelivered += int(np.count_nonzero(block.outcome[rows]))
        self._flipped += int(np.count_nonzero(block.flipped[rows]))
        self._probability.append(math.fsum(probability))

    def _add_steps(self, first: int, second: npt.NDArray[np.int64]) -> None:
        """The steps of the course that begin in the messages from `first` on, which come at `second`."""
        courier = self._courier
        begin, end = np.searchsorted(courier.course.first, [first, first + len(second)]).tolist()
        for step in range(begin, end):
            message = int(courier.course.first[step])
            self._course.append(
                {
                    "message": message,
                    "at": time_text(int(second[message - first])),
                    "share": float(courier.course.share[step]),
                    "intercept": float(courier.intercepts[step]),
                }
            )

    def truth(self, faults: Faults, records: dict[str, Any], outcomes: dict[str, Any] | None) -> Truth:
        """The truth behind the messages so far; `records` and `outcomes`: what came of the faults."""
        courier = self._courier
        return Truth(
            intercept=courier.intercept,
            weights=courier.planting.tokens(),
            crosses=courier.planting.crosses(),
            later_weights=courier.planting.other_tokens(courier.later),
            later_crosses=courier.planting.other_crosses(courier.later),
            course=self._course,
            companions=[
                {"field": "note", "token": word, "companion": companion(word)}
                for word in sorted(courier.accompanied)
            ],
            messages=self.messages,
            mean_probability=math.fsum(self._probability) / max(self.messages, 1),
            redelivered_share=self._redelivered / max(self.messages, 1),
            flipped=self._flipped,
            words=self._words,
            words_known=courier.words_known,
            records=records,
            outcomes=outcomes,
            settings=asdict(courier.feed),
            faults=asdict(faults),
        )
