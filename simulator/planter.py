"""A feed and its random stream in, the sparse true weights out: nearly every token has weight exactly zero.

Weights are multiples of 1/64, so that sums of them are exact in any order.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
import numpy.typing as npt

from simulator.crafted import TARGETS
from simulator.draws import raw_stream, uniform
from simulator.feed import CourierFeed
from simulator.lexicon import OPEN_KINDS, lexicon
from simulator.phrases import TOWARDS_NO, TOWARDS_YES
from simulator.planting import HOURS, LOCKERS, PLANTED_SENDERS, ROUTES, STOPS, Planting, open_word

__all__ = ["OPEN_HOURS", "PLANTED_OPEN", "Planter", "plant"]

PLANTED_OPEN = 300
RARE_OPEN = (100, 1_100)
RARE_SENDERS = (40, 60)
PLANT_STREAM = 1
GRID = 64
OPEN_HOURS = slice(6, 22)

Floats = npt.NDArray[np.float64]
Ints = npt.NDArray[np.int64]


class Planter:
    """Draws which places get a weight, and how large it is."""

    def __init__(self, feed: CourierFeed, stream: int) -> None:
        self._stream = raw_stream(feed.seed, stream)
        self._effect = feed.effect

    def places(self, size: int, count: int, first: Sequence[int] = ()) -> Ints:
        """`count` different places below `size`; those of `first` before all others."""
        order = np.argsort(self._stream.random_raw(size), kind="stable")
        if first:
            order = np.concatenate([np.array(first), order[~np.isin(order, first)]])
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
    """The true weights of this feed's beginning; of those of notes, up to half stand on words that lean."""
    planter = Planter(feed, PLANT_STREAM)
    if feed.scenario == "rare-tokens":
        return _rare(planter, feed.planted_words)
    attacked = TARGETS if feed.scenario == "collisions" else frozenset()
    leanings = [(word, 1.0) for word in TOWARDS_YES] + [(word, -1.0) for word in TOWARDS_NO]
    count = min(len(leanings) * 4 // 5, feed.planted_words // 2)
    first = [i for i, (word, _) in enumerate(leanings) if word in attacked]
    chosen = [leanings[i] for i in planter.places(len(leanings), count, first)]
    lean = planter.sizes(count) * np.array([sign for _, sign in chosen])
    leaning = tuple(word for word, _ in chosen)

    rest = feed.planted_words - count
    column_of_open = np.full(PLANTED_OPEN * OPEN_KINDS, -1)
    first = [i for i in range(len(column_of_open)) if attacked and _open_at(i) in attacked]
    column_of_open[planter.places(len(column_of_open), rest, first)] = count + np.arange(rest)
    note = np.concatenate([lean, planter.signed(rest)])

    hour = np.zeros(HOURS)
    hour[OPEN_HOURS] = planter.spread(16, 16, 4)
    route_hour = np.zeros((len(ROUTES), HOURS))
    route_hour[:, OPEN_HOURS] = planter.spread(len(ROUTES) * 16, len(ROUTES) * 16, 30).reshape(-1, 16)
    return Planting(
        note=note,
        leaning=leaning,
        column_of_unit=_columns_of_units(leaning),
        column_of_open=column_of_open,
        newcomers=(),
        column_of_newcomer=np.empty(0, np.int64),
        route=planter.spread(len(ROUTES), len(ROUTES), 8),
        stop=planter.spread(len(STOPS), len(STOPS), 3),
        hour=hour,
        sender=planter.spread(PLANTED_SENDERS + 1, PLANTED_SENDERS, 24),
        locker=planter.spread(len(LOCKERS) + 1, len(LOCKERS), 6),
        route_hour=route_hour,
    )


def _rare(planter: Planter, count: int) -> Planting:
    """Weights of rare streets, codes, shops and senders only."""
    low, high = (rank * OPEN_KINDS for rank in RARE_OPEN)
    column_of_open = np.full(high, -1)
    column_of_open[low + planter.places(high - low, count)] = np.arange(count)
    sender = np.zeros(PLANTED_SENDERS + 1)
    first, senders = RARE_SENDERS
    sender[first:-1] = planter.spread(PLANTED_SENDERS - first, PLANTED_SENDERS - first, senders)
    return Planting(
        note=planter.signed(count),
        leaning=(),
        column_of_unit=_columns_of_units(()),
        column_of_open=column_of_open,
        newcomers=(),
        column_of_newcomer=np.empty(0, np.int64),
        route=np.zeros(len(ROUTES)),
        stop=np.zeros(len(STOPS)),
        hour=np.zeros(HOURS),
        sender=sender,
        locker=np.zeros(len(LOCKERS) + 1),
        route_hour=np.zeros((len(ROUTES), HOURS)),
    )


def _open_at(place: int) -> str:
    return open_word(*divmod(place, OPEN_KINDS)).casefold()


def _columns_of_units(leaning: tuple[str, ...]) -> Ints:
    """int64[units]: place in `leaning` of the word of it that the unit holds (no unit holds two), or -1."""
    place = {word: i for i, word in enumerate(leaning)}
    return np.array([max(place.get(word, -1) for word in unit.split()) for unit in lexicon().units])
