"""A feed and its random stream in, the sparse true weights out: nearly every token has weight exactly zero.

Weights are multiples of 1/64 and the intercept of 2**-20, so that sums of them are exact in any order.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from simulator.arithmetic import sigmoid
from simulator.draws import raw_stream, uniform
from simulator.feed import CourierFeed
from simulator.lexicon import OPEN_KINDS, lexicon
from simulator.phrases import TOWARDS_NO, TOWARDS_YES
from simulator.words import MAKERS

__all__ = [
    "HOURS",
    "LOCKERS",
    "PLANTED_SENDERS",
    "ROUTES",
    "STOPS",
    "Planting",
    "intercept_for",
    "open_word",
    "plant",
]

ROUTES = tuple(f"R{i:02d}" for i in range(1, 37))
STOPS = ("doorstep", "flat", "locker", "shop", "office", "farm", "school", "site")
LOCKERS = tuple(f"L{i:02d}" for i in range(1, 31))
HOURS = 24
PLANTED_SENDERS = 120
PLANTED_OPEN = 300
PLANT_STREAM = 1
GRID = 64

Floats = npt.NDArray[np.float64]
Ints = npt.NDArray[np.int64]


def open_word(rank: int, kind: int) -> str:
    """The street (kind 0), code (1) or shop (2) of this rank, as written."""
    return MAKERS[kind](rank, rank + 1)[0]


@dataclass(frozen=True, slots=True)
class Planting:
    """True weights. `note`: float64[p], those of the planted note words;
    `column_of_unit`: int64[units], `column_of_open`: int64[300 * 3], place in `note` of the one planted
    word of a unit, or -1; `leaning`: the planted words of units, the first of `note`;
    `route` [36], `stop` [8], `hour` [24], `sender` [121] (the last for all others), `locker` [31] (the last
    for none), `route_hour` [36, 24]: float64, mostly zero."""

    note: Floats
    leaning: tuple[str, ...]
    column_of_unit: Ints
    column_of_open: Ints
    route: Floats
    stop: Floats
    hour: Floats
    sender: Floats
    locker: Floats
    route_hour: Floats

    def tokens(self) -> list[dict[str, Any]]:
        """Every non-zero weight of one token: field, token (case folded in notes), weight."""
        planted = dict(zip(self.leaning, self.note.tolist(), strict=False))
        for place in np.flatnonzero(self.column_of_open >= 0):
            word = open_word(*divmod(int(place), OPEN_KINDS))
            planted[word.casefold()] = self.note[self.column_of_open[place]]
        found = [("note", token, weight) for token, weight in sorted(planted.items())]
        found += [("route", name, w) for name, w in zip(ROUTES, self.route, strict=True)]
        found += [("stop", name, w) for name, w in zip(STOPS, self.stop, strict=True)]
        found += [("hour", str(i), w) for i, w in enumerate(self.hour)]
        found += [("sender", sender_code(i), w) for i, w in enumerate(self.sender[:-1])]
        found += [("locker", name, w) for name, w in zip(LOCKERS, self.locker[:-1], strict=True)]
        return [{"field": field, "token": token, "weight": float(w)} for field, token, w in found if w != 0]

    def crosses(self) -> list[dict[str, Any]]:
        """Every non-zero weight of a route and an hour together."""
        return [
            {
                "fields": ["route", "hour"],
                "tokens": [ROUTES[route], str(hour)],
                "weight": float(self.route_hour[route, hour]),
            }
            for route, hour in np.argwhere(self.route_hour != 0)
        ]


def sender_code(rank: int) -> str:
    """The code of the sender of this rank: S and six digits, in no order that follows the rank."""
    return f"S{sender_number(np.array([rank]))[0]:06d}"


def sender_number(rank: Ints) -> Ints:
    """int64 numbers below 1,000,000, different for different ranks below that."""
    return (rank + 1) * 387_421 % 1_000_000


class _Planter:
    """Draws which places get a weight, and how large it is."""

    def __init__(self, feed: CourierFeed) -> None:
        self._stream = raw_stream(feed.seed, PLANT_STREAM)
        self._effect = feed.effect

    def places(self, size: int, count: int) -> Ints:
        """`count` different places below `size`."""
        order = np.argsort(self._stream.random_raw(size), kind="stable")
        return order[:count]

    def sizes(self, count: int) -> Floats:
        """Positive weights between half and one and a half times the effect, on the grid."""
        size = self._effect * (0.5 + uniform(self._stream.random_raw(count)))
        return np.rint(size * GRID) / GRID

    def signed(self, count: int) -> Floats:
        """Weights of either sign."""
        size = self.sizes(count)
        return np.where(uniform(self._stream.random_raw(count)) < 0.5, -size, size)

    def spread(self, size: int, candidates: int, count: int) -> Floats:
        """float64[size] with `count` signed weights among the first `candidates` places, else zero."""
        weights = np.zeros(size)
        weights[self.places(candidates, count)] = self.signed(count)
        return weights


def plant(feed: CourierFeed) -> Planting:
    """The true weights of this feed; of those of notes, up to half stand on words that lean."""
    planter = _Planter(feed)
    leanings = [(word, 1.0) for word in TOWARDS_YES] + [(word, -1.0) for word in TOWARDS_NO]
    count = min(len(leanings) * 4 // 5, feed.planted_words // 2)
    chosen = [leanings[i] for i in planter.places(len(leanings), count)]
    lean = planter.sizes(count) * np.array([sign for _, sign in chosen])
    leaning = tuple(word for word, _ in chosen)

    rest = feed.planted_words - count
    column_of_open = np.full(PLANTED_OPEN * OPEN_KINDS, -1)
    column_of_open[planter.places(PLANTED_OPEN * OPEN_KINDS, rest)] = count + np.arange(rest)
    note = np.concatenate([lean, planter.signed(rest)])

    open_hours = slice(6, 22)
    hour = np.zeros(HOURS)
    hour[open_hours] = planter.spread(16, 16, 4)
    route_hour = np.zeros((len(ROUTES), HOURS))
    route_hour[:, open_hours] = planter.spread(len(ROUTES) * 16, len(ROUTES) * 16, 30).reshape(-1, 16)
    return Planting(
        note=note,
        leaning=leaning,
        column_of_unit=_columns_of_units(leaning),
        column_of_open=column_of_open,
        route=planter.spread(len(ROUTES), len(ROUTES), 8),
        stop=planter.spread(len(STOPS), len(STOPS), 3),
        hour=hour,
        sender=planter.spread(PLANTED_SENDERS + 1, PLANTED_SENDERS, 24),
        locker=planter.spread(len(LOCKERS) + 1, len(LOCKERS), 6),
        route_hour=route_hour,
    )


def _columns_of_units(leaning: tuple[str, ...]) -> Ints:
    """int64[units]: place in `leaning` of the word of it that the unit holds (no unit holds two), or -1."""
    place = {word: i for i, word in enumerate(leaning)}
    return np.array([max(place.get(word, -1) for word in unit.split()) for unit in lexicon().units])


def intercept_for(margins: Floats, base_rate: float) -> float:
    """The multiple of 2**-20 that makes the mean of sigmoid(intercept + margin) the base rate."""
    values, counts = np.unique(margins, return_counts=True)
    low, high = -600.0, 600.0
    while high - low > 2.0**-21:
        middle = (low + high) / 2
        mean = math.fsum((counts * sigmoid(values + middle)).tolist()) / len(margins)
        low, high = (middle, high) if mean < base_rate else (low, middle)
    return round(low * 2**20) / 2**20
