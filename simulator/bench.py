"""Counts and a seed in, a plain log for benches out: id, note of Zipf words and y, about 470 bytes a line."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt

from simulator.arithmetic import sigmoid
from simulator.draws import raw_stream, uniform
from simulator.log_file import open_log
from simulator.writing import Progress
from simulator.zipf import ZipfLaw

__all__ = ["bench_log"]

CONSONANTS = b"bcdfghjklmnpqrstvwxz"
VOWELS = b"aeiou"
MOST_WORDS = (len(CONSONANTS) * len(VOWELS)) ** 3
BLOCK = 8_192
WORD_BYTES = 8
SCRAMBLE = 387_421  # shares no factor with MOST_WORDS
BENCH_STREAM, WEIGHT_STREAM = 3, 4
PLANTED = 500
PLANTED_AMONG = 20_000
INTERCEPT = -1.5

Bytes = npt.NDArray[np.uint8]


def bench_log(
    path: str | Path,
    messages: int,
    *,
    distinct: int = 1_000_000,
    tokens: int = 60,
    zipf_exponent: float = 1.0,
    seed: int = 0,
    progress: Progress | None = None,
) -> None:
    """Writes `messages` lines {"id":"...","note":"...","y":0 or 1}; same arguments, same bytes.

    A note is `tokens` words from `distinct` invented ones (lower-case ASCII, six or seven letters), drawn in
    proportion to rank**-zipf_exponent; 500 of the 20,000 commonest have a true weight, which counts as often
    as the word stands in the note. Holds about 30 bytes a distinct word. Raises ValueError beyond 1,000,000
    words.
    """
    if not 1 <= distinct <= MOST_WORDS:
        raise ValueError(f"distinct is {distinct}; allowed is 1 to {MOST_WORDS}")
    if messages < 0 or tokens < 1:
        raise ValueError(f"messages is {messages} and tokens {tokens}; at least 0 and 1 are needed")
    words = _words(distinct)
    weights = _weights(distinct, seed)
    law = ZipfLaw(zipf_exponent, distinct)
    with open_log(path) as out:
        for first in range(0, messages, BLOCK):
            stream = raw_stream(seed, BENCH_STREAM, first // BLOCK)
            rank = law.ranks(uniform(stream.random_raw((BLOCK, tokens))), distinct)
            probability = sigmoid(INTERCEPT + weights[rank].sum(axis=1))
            positive = uniform(stream.random_raw(BLOCK)) < probability
            count = min(BLOCK, messages - first)
            out.write(_lines(first, words[rank[:count]], positive[:count]))
            if progress is not None:
                progress(first + count, messages)


def _words(distinct: int) -> Bytes:
    """uint8[distinct, 8]: a space and three syllables; every third word has one more consonant, else 0."""
    number = np.arange(distinct) * SCRAMBLE % MOST_WORDS
    consonants, vowels = np.frombuffer(CONSONANTS, np.uint8), np.frombuffer(VOWELS, np.uint8)
    words = np.zeros((distinct, WORD_BYTES), np.uint8)
    words[:, 0] = ord(" ")
    words[::3, 7] = consonants[number[::3] % len(consonants)]
    for syllable in range(3):
        number, digit = np.divmod(number, len(consonants) * len(vowels))
        words[:, 1 + 2 * syllable] = consonants[digit // len(vowels)]
        words[:, 2 + 2 * syllable] = vowels[digit % len(vowels)]
    return words


def _weights(distinct: int, seed: int) -> npt.NDArray[np.float64]:
    """float64[distinct], multiples of 1/64, nearly all zero."""
    stream = raw_stream(seed, WEIGHT_STREAM)
    among = min(distinct, PLANTED_AMONG)
    chosen = np.argsort(stream.random_raw(among), kind="stable")[:PLANTED]
    weights = np.zeros(distinct)
    weights[chosen] = np.rint((uniform(stream.random_raw(len(chosen))) - 0.5) * 3 * 64) / 64
    return weights


def _lines(first: int, notes: Bytes, positive: npt.NDArray[np.bool_]) -> bytes:
    """Lines of the notes uint8[m, tokens, 8]: laid out at full width, then the empty places taken out."""
    count, tokens = notes.shape[:2]
    number = first + np.arange(count)
    digits = number[:, None] // 10 ** np.arange(8, -1, -1) % 10 + ord("0")
    text = notes.reshape(count, tokens * WORD_BYTES)[:, 1:]  # no space before the first word
    outcome = positive[:, None] + ord("0")
    head, middle, tail = b'{"id":"b', b'","note":"', b'","y":'
    parts: list[bytes | npt.NDArray[Any]] = [head, digits, middle, text, tail, outcome, b"}\n"]
    return np.concatenate([_columns(part, count) for part in parts], axis=1).tobytes().translate(None, b"\0")


def _columns(part: bytes | npt.NDArray[Any], count: int) -> Bytes:
    """uint8[count, width]: a text on every line, or the bytes of each line."""
    if isinstance(part, bytes):
        return np.broadcast_to(np.frombuffer(part, np.uint8), (count, len(part)))
    return part.astype(np.uint8)
