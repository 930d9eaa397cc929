"""Blocks of a feed as they are written in, the truth behind them and what came of it out."""

from __future__ import annotations

import json
import math
from dataclasses import asdict, dataclass
from typing import Any

import numpy as np

from simulator.companions import companion
from simulator.courier import Courier, FeedBlock

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
    `mean_probability`: mean of the true probabilities, before label noise;
    `redelivered_share`: share of outcomes written as true; `flipped`: outcomes that label noise turned;
    `words`: words in all notes; `words_known`: streets, codes and shops, of each, at the end;
    `settings`: of the feed.
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
    settings: dict[str, Any]

    def to_json(self) -> str:
        """One indented JSON document, ending in a line end."""
        return json.dumps(asdict(self), ensure_ascii=False, indent=1) + "\n"


class Tally:
    """Sums over the blocks written; probabilities are summed exactly rounded, block by block."""

    def __init__(self, courier: Courier) -> None:
        self._courier = courier
        self._course: list[dict[str, Any]] = []
        self.messages = 0
        self._words = 0
        self._redelivered = 0
        self._flipped = 0
        self._probability: list[float] = []

    def add(self, block: FeedBlock) -> None:
        """Counts the next block in."""
        self.messages += len(block)
        self._words += block.words
        self._redelivered += int(np.count_nonzero(block.outcome))
        self._flipped += int(np.count_nonzero(block.flipped))
        self._probability.append(math.fsum(block.probability.tolist()))
        self._add_steps(block)

    def _add_steps(self, block: FeedBlock) -> None:
        """The steps of the course that begin in this block."""
        courier = self._courier
        first, end = np.searchsorted(courier.course.first, [block.first, block.first + len(block)]).tolist()
        lines = block.lines.splitlines() if end > first else []
        for step in range(first, end):
            message = int(courier.course.first[step])
            self._course.append(
                {
                    "message": message,
                    "at": json.loads(lines[message - block.first])["at"],
                    "share": float(courier.course.share[step]),
                    "intercept": float(courier.intercepts[step]),
                }
            )

    def truth(self) -> Truth:
        """The truth behind the blocks so far."""
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
            mean_probability=math.fsum(self._probability) / self.messages,
            redelivered_share=self._redelivered / self.messages,
            flipped=self._flipped,
            words=self._words,
            words_known=courier.words_known,
            settings=asdict(courier.feed),
        )
