"""A courier feed in, drawn blocks of messages out: notes, other fields, true margins and outcomes."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from simulator.arithmetic import sigmoid
from simulator.draws import Raw, bits, raw_stream, uniform
from simulator.feed import BLOCK, CourierFeed
from simulator.lexicon import DRAW_BITS, SLIP_BITS, lexicon, shared_out
from simulator.lines import Fields, Lines, Notes
from simulator.planting import LOCKERS, PLANTED_SENDERS, ROUTES, STOPS, intercept_for, plant
from simulator.zipf import ZipfLaw

__all__ = ["Courier", "FeedBlock", "blocks"]

BLOCK_STREAM = 2
PILOT_BLOCKS = 32
RAWS_A_MESSAGE = 6
SLIP_SHARE = 12  # of 1,024 units that can be misspelt
LOCKER_STOP = STOPS.index("locker")
STOP_SHARES = ((40, 6, 10, 8, 6, 20, 4, 6), (24, 36, 16, 8, 10, 1, 3, 2), (12, 24, 14, 18, 24, 0, 4, 4))
"""Stop kinds of country, suburb and town routes (every third route is of the same sort)."""
HOUR_SHARES = (2, 5, 9, 11, 11, 9, 7, 7, 8, 8, 7, 6, 4, 3, 2, 1)
FIRST_HOUR = 6

Floats = npt.NDArray[np.float64]
Ints = npt.NDArray[np.int64]


@dataclass(frozen=True, slots=True)
class FeedBlock:
    """Consecutive messages of a feed, m of them, the first of them message number `first`.

    `lines`: JSON Lines, bytes; `probability`: float64[m], true probability before label noise;
    `outcome`: bool[m], as written, after label noise; `flipped`: bool[m]; `words`: words in all notes.
    """

    first: int
    lines: bytes
    probability: Floats
    outcome: npt.NDArray[np.bool_]
    flipped: npt.NDArray[np.bool_]
    words: int

    def __len__(self) -> int:
        return len(self.outcome)


@dataclass(frozen=True, slots=True)
class _Drawn:
    """A whole block before it is written; `margin`: float64[BLOCK], without the intercept."""

    raws: Raw
    fields: Fields
    notes: Notes
    margin: Floats


class Courier:
    """One feed, ready to write its blocks in any order: block i depends on the settings and i only."""

    def __init__(self, feed: CourierFeed) -> None:
        self.feed = feed
        self.planting = plant(feed)
        self.words_known = feed.words_known(feed.messages - 1)
        self._law = ZipfLaw(feed.zipf_exponent, self.words_known)
        self._lines = Lines()
        self._stop_of = np.array([shared_out(shares, 512) for shares in STOP_SHARES])
        self.intercept = intercept_for(self._pilot_margins(), feed.base_rate)

    def block(self, number: int) -> FeedBlock:
        """Block `number` (0 to feed.block_count - 1), with its lines."""
        first = number * BLOCK
        count = min(BLOCK, self.feed.messages - first)
        drawn = self._draw(number)
        probability = sigmoid(drawn.margin + self.intercept)
        flipped = uniform(drawn.raws[:, 5]) < self.feed.label_noise
        outcome = (uniform(drawn.raws[:, 4]) < probability) != flipped
        lines = self._lines.write(first, count, drawn.fields, drawn.notes, outcome)
        words = int(drawn.notes.words[:count].sum())
        return FeedBlock(first, lines, probability[:count], outcome[:count], flipped[:count], words)

    def _pilot_margins(self) -> Floats:
        """Margins of up to 32 blocks, evenly spread: of the whole log if it has up to 131,072 messages."""
        count = self.feed.block_count
        numbers = sorted({i * count // PILOT_BLOCKS for i in range(PILOT_BLOCKS)})
        return np.concatenate([self._draw(i).margin[: self.feed.messages - i * BLOCK] for i in numbers])

    def _draw(self, number: int) -> _Drawn:
        stream = raw_stream(self.feed.seed, BLOCK_STREAM, number)
        raws = stream.random_raw((BLOCK, RAWS_A_MESSAGE))
        known = self.feed.words_known(number * BLOCK)
        fields = self._draw_fields(raws, number * BLOCK + np.arange(BLOCK), known)
        notes = self._draw_notes(stream, raws, known)
        return _Drawn(raws, fields, notes, self._margins(fields, notes))

    def _draw_fields(self, raws: Raw, message: Ints, known: int) -> Fields:
        route = bits(raws[:, 1], 0, 16) * len(ROUTES) >> 16
        stop = self._stop_of[route % 3, bits(raws[:, 1], 16, 9)]
        locker = np.where(stop == LOCKER_STOP, bits(raws[:, 1], 25, 16) * len(LOCKERS) >> 16, len(LOCKERS))
        day, of_day = np.divmod(message, self.feed.messages_per_day)
        shares = np.array(HOUR_SHARES)
        ends = np.cumsum(shares)
        of_day = of_day + bits(raws[:, 1], 41, 20) * 2.0**-20
        moment = of_day / self.feed.messages_per_day * ends[-1]
        hour = np.searchsorted(ends, moment, side="right")
        second = (moment - (ends - shares)[hour]) / shares[hour] * 3600
        size = uniform(raws[:, 3])
        return Fields(
            route=route,
            stop=stop,
            locker=locker,
            day=day,
            hour=hour + FIRST_HOUR,
            second=np.minimum(second, 3599).astype(np.int64),
            sender=self._law.ranks(uniform(raws[:, 2]), known // 4),
            decagrams=10 + (size * size * size * 3000).astype(np.int64),
        )

    def _draw_notes(self, stream: np.random.PCG64, raws: Raw, known: int) -> Notes:
        lex = lexicon()
        mean = self.feed.words_per_note / lex.mean_phrase
        wanted = mean * (0.5 + bits(raws[:, 0], 0, 32) * 2.0**-32) + bits(raws[:, 0], 32, 31) * 2.0**-31
        phrases_in = np.maximum(wanted.astype(np.int64), 1)
        phrase_raw = stream.random_raw(int(phrases_in.sum()))
        phrase = lex.phrase_of[bits(phrase_raw, 0, DRAW_BITS)]
        length = lex.phrase_length[phrase]
        first_unit = np.cumsum(length) - length
        raw = stream.random_raw(int(length.sum()))
        slot = lex.slots[np.repeat(lex.phrase_start[phrase] - first_unit, length) + np.arange(len(raw))]
        unit = lex.unit_of[(slot << DRAW_BITS) + bits(raw, 64 - DRAW_BITS, DRAW_BITS)]
        slipped = np.flatnonzero(bits(raw, 0, 10) < SLIP_SHARE)
        unit[slipped] = lex.slips[unit[slipped], bits(raw[slipped], 10, SLIP_BITS)]
        kind = lex.open_kind[slot]
        is_open = np.flatnonzero(kind >= 0)
        rank = self._law.ranks(uniform(raw[is_open]), known)
        words = np.add.reduceat(lex.phrase_words[phrase], np.cumsum(phrases_in) - phrases_in)
        return Notes(phrases_in, words, phrase_raw, length, unit, is_open, rank, kind[is_open])

    def _margins(self, fields: Fields, notes: Notes) -> Floats:
        """float64[BLOCK]: sums of the weights of the distinct tokens of each message, exact."""
        truth = self.planting
        margin = truth.route[fields.route] + truth.stop[fields.stop] + truth.hour[fields.hour]
        margin += truth.locker[fields.locker] + truth.route_hour[fields.route, fields.hour]
        margin += truth.sender[np.minimum(fields.sender, PLANTED_SENDERS)]
        column = truth.column_of_unit[notes.unit]
        place = notes.rank * 3 + notes.kind
        in_reach = place < len(truth.column_of_open)
        column[notes.is_open] = np.where(in_reach, truth.column_of_open[np.where(in_reach, place, 0)], -1)
        planted = np.flatnonzero(column >= 0)
        present = np.zeros((BLOCK, len(truth.note)), np.bool_)
        present[notes.row_of_unit()[planted], column[planted]] = True
        row, token = np.divmod(np.flatnonzero(present), max(len(truth.note), 1))
        return margin + np.bincount(row, truth.note[token], minlength=BLOCK)


def blocks(feed: CourierFeed) -> Iterator[FeedBlock]:
    """The messages of the feed in order, 4,096 at a time; holds one block and the vocabulary in memory."""
    courier = Courier(feed)
    for number in range(feed.block_count):
        yield courier.block(number)
