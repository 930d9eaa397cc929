"""Sparse true weights: what they stand on, how they are told, and the intercept that goes with them.

Weights are multiples of 1/64 and the intercept of 2**-20, so that sums of them are exact in any order.
"""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
import numpy.typing as npt

from simulator.arithmetic import sigmoid
from simulator.lexicon import OPEN_KINDS
from simulator.words import MAKERS

__all__ = [
    "HOURS",
    "LOCKERS",
    "PLANTED_SENDERS",
    "ROUTES",
    "STOPS",
    "WEIGHTS",
    "Planting",
    "intercept_for",
    "open_word",
    "sender_number",
]

ROUTES = tuple(f"R{i:02d}" for i in range(1, 37))
STOPS = ("doorstep", "flat", "locker", "shop", "office", "farm", "school", "site")
LOCKERS = tuple(f"L{i:02d}" for i in range(1, 31))
HOURS = 24
PLANTED_SENDERS = 120

WEIGHTS = ("note", "route", "stop", "hour", "sender", "locker", "route_hour")
"""The arrays of weights of a planting."""

Floats = npt.NDArray[np.float64]
Ints = npt.NDArray[np.int64]


def open_word(rank: int, kind: int) -> str:
    """The street (kind 0), code (1) or shop (2) of this rank, as written."""
    return MAKERS[kind](rank, rank + 1)[0]


@dataclass(frozen=True, slots=True)
class Planting:
    """True weights. `note`: float64[p], those of the planted note words;
    `column_of_unit`: int64[units], `column_of_open`: int64[3 * 300 or more], place in `note` of the one
    planted word of a unit, or -1; `leaning`: the planted words of units, the first of `note`;
    `newcomers`: words that the scenario brings in, `column_of_newcomer`: int64 of each, as above;
    `route` [36], `stop` [8], `hour` [24], `sender` [121] (the last for all others), `locker` [31] (the last
    for none), `route_hour` [36, 24]: float64, mostly zero."""

    note: Floats
    leaning: tuple[str, ...]
    column_of_unit: Ints
    column_of_open: Ints
    newcomers: tuple[str, ...]
    column_of_newcomer: Ints
    route: Floats
    stop: Floats
    hour: Floats
    sender: Floats
    locker: Floats
    route_hour: Floats

    def note_words(self) -> dict[str, float]:
        """Weight by word of a note, case folded; zeros too, where a word has weight at another time."""
        weights = dict(zip(self.leaning, self.note.tolist(), strict=False))
        for place in np.flatnonzero(self.column_of_open >= 0):
            word = open_word(*divmod(int(place), OPEN_KINDS))
            weights[word.casefold()] = float(self.note[self.column_of_open[place]])
        for i in np.flatnonzero(self.column_of_newcomer >= 0):
            weights[self.newcomers[i].casefold()] = float(self.note[self.column_of_newcomer[i]])
        return weights

    def tokens(self) -> list[dict[str, Any]]:
        """Every non-zero weight of one token: field, token (case folded in notes), weight."""
        return [
            {"field": field, "token": token, "weight": weight}
            for field, token, weight in self.each()
            if weight
        ]

    def each(self) -> Iterator[tuple[str, str, float]]:
        """Field, token and weight, zero or not, of every token that may have one."""
        yield from (("note", word, weight) for word, weight in sorted(self.note_words().items()))
        senders = [sender_code(i) for i in range(PLANTED_SENDERS)]
        hours = [str(i) for i in range(HOURS)]
        for field, names, weights in (
            ("route", ROUTES, self.route),
            ("stop", STOPS, self.stop),
            ("hour", hours, self.hour),
            ("sender", senders, self.sender[:-1]),
            ("locker", LOCKERS, self.locker[:-1]),
        ):
            yield from ((field, name, float(w)) for name, w in zip(names, weights, strict=True))

    def crosses(self) -> list[dict[str, Any]]:
        """Every non-zero weight of a route and an hour together."""
        return [self.cross(int(route), int(hour)) for route, hour in np.argwhere(self.route_hour != 0)]

    def cross(self, route: int, hour: int) -> dict[str, Any]:
        """The weight of one route and hour together."""
        return {
            "fields": ["route", "hour"],
            "tokens": [ROUTES[route], str(hour)],
            "weight": float(self.route_hour[route, hour]),
        }

    def other_tokens(self, later: Planting) -> list[dict[str, Any]]:
        """Of every token whose weight is another in `later` that one, which may be zero."""
        return [
            {"field": field, "token": token, "weight": weight}
            for (field, token, before), (_, _, weight) in zip(self.each(), later.each(), strict=True)
            if weight != before
        ]

    def other_crosses(self, later: Planting) -> list[dict[str, Any]]:
        """The same of routes and hours together."""
        return [
            later.cross(int(route), int(hour))
            for route, hour in np.argwhere(self.route_hour != later.route_hour)
        ]

    def towards(self, later: Planting, share: float) -> Planting:
        """The weights on their way to those of `later`, which stand on the same words; exact for shares that
        are multiples of 1/32."""

        ways = {name: (getattr(self, name), getattr(later, name)) for name in WEIGHTS}
        there: dict[str, Any] = {name: start + share * (end - start) for name, (start, end) in ways.items()}
        return replace(self, **there)


def sender_code(rank: int) -> str:
    """The code of the sender of this rank: S and six digits, in no order that follows the rank."""
    return f"S{sender_number(np.array([rank]))[0]:06d}"


def sender_number(rank: Ints) -> Ints:
    """int64 numbers below 1,000,000, different for different ranks below that."""
    return (rank + 1) * 387_421 % 1_000_000


def intercept_for(margins: Floats, base_rate: float) -> float:
    """The multiple of 2**-20 that makes the mean of sigmoid(intercept + margin) the base rate."""
    values, counts = np.unique(margins, return_counts=True)
    low, high = -600.0, 600.0
    while high - low > 2.0**-21:
        middle = (low + high) / 2
        mean = math.fsum((counts * sigmoid(values + middle)).tolist()) / len(margins)
        low, high = (middle, high) if mean < base_rate else (low, middle)
    return round(low * 2**20) / 2**20
