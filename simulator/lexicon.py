"""The phrases of simulator/phrases.py in, number tables to draw notes from out."""

from __future__ import annotations

from collections.abc import Sequence
from functools import cache

import numpy as np
import numpy.typing as npt

from simulator.phrases import CLASSES, ENDS, JOINS, OPEN_CLASSES, PHRASES
from simulator.words import slips

__all__ = ["DRAW_BITS", "OPEN_KINDS", "SLIP_BITS", "Lexicon", "lexicon", "shared_out"]

DRAW_BITS = 9
SLIP_BITS = 2
OPEN_KINDS = len(OPEN_CLASSES)
Ints = npt.NDArray[np.int64]


def shared_out(weights: Sequence[int], cells: int) -> Ints:
    """int64[cells]: positions in `weights`, each in cells in proportion to its whole-number weight."""
    total = sum(weights)
    edges = np.cumsum(np.array(weights, dtype=np.int64)) * cells // total
    return np.searchsorted(edges, np.arange(cells), side="right").astype(np.int64)


class Lexicon:
    """Everything about notes that does not depend on the settings.

    `words`: the closed vocabulary and, after it, its misspellings; word i is written words[i];
    `slips`: int64[words, 4], misspellings of a word, or the word itself where it has none;
    `phrase_of`: int64[512], phrase by nine random bits; `phrase_start`, `phrase_length`: its slots;
    `slots`: int64[...], slot number of each place in each phrase, phrases one after the other;
    `word_of`: int64[slots * 512], word by slot and nine random bits;
    `open_kind`: int64[slots], 0 street, 1 code, 2 shop, -1 for a slot of the closed vocabulary;
    `join_of`, `end_of`: int64[256], punctuation by eight random bits.
    """

    def __init__(self) -> None:
        phrases = [line.split() for line, _ in PHRASES]
        literals = {w for phrase in phrases for w in phrase if w not in CLASSES and w not in OPEN_CLASSES}
        classes = CLASSES | {word: (word,) for word in sorted(literals)}
        self.words = sorted({word for members in classes.values() for word in members})
        self.closed = len(self.words)
        number = {word: i for i, word in enumerate(self.words)}
        self._add_slips()

        names = [*classes, *OPEN_CLASSES]
        slot = {name: i for i, name in enumerate(names)}
        cells = 1 << DRAW_BITS
        self.word_of = np.zeros(len(names) * cells, np.int64)
        for i, members in enumerate(classes.values()):
            commonness = [2520 // (place + 2) for place in range(len(members))]
            chosen = np.array([number[word] for word in members])
            self.word_of[i * cells : (i + 1) * cells] = chosen[shared_out(commonness, cells)]
        self.open_kind = np.full(len(names), -1, np.int64)
        self.open_kind[len(classes) :] = np.arange(OPEN_KINDS)

        self.slots = np.array([slot[word] for phrase in phrases for word in phrase])
        self.phrase_length = np.array([len(phrase) for phrase in phrases])
        self.phrase_start = np.cumsum(self.phrase_length) - self.phrase_length
        self.phrase_of = shared_out([weight for _, weight in PHRASES], cells)
        self.mean_phrase = float(self.phrase_length[self.phrase_of].mean())
        self.join_of = shared_out([weight for _, weight in JOINS], 256)
        self.end_of = shared_out([weight for _, weight in ENDS], 256)

    def _add_slips(self) -> None:
        taken = set(self.words)
        rows: list[list[int]] = []
        for i in range(self.closed):
            found = slips(self.words[i], taken)
            first = len(self.words)
            self.words += found
            rows.append([first + k % len(found) if found else i for k in range(1 << SLIP_BITS)])
        self.slips = np.array(rows)


@cache
def lexicon() -> Lexicon:
    """The one lexicon, built at first use."""
    return Lexicon()
