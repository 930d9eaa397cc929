"""The phrases of simulator/phrases.py in, number tables to draw notes from out."""

from __future__ import annotations

from collections.abc import Sequence
from functools import cache

import numpy as np
import numpy.typing as npt

from simulator.phrases import CLASSES, ENDS, JOINS, OPEN_CLASSES, PHRASES
from simulator.words import can_slip, slips

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

    A unit is a word of a class, a fixed run of words inside a phrase ("no answer at"), or one of these with
    a slip of the pen. `units`: their texts; `slips`: int64[..., 4], four misspellings of a unit without one,
    or the unit itself where nothing in it can be misspelt; `meant`: the word that a misspelt one was to be;
    `phrase_of`: int64[512], phrase by nine random bits; `phrase_start`, `phrase_length`: its slots;
    `phrase_words`: its words; `slots`: int64[...], slot number of each place in each phrase, one phrase
    after the other; `unit_of`: int64[slots * 512], unit by slot and nine random bits;
    `open_kind`: int64[slots], 0 street, 1 code, 2 shop, -1 for a slot that is not open;
    `join_of`, `end_of`: int64[256], punctuation by eight random bits; `mean_phrase`: words in a phrase.
    """

    def __init__(self) -> None:
        phrases = [_parts(line) for line, _ in PHRASES]
        runs = {part for phrase in phrases for part in phrase} - {*CLASSES, *OPEN_CLASSES}
        classes = CLASSES | {run: (run,) for run in sorted(runs)}
        self.units = sorted({unit for members in classes.values() for unit in members})
        number = {unit: i for i, unit in enumerate(self.units)}
        self._add_slips()

        names = [*classes, *OPEN_CLASSES]
        slot = {name: i for i, name in enumerate(names)}
        cells = 1 << DRAW_BITS
        self.unit_of = np.zeros(len(names) * cells, np.int64)
        for i, members in enumerate(classes.values()):
            commonness = [2520 // (place + 2) for place in range(len(members))]
            chosen = np.array([number[unit] for unit in members])
            self.unit_of[i * cells : (i + 1) * cells] = chosen[shared_out(commonness, cells)]
        self.open_kind = np.full(len(names), -1, np.int64)
        self.open_kind[len(classes) :] = np.arange(OPEN_KINDS)

        self.slots = np.array([slot[part] for phrase in phrases for part in phrase])
        self.phrase_length = np.array([len(phrase) for phrase in phrases])
        self.phrase_start = np.cumsum(self.phrase_length) - self.phrase_length
        self.phrase_words = np.array([len(line.split()) for line, _ in PHRASES])
        self.phrase_of = shared_out([weight for _, weight in PHRASES], cells)
        self.mean_phrase = int(self.phrase_words[self.phrase_of].sum()) / cells
        self.join_of = shared_out([weight for _, weight in JOINS], 256)
        self.end_of = shared_out([weight for _, weight in ENDS], 256)

    def _add_slips(self) -> None:
        """Misspells the first long word of each unit."""
        taken = {word for unit in self.units for word in unit.split()}
        made: dict[str, list[str]] = {}
        rows: list[list[int]] = []
        for i, unit in enumerate(tuple(self.units)):
            word = next((word for word in unit.split() if can_slip(word)), "")
            if word and word not in made:
                made[word] = slips(word, taken)
            found = [unit.replace(word, slip) for slip in made.get(word, [])]
            first = len(self.units)
            self.units += found
            rows.append([first + k % len(found) if found else i for k in range(1 << SLIP_BITS)])
        self.slips = np.array(rows)
        self.meant = {slip: word for word, found in made.items() for slip in found}


def _parts(line: str) -> list[str]:
    """A phrase cut into classes and the runs of words between them."""
    parts: list[str] = []
    for word in line.split():
        if parts and not word.isupper() and not parts[-1].isupper():
            parts[-1] += " " + word
        else:
            parts.append(word)
    return parts


@cache
def lexicon() -> Lexicon:
    """The one lexicon, built at first use."""
    return Lexicon()
