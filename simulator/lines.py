"""Drawn numbers of a block in, its JSON Lines out: every line is joined from ready-made pieces of bytes."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from datetime import date, timedelta

import numpy as np
import numpy.typing as npt

from simulator.companions import doubled
from simulator.draws import Raw, bits
from simulator.feed import BLOCK
from simulator.lexicon import OPEN_KINDS, lexicon
from simulator.phrases import ENDS, JOINS
from simulator.planting import LOCKERS, ROUTES, STOPS, sender_number
from simulator.words import MAKERS

__all__ = ["Fields", "Lines", "Notes"]

FIRST_DAY = date(2031, 3, 3)
HEAVIEST = 3_200
CASES = 6
SHOUT_SHARE = 6  # of 1,024 phrases
CAPITAL_SHARE = 480  # of 1,024 notes
LINE_END = next(i for i, (text, _) in enumerate(JOINS) if text == "\\n")
FULL_STOPS = tuple(i for i, (text, _) in enumerate(JOINS) if text in (".", "!", "...", "\\n"))
HEAD = TAIL = 5
PART = 8_192

Ints = npt.NDArray[np.int64]
Flags = npt.NDArray[np.bool_]


@dataclass(frozen=True, slots=True)
class Fields:
    """int64[m] each: number into ROUTES, STOPS, LOCKERS (its length: none); days since the first; hour, and
    second within it; rank of the sender; weight in units of 10 g."""

    route: Ints
    stop: Ints
    locker: Ints
    day: Ints
    hour: Ints
    second: Ints
    sender: Ints
    decagrams: Ints

    def moment(self) -> Ints:
        """int64[m]: seconds since the midnight before the first message of the log."""
        return (self.day * 24 + self.hour) * 3_600 + self.second


@dataclass(frozen=True, slots=True)
class Notes:
    """m notes as phrases (k of them in all) of units (u in all).

    `phrases_in`, `words`: int64[m], of each note; `phrase_raw`: uint64[k], bits 9 and up are for style;
    `length`: int64[k], in units; `unit`: int64[u], number in the lexicon; `is_open`: int64[o], units that are
    a word of an open class instead, with `rank` and `kind`, int64[o], and `newcomer`, int64[o], the number
    of the newcomer that stands there instead, or -1.
    """

    phrases_in: Ints
    words: Ints
    phrase_raw: Raw
    length: Ints
    unit: Ints
    is_open: Ints
    rank: Ints
    kind: Ints
    newcomer: Ints

    def row_of_unit(self) -> Ints:
        """int64[u]: which note each unit stands in."""
        return np.repeat(np.repeat(np.arange(len(self.phrases_in)), self.phrases_in), self.length)


class Lines:
    """Writes blocks; its store of pieces grows with the vocabulary.

    The first 2 * BLOCK pieces belong to the block in hand (beginnings of ids, days), then come the fixed
    ones, then streets, codes and shops by rank. Words of `accompanied` get their companions.
    """

    def __init__(self, newcomers: Sequence[str] = (), accompanied: frozenset[str] = frozenset()) -> None:
        self._accompanied = accompanied
        self._store = np.empty(1 << 16, dtype=object)
        self._filled = 2 * BLOCK
        add = self._add
        self._id_end = add([f'{i:03d}","at":"' for i in range(1_000)])
        self._minute = add([f"T{h:02d}:{m:02d}:" for h in range(24) for m in range(60)])
        self._second = add([f'{s:02d}Z","note":"' for s in range(60)])
        self._place = add(
            [
                f'","route":"{route}","stop":"{stop}","hour":{hour}'
                for route in ROUTES
                for stop in STOPS
                for hour in range(24)
            ]
        )
        self._sender = add([f',"sender":"S{i:03d}' for i in range(1_000)])
        self._sender_end = add([f'{i:03d}"' for i in range(1_000)])
        self._locker = add([f',"locker":"{name}"' for name in LOCKERS] + [',"locker":null'])
        self._end = add(
            [
                f',"weight_kg":{i // 100}.{i % 100:02d},"redelivered":{text}}}\n'
                for i in range(HEAVIEST)
                for text in ("false", "true")
            ]
        )
        self._join = add([text for text, _ in JOINS])
        self._note_end = add([text for text, _ in ENDS])
        self._unit = add([form for unit in lexicon().units for form in cased(doubled(unit, accompanied))])
        self._newcomer = add([" " + word for word in newcomers])
        self._open = self._filled

    def write(self, first: int, count: int, fields: Fields, notes: Notes, outcome: Flags) -> bytes:
        """Lines of the first `count` messages, numbered from `first`."""
        rows = len(notes.phrases_in)
        last_phrase = np.cumsum(notes.phrases_in)
        first_phrase = last_phrase - notes.phrases_in
        row = np.repeat(np.arange(rows), notes.phrases_in)
        first_unit = np.cumsum(notes.length) - notes.length
        # A phrase takes its units and one piece of punctuation; a row its phrases, a head and a tail.
        phrase_at = first_unit + np.arange(len(row)) + row * (HEAD + TAIL) + HEAD
        row_at = phrase_at[first_phrase] - HEAD

        ids = np.empty(len(notes.unit) + len(row) + rows * (HEAD + TAIL), np.int64)
        place = np.repeat(phrase_at - first_unit, notes.length) + np.arange(len(notes.unit))
        ids[place] = self._unit_pieces(notes, first_phrase, first_unit)
        ids[phrase_at + notes.length] = self._punctuation(notes, last_phrase - 1)
        for column, piece in enumerate(self._head(first + np.arange(rows), fields)):
            ids[row_at + column] = piece
        tail_at = np.append(row_at[1:], len(ids)) - TAIL
        for column, piece in enumerate(self._tail(fields, outcome)):
            ids[tail_at + column] = piece
        used = int(tail_at[count - 1]) + TAIL
        # Joined in parts that stay in the cache, which takes little more than half the time.
        cuts = range(0, used, PART)
        return b"".join([b"".join(self._store[ids[a : min(a + PART, used)]].tolist()) for a in cuts])

    def _add(self, texts: list[str]) -> int:
        """Adds pieces; the number of the first."""
        first, self._filled = self._filled, self._filled + len(texts)
        if self._filled > len(self._store):
            longer = np.empty(max(self._filled, 2 * len(self._store)), dtype=object)
            longer[:first] = self._store[:first]
            self._store = longer
        self._store[first : self._filled] = [text.encode() for text in texts]
        return first

    def _know(self, rank: int) -> None:
        """Adds the open words up to this rank."""
        known = (self._filled - self._open) // OPEN_KINDS
        made = zip(*(maker(known, rank + 1) for maker in MAKERS), strict=True)
        self._add([" " + doubled(word, self._accompanied) for words in made for word in words])

    def _unit_pieces(self, notes: Notes, first_phrase: Ints, first_unit: Ints) -> Ints:
        """int64[u]: the piece of each unit: as it is, with a Capital or SHOUTED, with or without a space."""
        shouted = bits(notes.phrase_raw, 9, 10) < SHOUT_SHARE
        join = lexicon().join_of[bits(notes.phrase_raw, 19, 8)]
        capital = np.append(False, np.isin(join[:-1], FULL_STOPS))
        unspaced = np.append(False, join[:-1] == LINE_END)
        unspaced[first_phrase] = True
        capital[first_phrase] = bits(notes.phrase_raw[first_phrase], 27, 10) < CAPITAL_SHARE
        opening = np.where(shouted, 4, capital * 2) + unspaced
        case = np.repeat(shouted * 4, notes.length)
        case[first_unit] = opening
        pieces = self._unit + notes.unit * CASES + case
        self._know(int(notes.rank.max(initial=-1)))
        ordinary = self._open + notes.rank * OPEN_KINDS + notes.kind
        pieces[notes.is_open] = np.where(notes.newcomer < 0, ordinary, self._newcomer + notes.newcomer)
        return pieces

    def _punctuation(self, notes: Notes, last_phrase: Ints) -> Ints:
        draw = bits(notes.phrase_raw, 19, 8)
        pieces = self._join + lexicon().join_of[draw]
        pieces[last_phrase] = self._note_end + lexicon().end_of[draw[last_phrase]]
        return pieces

    def _head(self, number: Ints, fields: Fields) -> list[Ints]:
        thousands = number // 1_000
        first_thousand, first_day = int(thousands[0]), int(fields.day[0])
        ids = [f'{{"id":"h{i:06d}' for i in range(first_thousand, int(thousands[-1]) + 1)]
        days = [str(FIRST_DAY + timedelta(day)) for day in range(first_day, int(fields.day[-1]) + 1)]
        self._store[: len(ids)] = [text.encode() for text in ids]
        self._store[BLOCK : BLOCK + len(days)] = [text.encode() for text in days]
        return [
            thousands - first_thousand,
            self._id_end + number % 1_000,
            BLOCK + fields.day - first_day,
            self._minute + fields.hour * 60 + fields.second // 60,
            self._second + fields.second % 60,
        ]

    def _tail(self, fields: Fields, outcome: Flags) -> list[Ints]:
        sender = sender_number(fields.sender)
        return [
            self._place + (fields.route * len(STOPS) + fields.stop) * 24 + fields.hour,
            self._sender + sender // 1_000,
            self._sender_end + sender % 1_000,
            self._locker + fields.locker,
            self._end + fields.decagrams * 2 + outcome,
        ]


def cased(unit: str) -> list[str]:
    """Six forms of a unit: as it is, with a capital, in capitals; each after a space and without one."""
    return [space + form for form in (unit, unit.capitalize(), unit.upper()) for space in (" ", "")]
