"""Ranks in, invented words out: streets, codes and shops without end, and slips of the pen."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

__all__ = ["MAKERS", "can_slip", "codes", "shops", "slips", "streets"]

ONSETS = ("b", "br", "d", "dr", "gl", "h", "k", "l", "m", "p", "pr", "r", "sk", "st", "t", "v")
NUCLEI = ("a", "e", "i", "o", "u", "ai", "oa", "ei")
STREET_ENDS = (
    *("quell", "vorn", "drel", "zeth", "plin", "gask", "yorl", "thund"),
    *("vask", "wenth", "morl", "zöl", "quist", "lév", "drask", "blenth"),
)
SHOP_ENDS = (
    *("zzit", "nkum", "ffro", "mblo", "ggins", "ppo", "zzap", "nkley"),
    *("ttaro", "ckoo", "bbex", "mmix", "xxo", "rpto", "nzee", "ddlo"),
)
CODE_LETTERS = "abcdefghkmnpqrtvwxyz"
SYLLABLE_BITS = 7
END_BITS = 4
SCRAMBLE = 0x2545F491  # odd, so that multiplying modulo a power of two permutes

Ints = npt.NDArray[np.int64]
Texts = npt.NDArray[np.object_]


def _texts(parts: list[str]) -> Texts:
    return np.array(parts, dtype=object)


SYLLABLES = _texts([onset + nucleus for onset in ONSETS for nucleus in NUCLEI])
OPENINGS = _texts([text.capitalize() for text in SYLLABLES])
LETTERS = _texts(list(CODE_LETTERS))


def _invented(first: int, last: int, openings: Texts, ends: Texts) -> list[str]:
    """Words of ranks first <= rank < last: syllables of an onset and a nucleus, then an ending; longer as
    ranks grow (2,048 words of one syllable and an ending, 262,144 of two, 33,554,432 of three).

    Onsets and endings begin with consonants and nuclei are vowels, so different digits give different words.
    """
    found: list[str] = []
    start, bits = 0, SYLLABLE_BITS + END_BITS
    while first < last:
        stop = start + (1 << bits)
        digits = (np.arange(first, min(last, stop)) - start + 1) * SCRAMBLE % (1 << bits)
        ending, digits = ends[digits % len(ends)], digits >> END_BITS
        word = openings[digits % len(openings)]
        for _ in range(bits // SYLLABLE_BITS - 1):
            digits = digits >> SYLLABLE_BITS
            word = word + SYLLABLES[digits % len(SYLLABLES)]
        found += (word + ending).tolist()
        first, start, bits = max(first, stop), stop, bits + SYLLABLE_BITS
    return found


def streets(first: int, last: int) -> list[str]:
    """Street-like names of these ranks, with a capital; some carry an accent."""
    return _invented(first, last, OPENINGS, _texts(list(STREET_ENDS)))


def shops(first: int, last: int) -> list[str]:
    """Shop-like names of these ranks, lower case."""
    return _invented(first, last, SYLLABLES, _texts(list(SHOP_ENDS)))


def codes(first: int, last: int) -> list[str]:
    """Bay and shelf codes of these ranks: a letter and a number above 9, every third code in capitals."""
    number, letter = np.divmod(np.arange(first, last), len(CODE_LETTERS))
    letters = LETTERS[(letter * 7 + number * 3) % len(CODE_LETTERS)]
    texts = [f"{a}{n + 10}" for a, n in zip(letters.tolist(), number.tolist(), strict=True)]
    return [text.upper() if rank % 3 == 1 else text for rank, text in enumerate(texts, first)]


MAKERS = (streets, codes, shops)
"""Makers of open words, in the order of simulator.phrases.OPEN_CLASSES."""


def can_slip(word: str) -> bool:
    """Whether `slips` misspells this word: five or more plain letters."""
    return len(word) >= 5 and word.isascii() and word.isalpha()


def slips(word: str, taken: set[str], most: int = 4) -> list[str]:
    """Up to `most` misspellings of a word that can slip, none of them in `taken`; adds them to it."""
    found: list[str] = []
    for at in range(1, len(word) - 1):
        for slip in (word[:at] + word[at + 1] + word[at] + word[at + 2 :], word[:at] + word[at + 1 :]):
            if slip not in taken and len(found) < most:
                taken.add(slip)
                found.append(slip)
    return found
