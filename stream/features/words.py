"""Text in, word tokens out: kernels that fold, cut and write `field-name 0x1F word` one after the other.

The rules are those of docs/addresses.md. ASCII goes eight bytes at a time; a run that holds anything else
is walked again by code points, with the pinned Unicode tables. Eight bytes beyond a text are readable.
"""

from __future__ import annotations

from typing import TypeAlias

import numpy as np
import numpy.typing as npt

from stream.features.unicode_tables import MARK, SEPARATOR, WIDE
from stream.kernel import kernel, load_u64, small, store_u64, trailing_zeros

__all__ = ["Unicode", "cut_words", "put_bytes"]

Bytes = npt.NDArray[np.uint8]
Int64s = npt.NDArray[np.int64]
Unicode: TypeAlias = tuple[
    npt.NDArray[np.uint16],
    npt.NDArray[np.uint8],
    npt.NDArray[np.int32],
    npt.NDArray[np.int32],
    npt.NDArray[np.uint64],
    npt.NDArray[np.int32],
]
"""The arrays of UnicodeTables, in order."""

# Eight bytes at once, one bit (0x80) an answer: SWAR as in Lamport, "Multiple byte processing with full-word
# instructions", CACM 18 (1975).
EACH = np.uint64(0x0101010101010101)
HIGH = np.uint64(0x8080808080808080)
LOW = np.uint64(0x7F7F7F7F7F7F7F7F)
CASE = np.uint64(0x2020202020202020)
TWO = np.uint64(2)
BEGINS = np.array([code >= 0x80 or chr(code).isalnum() for code in range(256)])
# added to a byte below 0x80, sets bit 0x80 from the first of the range on, or behind its last
FROM_A, BEHIND_Z = EACH * np.uint64(0x80 - 0x61), EACH * np.uint64(0x7F - 0x7A)
FROM_0, BEHIND_9 = EACH * np.uint64(0x80 - 0x30), EACH * np.uint64(0x7F - 0x39)


@small
def _ascii_letters(eight: np.uint64) -> np.uint64:
    """Bit 0x80 for each byte that is an ASCII letter, whatever its case; others below 0x80 only."""
    lowered = (eight | CASE) & LOW
    return (lowered + FROM_A) & ~(lowered + BEHIND_Z) & ~eight & HIGH


@small
def _ascii_digits(eight: np.uint64) -> np.uint64:
    """Bit 0x80 for each byte that is an ASCII digit."""
    low = eight & LOW
    return (low + FROM_0) & ~(low + BEHIND_9) & ~eight & HIGH


@small
def put_bytes(source: Bytes, start: int, length: int, out: Bytes, place: int) -> int:
    """Copies `length` bytes in words of eight (up to 7 more are written); returns the place after them."""
    for step in range(0, length, 8):
        store_u64(out, place + step, load_u64(source, start + step))
    return place + length


@small
def _code_point(text: Bytes, at: int) -> tuple[np.int64, int]:
    """(code point, bytes it takes) at `at` of valid UTF-8."""
    byte = np.int64(text[at])
    if byte < 0x80:
        return byte, 1
    if byte < 0xE0:
        return ((byte & 0x1F) << 6) | (np.int64(text[at + 1]) & 0x3F), 2
    if byte < 0xF0:
        high = ((byte & 0x0F) << 12) | ((np.int64(text[at + 1]) & 0x3F) << 6)
        return high | (np.int64(text[at + 2]) & 0x3F), 3
    high = ((byte & 0x07) << 18) | ((np.int64(text[at + 1]) & 0x3F) << 12)
    return high | ((np.int64(text[at + 2]) & 0x3F) << 6) | (np.int64(text[at + 3]) & 0x3F), 4


@small
def _put_code_point(code: int, out: Bytes, place: int) -> int:
    """Writes one code point as UTF-8; returns the place after it."""
    if code < 0x80:
        out[place] = code
        return place + 1
    if code < 0x800:
        out[place] = 0xC0 | (code >> 6)
        out[place + 1] = 0x80 | (code & 0x3F)
        return place + 2
    if code < 0x10000:
        out[place] = 0xE0 | (code >> 12)
        out[place + 1] = 0x80 | ((code >> 6) & 0x3F)
        out[place + 2] = 0x80 | (code & 0x3F)
        return place + 3
    out[place] = 0xF0 | (code >> 18)
    out[place + 1] = 0x80 | ((code >> 12) & 0x3F)
    out[place + 2] = 0x80 | ((code >> 6) & 0x3F)
    out[place + 3] = 0x80 | (code & 0x3F)
    return place + 4


