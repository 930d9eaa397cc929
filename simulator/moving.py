"""The truth of a feed's beginning in; the same with the places that it goes to, and the truth there, out."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np
import numpy.typing as npt

from simulator.crafted import CRAFTED
from simulator.feed import CourierFeed
from simulator.lexicon import OPEN_KINDS
from simulator.planter import OPEN_HOURS, Planter, plant
from simulator.planting import PLANTED_SENDERS, Planting, open_word

__all__ = ["NEWCOMER_SHARE", "plant_course"]

MOVE_STREAM = 5
FRESH_WORDS = 500
FRESH_CANDIDATES = 100
NEWCOMER_SHARE = 1_024
"""Of 2,048 streets, codes and shops: how many a newcomer replaces, once there are some."""

Floats = npt.NDArray[np.float64]
Flags = npt.NDArray[np.bool_]


def plant_course(feed: CourierFeed) -> tuple[Planting, Planting]:
    """First and later truth over the same words; one and the same where no weight moves."""
    first = plant(feed)
    if feed.scenario in ("sudden-change", "slow-drift", "seasonal"):
        return _moved(first, feed)
    if feed.scenario == "new-vocabulary":
        return _with_fresh_words(first, feed)
    if feed.scenario == "collisions":
        words = tuple(word for words in CRAFTED.values() for word in words)
        first = replace(first, newcomers=words, column_of_newcomer=np.full(len(words), -1))
    return first, first


def _moved(first: Planting, feed: CourierFeed) -> tuple[Planting, Planting]:
    """`feed.moving` of the weights of each kind move: half flip, half go over to tokens that had none."""
    planter = Planter(feed, MOVE_STREAM)
    first, new_words = _with_room(first, planter, _moving_count(first.note, feed.moving) // 2)
    hours = np.zeros(first.hour.shape, np.bool_)
    hours[OPEN_HOURS] = True
    candidates = {
        "note": new_words,
        "route": np.ones(first.route.shape, np.bool_),
        "stop": np.ones(first.stop.shape, np.bool_),
        "hour": hours,
        "sender": np.arange(len(first.sender)) < PLANTED_SENDERS,
        "locker": np.arange(len(first.locker)) < len(first.locker) - 1,
        "route_hour": np.broadcast_to(hours, first.route_hour.shape),
    }
    later: dict[str, Any] = {
        name: _gone(planter, getattr(first, name), may, feed.moving) for name, may in candidates.items()
    }
    return first, replace(first, **later)


def _with_room(first: Planting, planter: Planter, count: int) -> tuple[Planting, Flags]:
    """Columns without weight for `count` more streets, codes and shops among the commonest, and which they
    are."""
    free = np.flatnonzero(first.column_of_open < 0)
    taken = free[planter.places(len(free), count)]
    column_of_open = first.column_of_open.copy()
    column_of_open[taken] = len(first.note) + np.arange(len(taken))
    note = np.concatenate([first.note, np.zeros(len(taken))])
    return replace(first, note=note, column_of_open=column_of_open), np.arange(len(note)) >= len(first.note)


def _moving_count(weights: Floats, moving: float) -> int:
    return int(np.count_nonzero(weights) * moving + 0.5)


def _gone(planter: Planter, weights: Floats, candidates: Flags, moving: float) -> Floats:
    """`weights` after the move; tokens that get one are among the `candidates`."""
    flat, later = weights.ravel(), weights.ravel().copy()
    planted = np.flatnonzero(flat)
    movers = planted[planter.places(len(planted), _moving_count(flat, moving))]
    free = np.flatnonzero((flat == 0) & candidates.ravel())
    to = free[planter.places(len(free), len(movers) // 2)]
    leaving, flipping = movers[: len(to)], movers[len(to) :]
    later[to] = flat[leaving]
    later[leaving] = 0.0
    later[flipping] = -flat[flipping]
    return later.reshape(weights.shape)


def _with_fresh_words(first: Planting, feed: CourierFeed) -> tuple[Planting, Planting]:
    """Words behind all that the feed can draw, and later weights of some of the commonest of them."""
    planter = Planter(feed, MOVE_STREAM)
    behind = feed.words_known(feed.messages - 1)
    words = tuple(open_word(behind + i, kind) for i in range(FRESH_WORDS) for kind in range(OPEN_KINDS))
    planted = min(feed.planted_words // 2, FRESH_CANDIDATES)
    column = np.full(len(words), -1)
    column[planter.places(FRESH_CANDIDATES, planted)] = len(first.note) + np.arange(planted)
    first = replace(
        first,
        note=np.concatenate([first.note, np.zeros(planted)]),
        newcomers=words,
        column_of_newcomer=column,
    )
    note = first.note.copy()
    note[len(note) - planted :] = planter.signed(planted)
    return first, replace(first, note=note)
