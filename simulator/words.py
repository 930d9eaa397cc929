"""Ranks in, invented words out: streets, codes and shops without end, and slips of the pen."""

from __future__ import annotations

__all__ = ["code", "shop", "slips", "street"]

ONSETS = ("b", "br", "d", "dr", "gl", "h", "k", "l", "m", "p", "pr", "r", "sk", "st", "t", "v")
NUCLEI = ("a", "e", "i", "o", "u", "ai", "oa", "ei")
STREET_ENDS = ("quell", "vorn", "drel", "zeth", "plin", "gask", "yorl", "thund", "vask", "wenth", "morl", "zöl",
               "quist", "lév", "drask", "blenth")  # fmt: skip
SHOP_ENDS = ("zzit", "nkum", "ffro", "mblo", "ggins", "ppo", "zzap", "nkley", "ttaro", "ckoo", "bbex", "mmix",
             "xxo", "rpto", "nzee", "ddlo")  # fmt: skip
CODE_LETTERS = "abcdefghkmnpqrtvwxyz"
SYLLABLE_BITS = 7
END_BITS = 4
SCRAMBLE = 0x2545F491  # odd, so that multiplying modulo a power of two permutes


def _invented(rank: int, ends: tuple[str, ...]) -> str:
    """The rank-th word: syllables of one onset and one nucleus, then an ending; longer as ranks grow.

    Onsets and endings begin with consonants and nuclei are vowels, so different digits give different words.
    """
    syllables, bits = 1, SYLLABLE_BITS + END_BITS
    while rank >= 1 << bits:
        rank -= 1 << bits
        syllables, bits = syllables + 1, bits + SYLLABLE_BITS
    digits = (rank + 1) * SCRAMBLE % (1 << bits)
    ending = ends[digits % len(ends)]
    digits >>= END_BITS
    word = ""
    for _ in range(syllables):
        word += ONSETS[digits % len(ONSETS)] + NUCLEI[(digits >> 4) % len(NUCLEI)]
        digits >>= SYLLABLE_BITS
    return word + ending


def street(rank: int) -> str:
    """A street-like name, with a capital; some carry an accent."""
    return _invented(rank, STREET_ENDS).capitalize()


def shop(rank: int) -> str:
    """A shop-like name, lower case."""
    return _invented(rank, SHOP_ENDS)


def code(rank: int) -> str:
    """A bay or shelf code: a letter and a number of two digits or more; every third in capitals."""
    number, letter = divmod(rank, len(CODE_LETTERS))
    text = CODE_LETTERS[(letter * 7 + number * 3) % len(CODE_LETTERS)] + str(10 + number)
    return text.upper() if rank % 3 == 1 else text


def slips(word: str, taken: set[str], most: int = 4) -> list[str]:
    """Up to `most` misspellings of a word of five or more plain letters, none of them in `taken`; adds them to it."""
    found: list[str] = []
    if len(word) < 5 or not word.isascii() or not word.isalpha():
        return found
    for at in range(1, len(word) - 1):
        for slip in (word[:at] + word[at + 1] + word[at] + word[at + 2 :], word[:at] + word[at + 1 :]):
            if slip not in taken and len(found) < most:
                taken.add(slip)
                found.append(slip)
    return found
