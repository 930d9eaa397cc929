"""Drawn numbers of a block in, its JSON Lines out: every line is joined from ready-made pieces of bytes."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from simulator.draws import Raw, bits
from simulator.lexicon import OPEN_KINDS, lexicon
from simulator.phrases import ENDS, JOINS
from simulator.planting import LOCKERS, ROUTES, STOPS, open_word, sender_number

__all__ = ["FIRST_DAY", "Fields", "Lines", "Notes"]

FIRST_DAY = "2031-03-03"
FIRST_YEAR = 2031
YEARS = 402
CASES = 6
SHOUT_SHARE = 6  # of 1,024 phrases
CAPITAL_SHARE = 480  # of 1,024 notes
FULL_STOPS = tuple(i for i, (text, _) in enumerate(JOINS) if text in (".", "!", "...", "\\n"))
HEAD, TAIL = 7, 8

Ints = npt.NDArray[np.int64]


@dataclass(frozen=True, slots=True)
class Fields:
    """int64[m] each: numbers into ROUTES, STOPS, LOCKERS (its length: none), days since the first, hour and second
    in the hour, rank of the sender, weight in units of 10 g."""

    route: Ints
    stop: Ints
    locker: Ints
    day: Ints
    hour: Ints
    second: Ints
    sender: Ints
    decagrams: Ints


@dataclass(frozen=True, slots=True)
class Notes:
    """m notes as phrases (k of them in all) of words (w in all).

    `phrases_in`: int64[m]; `phrase_raw`: uint64[k], its bits from 9 up are for style; `length`: int64[k], words;
    `word`: int64[w], number in the lexicon; `is_open`: int64[o], which words are of an open class instead, with
    their `rank` and `kind`, int64[o].
    """

    phrases_in: Ints
    phrase_raw: Raw
    length: Ints
    word: Ints
    is_open: Ints
    rank: Ints
    kind: Ints

    def row_of_word(self) -> Ints:
        """int64[w]: which note each word stands in."""
        return np.repeat(np.repeat(np.arange(len(self.phrases_in)), self.phrases_in), self.length)


class Lines:
    """Writes blocks; grows its store of pieces as the vocabulary grows."""

    def __init__(self) -> None:
        self._pieces: list[bytes] = []
        thousand = range(1000)
        add = self._add
        self._id_start = add([f'{{"id":"h{i:03d}' for i in thousand])
        self._digits = add([f"{i:03d}" for i in thousand])
        self._id_end = add([f'{i:03d}","at":"' for i in thousand])
        self._year = add([f"{FIRST_YEAR + i}-" for i in range(YEARS)])
        self._date = add([f"{m:02d}-{d:02d}T" for m in range(1, 13) for d in range(1, 32)])
        self._minute = add([f"{h:02d}:{m:02d}:" for h in range(24) for m in range(60)])
        self._second = add([f'{s:02d}Z","note":"' for s in range(60)])
        self._route = add([f'","route":"{name}"' for name in ROUTES])
        self._stop = add([f',"stop":"{name}"' for name in STOPS])
        self._hour = add([f',"hour":{i}' for i in range(24)])
        self._sender = add([f',"sender":"S{i:03d}' for i in thousand])
        self._sender_end = add([f'{i:03d}"' for i in thousand])
        self._locker = add([f',"locker":"{name}"' for name in LOCKERS] + [',"locker":null'])
        self._weight = add([f',"weight_kg":{i // 100}.{i % 100:02d}' for i in range(3_200)])
        self._outcome = add([f',"redelivered":{text}}}\n' for text in ("false", "true")])
        self._join = add([text for text, _ in JOINS])
        self._end = add([text for text, _ in ENDS])
        self._word = add([form for word in lexicon().words for form in cased(word)])
        self._open = len(self._pieces)

    def _add(self, texts: list[str]) -> int:
        first = len(self._pieces)
        self._pieces += [text.encode() for text in texts]
        return first

    def write(
        self, first: int, count: int, fields: Fields, notes: Notes, outcome: npt.NDArray[np.bool_]
    ) -> tuple[bytes, int]:
        """Lines of the first `count` messages, numbered from `first`, and how many words their notes hold."""
        rows = len(notes.phrases_in)
        last_phrase = np.cumsum(notes.phrases_in)
        first_phrase = last_phrase - notes.phrases_in
        row = np.repeat(np.arange(rows), notes.phrases_in)
        last_word = np.cumsum(notes.length)
        # A phrase takes its words and one piece of punctuation; a row its phrases, a head and a tail.
        phrase_at = last_word - notes.length + np.arange(len(row)) + row * (HEAD + TAIL) + HEAD
        row_at = phrase_at[first_phrase] - HEAD

        ids = np.empty(int(last_word[-1]) + len(row) + rows * (HEAD + TAIL), np.int64)
        place = np.repeat(phrase_at - (last_word - notes.length), notes.length) + np.arange(len(notes.word))
        ids[place] = self._word_pieces(notes, first_phrase, last_word - notes.length)
        ids[phrase_at + notes.length] = self._punctuation(notes, last_phrase - 1)
        for column, piece in enumerate(self._head(first + np.arange(rows), fields)):
            ids[row_at + column] = piece
        tail_at = np.append(row_at[1:], len(ids)) - TAIL
        for column, piece in enumerate(self._tail(fields, outcome)):
            ids[tail_at + column] = piece
        used = ids[: tail_at[count - 1] + TAIL]
        return b"".join(map(self._pieces.__getitem__, used.tolist())), int(last_word[last_phrase[count - 1] - 1])

    def _word_pieces(self, notes: Notes, first_phrase: Ints, first_word: Ints) -> Ints:
        """int64[w]: the piece of each word; cases are plain, Capital, SHOUTED, and each without a space before."""
        lead = lexicon()
        shouted = bits(notes.phrase_raw, 9, 10) < SHOUT_SHARE
        capital = np.zeros(len(shouted), np.bool_)
        ended = np.isin(lead.join_of[bits(notes.phrase_raw, 19, 8)], FULL_STOPS)
        capital[1:] = ended[:-1]
        capital[first_phrase] = bits(notes.phrase_raw[first_phrase], 27, 10) < CAPITAL_SHARE
        case = np.repeat(shouted * 4, notes.length)
        opening = np.where(shouted, 4, capital * 2)
        opening[first_phrase] += 1
        case[first_word] = opening
        pieces = self._word + notes.word * CASES + case
        self._know(int(notes.rank.max(initial=-1)))
        pieces[notes.is_open] = self._open + notes.rank * OPEN_KINDS + notes.kind
        return pieces

    def _know(self, rank: int) -> None:
        """Adds the open words up to this rank."""
        known = (len(self._pieces) - self._open) // OPEN_KINDS
        self._add([" " + open_word(r, kind) for r in range(known, rank + 1) for kind in range(OPEN_KINDS)])

    def _punctuation(self, notes: Notes, last_phrase: Ints) -> Ints:
        draw = bits(notes.phrase_raw, 19, 8)
        pieces = self._join + lexicon().join_of[draw]
        pieces[last_phrase] = self._end + lexicon().end_of[draw[last_phrase]]
        return pieces

    def _head(self, number: Ints, fields: Fields) -> list[Ints]:
        date = np.datetime64(FIRST_DAY) + fields.day
        month = date.astype("datetime64[M]")
        year = date.astype("datetime64[Y]")
        months = (month - year.astype("datetime64[M]")).astype(np.int64)
        days = (date - month.astype("datetime64[D]")).astype(np.int64)
        return [
            self._id_start + number // 1_000_000,
            self._digits + number // 1_000 % 1_000,
            self._id_end + number % 1_000,
            self._year + (year.astype(np.int64) + 1970 - FIRST_YEAR),
            self._date + months * 31 + days,
            self._minute + fields.hour * 60 + fields.second // 60,
            self._second + fields.second % 60,
        ]

    def _tail(self, fields: Fields, outcome: npt.NDArray[np.bool_]) -> list[Ints]:
        sender = sender_number(fields.sender)
        return [
            self._route + fields.route,
            self._stop + fields.stop,
            self._hour + fields.hour,
            self._sender + sender // 1_000,
            self._sender_end + sender % 1_000,
            self._locker + fields.locker,
            self._weight + fields.decagrams,
            self._outcome + outcome,
        ]


def cased(word: str) -> list[str]:
    """The six forms of a word: as it is, with a capital, in capitals; each after a space and without one."""
    return [space + form for form in (word, word.capitalize(), word.upper()) for space in (" ", "")]