@small
def _append_folded(code: np.int64, unicode: Unicode, run: npt.NDArray[np.int32], count: int) -> int:
    """Appends NFC(casefold(code)) to run; returns the new count."""
    folded = unicode[2][np.int64(unicode[0][code >> 8]) * 256 + (code & 255)]
    if folded >= 0:
        run[count] = code if folded == 0 else folded
        return count + 1
    for part in unicode[3][-1 - folded]:
        if part >= 0:
            run[count] = part
            count += 1
    return count


@small
def _composed(code: int, mark: np.int64, unicode: Unicode) -> np.int64:
    """The code point that `code` and `mark` make together, or -1."""
    key = (np.uint64(code) << np.uint64(21)) | np.uint64(mark)
    at = np.searchsorted(unicode[4], key)
    if at < len(unicode[4]) and unicode[4][at] == key:
        return np.int64(unicode[5][at])
    return np.int64(-1)


@kernel
def walk_run(
    text: Bytes,
    at: int,
    end: int,
    unicode: Unicode,
    run: npt.NDArray[np.int32],
    chars: Int64s,
) -> tuple[int, int, int, bool]:
    """Folds the run of word or wide code points at `at` into `run`.

    Returns (where it ends, code points, characters, wide); without a code point, `at` was a separator
    and the first value is behind it. `chars[j]` is where character j begins in `run`.
    """
    count = 0
    characters = 0
    kind = 0
    while at < end:
        code, width = _code_point(text, at)
        found = unicode[1][np.int64(unicode[0][code >> 8]) * 256 + (code & 255)]
        if found == MARK and count > 0:
            together = _composed(run[count - 1], code, unicode)
            if together >= 0:
                count = _append_folded(together, unicode, run, count - 1)
            else:
                count = _append_folded(code, unicode, run, count)
        elif found in (MARK, SEPARATOR):
            if count == 0:
                at += width
            break
        else:
            if count > 0 and found != kind:
                break
            kind = found
            chars[characters] = count
            characters += 1
            count = _append_folded(code, unicode, run, count)
        at += width
    chars[characters] = count
    return at, count, characters, kind == WIDE


@kernel
def cut_words(
    text: Bytes,
    start: int,
    end: int,
    prefixes: Bytes,
    prefix_start: int,
    prefix_length: int,
    out: Bytes,
    place: int,
    starts: Int64s,
    lengths: npt.NDArray[np.int32],
    unicode: Unicode,
    run: npt.NDArray[np.int32],
    chars: Int64s,
) -> tuple[int, int]:
    """Writes the tokens of text[start:end] to `out` from `place`, each behind the field's prefix.

    Returns (place behind them, how many); token t is out[starts[t] : starts[t] + lengths[t]].
    The caller has made sure of the room. `run` and `chars` are scratch.
    """
    count = 0
    at = start
    while at < end:
        if not BEGINS[text[at]]:  # byte by byte: the usual gap is one
            at += 1
            continue
        begin = at
        first = place
        place = put_bytes(prefixes, prefix_start, prefix_length, out, place)
        while True:
            eight = load_u64(text, at)
            letters = _ascii_letters(eight)
            store_u64(out, place, eight | (letters >> TWO))
            stop = ~(letters | _ascii_digits(eight)) & HIGH
            length = min(trailing_zeros(stop) >> 3, end - at)
            at += length
            place += length
            if length < 8:
                break
        if at == end or text[at] < 0x80:
            starts[count] = first
            lengths[count] = place - first
            count += 1
            continue
        place = first
        at, points, characters, wide = walk_run(text, begin, end, unicode, run, chars)
        if points == 0:
            continue
        tokens = max(characters - 1, 1) if wide else 1
        for token in range(tokens):
            first = place
            place = put_bytes(prefixes, prefix_start, prefix_length, out, place)
            last = points
            if wide:
                last = chars[min(token + 2, characters)]
            for point in range(chars[token] if wide else 0, last):
                place = _put_code_point(run[point], out, place)
            starts[count] = first
            lengths[count] = place - first
            count += 1
    return place, count
