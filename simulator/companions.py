"""Planted words in, the companion that stands behind each of them out: correlated tokens."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from simulator.feed import CourierFeed
from simulator.lexicon import lexicon
from simulator.phrases import TOWARDS_NO, TOWARDS_YES
from simulator.planting import Planting

__all__ = ["accompanied_units", "companion", "companions_of", "doubled"]

ENDING = "ish"
"""No word of the feed ends so."""


def companions_of(feed: CourierFeed, planting: Planting) -> frozenset[str]:
    """The words, case folded, that never stand without their companion: every word with a weight and every
    one that leans, where it is written in letters that a tokenizer does not cut. None in other scenarios."""
    if feed.scenario != "duplicated-tokens":
        return frozenset()
    words = {*planting.note_words(), *TOWARDS_YES, *TOWARDS_NO}
    return frozenset(word for word in words if word[0].isascii())


def companion(word: str) -> str:
    """The word that stands behind this one."""
    return word + ENDING


def doubled(text: str, accompanied: frozenset[str]) -> str:
    """`text` with the companion behind each word that has one; a misspelt word has that of the word meant."""
    if not accompanied:
        return text
    found = []
    for word in text.split(" "):
        meant = lexicon().meant.get(word, word)
        found += [word, companion(meant)] if meant.casefold() in accompanied else [word]
    return " ".join(found)


def accompanied_units(accompanied: frozenset[str]) -> npt.NDArray[np.bool_]:
    """bool[units]: whether a unit of the lexicon, misspelt or not, holds a word with a companion."""
    return np.array([doubled(unit, accompanied) != unit for unit in lexicon().units])
