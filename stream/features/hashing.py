"""Bytes in, the first 64-bit word of MurmurHash3 x64 128 out, eight bytes at a time.

Algorithm: MurmurHash3 by Austin Appleby, public domain; the tests hold this to `mmh3` byte for byte
and to the published verification value.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from stream.kernel import kernel, load_u64, small

__all__ = ["PADDING", "hash_ranges", "murmur3"]

PADDING = 16
"""Readable bytes that must follow the last hashed byte: whole words are loaded, then masked."""

C1 = np.uint64(0x87C37B91114253D5)
C2 = np.uint64(0x4CF5AD432745937F)
N1 = np.uint64(0x52DCE729)
N2 = np.uint64(0x38495AB5)
M1 = np.uint64(0xFF51AFD7ED558CCD)
M2 = np.uint64(0xC4CEB9FE1A85EC53)
FIVE = np.uint64(5)
S27, S31, S33 = np.uint64(27), np.uint64(31), np.uint64(33)
S37 = np.uint64(37)
ONES = np.uint64(0xFFFFFFFFFFFFFFFF)


@small
def _finish(word: np.uint64) -> np.uint64:
    word ^= word >> S33
    word *= M1
    word ^= word >> S33
    word *= M2
    return word ^ (word >> S33)


@small
def _mix1(word: np.uint64) -> np.uint64:
    word *= C1
    return ((word << S31) | (word >> S33)) * C2


@small
def _mix2(word: np.uint64) -> np.uint64:
    word *= C2
    return ((word << S33) | (word >> S31)) * C1


@small
def _low_bytes(count: int) -> np.uint64:
    """A mask of the `count` (0 to 8) low bytes."""
    if count <= 0:
        return np.uint64(0)
    return ONES >> np.uint64(64 - 8 * min(count, 8))


@small
def murmur3(data: npt.NDArray[np.uint8], start: int, length: int, seed: np.uint64) -> np.uint64:
    """First word of MurmurHash3 x64 128 of data[start : start + length].

    PADDING further bytes must be readable behind it; their values do not matter.
    """
    h1 = seed
    h2 = seed
    place = start
    for _ in range(length >> 4):
        h1 ^= _mix1(load_u64(data, place))
        h1 = (((h1 << S27) | (h1 >> S37)) + h2) * FIVE + N1
        h2 ^= _mix2(load_u64(data, place + 8))
        h2 = (((h2 << S31) | (h2 >> S33)) + h1) * FIVE + N2
        place += 16
    rest = length & 15
    h2 ^= _mix2(load_u64(data, place + 8) & _low_bytes(rest - 8))
    h1 ^= _mix1(load_u64(data, place) & _low_bytes(rest))
    h1 ^= np.uint64(length)
    h2 ^= np.uint64(length)
    h1 += h2
    h2 += h1
    return _finish(h1) + _finish(h2)


@kernel
def hash_ranges(
    data: npt.NDArray[np.uint8],
    starts: npt.NDArray[np.int64],
    lengths: npt.NDArray[np.int32],
    count: int,
    seed: np.uint64,
    out: npt.NDArray[np.uint64],
) -> None:
    """out[t] = murmur3 of range t, for t < count. Ranges past `count` are not read."""
    for t in range(count):
        out[t] = murmur3(data, starts[t], lengths[t], seed)
