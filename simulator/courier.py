"""A courier feed in, drawn blocks of messages out: notes, other fields, true margins and outcomes."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from simulator.arithmetic import sigmoid
from simulator.companions import accompanied_units, companions_of
from simulator.course import course_of
from simulator.draws import Raw, bits, raw_stream, uniform
from simulator.feed import BLOCK, CourierFeed
from simulator.lexicon import DRAW_BITS, OPEN_KINDS, SLIP_BITS, lexicon, shared_out
from simulator.lines import Fields, Lines, Notes
from simulator.moving import NEWCOMER_SHARE, plant_course
from simulator.planting import LOCKERS, PLANTED_SENDERS, ROUTES, STOPS, Planting, intercept_for
from simulator.zipf import ZipfLaw

__all__ = ["Courier", "FeedBlock", "TruthAt", "blocks"]

BLOCK_STREAM = 2
PILOT_BLOCKS = 32
RAWS_A_MESSAGE = 6
SLIP_SHARE = 12  # of 1,024 units that can be misspelt
LOCKER_STOP = STOPS.index("locker")
STOP_SHARES = ((40, 6, 10, 8, 6, 20, 4, 6), (24, 36, 16, 8, 10, 1, 3, 2), (12, 24, 14, 18, 24, 0, 4, 4))
"""Stop kinds of country, suburb and town routes (every third route is of the same sort)."""
HOUR_SHARES = (2, 5, 9, 11, 11, 9, 7, 7, 8, 8, 7, 6, 4, 3, 2, 1)
FIRST_HOUR = 6
ENOUGH = 500
"""Messages that suffice to solve an intercept over."""

Floats = npt.NDArray[np.float64]
Ints = npt.NDArray[np.int64]


@dataclass(frozen=True, slots=True)
class FeedBlock:
    """Consecutive messages of a feed, m of them, the first of them message number `first`.

    `lines`: JSON Lines, bytes; `probability`: float64[m], true probability before label noise;
    `outcome`: bool[m], as written, after label noise; `flipped`: bool[m];
    `second`: int64[m], its time, counted from the midnight before the first message of the log;
    `words`: int64[m], in each note.
    """

    first: int
    lines: bytes
    probability: Floats
    outcome: npt.NDArray[np.bool_]
    flipped: npt.NDArray[np.bool_]
    second: Ints
    words: Ints

    def __len__(self) -> int:
        return len(self.outcome)


@dataclass(frozen=True, slots=True)
class TruthAt:
    """What is true at one message: weights and intercept."""

    intercept: float
    planting: Planting

    def tokens(self) -> list[dict[str, Any]]:
        """Every non-zero weight of one token: field, token (case folded in notes), weight."""
        return self.planting.tokens()

    def crosses(self) -> list[dict[str, Any]]:
        """Every non-zero weight of a route and an hour together: fields, tokens, weight."""
        return self.planting.crosses()


@dataclass(frozen=True, slots=True)
class _Drawn:
    """A whole block before it is written; `margin`, `later_margin`: float64[BLOCK], without the intercept, by
    the first truth and the later one."""

    raws: Raw
    fields: Fields
    notes: Notes
    margin: Floats
    later_margin: Floats

    def margin_at(self, share: Floats) -> Floats:
        """float64[BLOCK]: where each message is this far on the way from the first truth to the later one."""
        return self.margin + share * (self.later_margin - self.margin)


class Courier:
    """One feed, ready to write its blocks in any order: block i depends on the settings and i only.

    `planting` is the first truth and `later` the one that `course` leads to; `intercepts`: float64, that of
    each step of the course; `accompanied`: words that never stand without their companion.
    """

    def __init__(self, feed: CourierFeed) -> None:
        self.feed = feed
        self.planting, self.later = plant_course(feed)
        self.course = course_of(feed)
        self.accompanied = companions_of(feed, self.planting)
        self.words_known = feed.words_known(feed.messages - 1)
        self._law = ZipfLaw(feed.zipf_exponent, self.words_known)
        newcomers = self.planting.newcomers
        self._newcomer_law = ZipfLaw(feed.zipf_exponent, len(newcomers)) if newcomers else None
        self._lines = Lines(newcomers, self.accompanied)
        self._accompanied_units = accompanied_units(self.accompanied)
        self._stop_of = np.array([shared_out(shares, 512) for shares in STOP_SHARES])
        self.intercepts = self._solve_intercepts()

    @property
    def intercept(self) -> float:
        """That of the first message."""
        return float(self.intercepts[0])

    def truth_at(self, message: int) -> TruthAt:
        """What is true at this message (0 to feed.messages - 1)."""
        if not 0 <= message < self.feed.messages:
            raise ValueError(f"message is {message}; the log has 0 to {self.feed.messages - 1}")
        step = int(self.course.step_of(np.array([message]))[0])
        share = float(self.course.share[step])
        return TruthAt(float(self.intercepts[step]), self.planting.towards(self.later, share))

    def block(self, number: int) -> FeedBlock:
        """Block `number` (0 to feed.block_count - 1), with its lines."""
        first = number * BLOCK
        count = min(BLOCK, self.feed.messages - first)
        drawn = self._draw(number)
        step = self.course.step_of(first + np.arange(BLOCK))
        probability = sigmoid(drawn.margin_at(self.course.share[step]) + self.intercepts[step])
        flipped = uniform(drawn.raws[:, 5]) < self.feed.label_noise
        outcome = (uniform(drawn.raws[:, 4]) < probability) != flipped
        lines = self._lines.write(first, count, drawn.fields, drawn.notes, outcome)
        return FeedBlock(
            first,
            lines,
            probability[:count],
            outcome[:count],
            flipped[:count],
            drawn.fields.moment()[:count],
            drawn.notes.words[:count],
        )

    def _solve_intercepts(self) -> Floats:
        """float64[steps]: of each step that which makes the mean of its true probabilities its rate.

        They are solved over up to 32 blocks, evenly spread: the whole log if it has up to 131,072 messages.
        Steps with the same truth and rate count as one; where that has few messages, over all.
        """
        count = self.feed.block_count
        numbers = sorted({i * count // PILOT_BLOCKS for i in range(PILOT_BLOCKS)})
        drawn = [self._draw(i) for i in numbers]
        left = [min(BLOCK, self.feed.messages - i * BLOCK) for i in numbers]
        message = np.concatenate([i * BLOCK + np.arange(n) for i, n in zip(numbers, left, strict=True)])
        margin, later = (
            np.concatenate([getattr(d, name)[:n] for d, n in zip(drawn, left, strict=True)])
            for name in ("margin", "later_margin")
        )
        step = self.course.step_of(message)
        kinds = np.stack([self.course.share, self.course.rate], axis=1)
        distinct, kind_of = np.unique(kinds, axis=0, return_inverse=True)
        kind_of = kind_of.reshape(-1)
        solved = np.empty(len(distinct))
        for i, (share, rate) in enumerate(distinct.tolist()):
            own = kind_of[step] == i
            if np.count_nonzero(own) < ENOUGH:
                own[:] = True
            solved[i] = intercept_for(margin[own] + share * (later[own] - margin[own]), rate)
        return solved[kind_of]

    def _draw(self, number: int) -> _Drawn:
        stream = raw_stream(self.feed.seed, BLOCK_STREAM, number)
        raws = stream.random_raw((BLOCK, RAWS_A_MESSAGE))
        known = self.feed.words_known(number * BLOCK)
        message = number * BLOCK + np.arange(BLOCK)
        fields = self._draw_fields(raws, message, known)
        notes = self._draw_notes(stream, raws, message, known)
        return _Drawn(raws, fields, notes, *self._margins(fields, notes))

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

    def _draw_notes(self, stream: np.random.PCG64, raws: Raw, message: Ints, known: int) -> Notes:
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
        newcomer = np.full(len(is_open), -1)
        notes = Notes(phrases_in, words, phrase_raw, length, unit, is_open, rank, kind[is_open], newcomer)
        self._let_in(notes, raw[is_open], message)
        if self.accompanied:
            words += np.bincount(notes.row_of_unit()[self._has_companion(notes)], minlength=BLOCK)
        return notes

    def _let_in(self, notes: Notes, raw: Raw, message: Ints) -> None:
        """Puts newcomers in the place of a share of the open words, from the turning point on."""
        if self._newcomer_law is None or message[-1] < self.feed.turning_point:
            return
        late = message[notes.row_of_unit()[notes.is_open]] >= self.feed.turning_point
        replaced = late & (bits(raw, 0, 11) < NEWCOMER_SHARE)
        count = len(self.planting.newcomers)
        notes.newcomer[replaced] = self._newcomer_law.ranks(uniform(raw[replaced]), count)

    def _has_companion(self, notes: Notes) -> npt.NDArray[np.bool_]:
        """bool[u]: units with a word that never stands alone."""
        found = self._accompanied_units[notes.unit]
        found[notes.is_open] = self._columns(notes)[notes.is_open] >= 0
        return found

    def _columns(self, notes: Notes) -> Ints:
        """int64[u]: the place in the planted note words of the one in each unit, or -1."""
        truth = self.planting
        column = truth.column_of_unit[notes.unit]
        place = notes.rank * OPEN_KINDS + notes.kind
        in_reach = place < len(truth.column_of_open)
        of_open = np.where(in_reach, truth.column_of_open[np.where(in_reach, place, 0)], -1)
        came = np.flatnonzero(notes.newcomer >= 0)
        of_open[came] = truth.column_of_newcomer[notes.newcomer[came]]
        column[notes.is_open] = of_open
        return column

    def _margins(self, fields: Fields, notes: Notes) -> tuple[Floats, Floats]:
        """float64[BLOCK] by the first truth and by the later one, exact: sums of the weights of the distinct
        tokens of each message."""
        column = self._columns(notes)
        planted = np.flatnonzero(column >= 0)
        width = len(self.planting.note)
        present = np.zeros((BLOCK, width), np.bool_)
        present[notes.row_of_unit()[planted], column[planted]] = True
        row, token = np.divmod(np.flatnonzero(present), max(width, 1))

        def margin_by(truth: Planting) -> Floats:
            margin = truth.route[fields.route] + truth.stop[fields.stop] + truth.hour[fields.hour]
            margin += truth.locker[fields.locker] + truth.route_hour[fields.route, fields.hour]
            margin += truth.sender[np.minimum(fields.sender, PLANTED_SENDERS)]
            return margin + np.bincount(row, truth.note[token], minlength=BLOCK)

        margin = margin_by(self.planting)
        return margin, margin if self.later is self.planting else margin_by(self.later)


def blocks(feed: CourierFeed) -> Iterator[FeedBlock]:
    """The messages of the feed in order, 4,096 at a time; holds one block and the vocabulary in memory."""
    courier = Courier(feed)
    for number in range(feed.block_count):
        yield courier.block(number)
