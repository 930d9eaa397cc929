"""The data file beside this comes in; class, folding and composition of every code point go out, as arrays.

The tokenizer must not change when Python does, so its Unicode is pinned: the file holds what Unicode 14.0.0
says, in the form that `stream.features.unicode_build` derives from CPython 3.11's `unicodedata`.
"""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

import numpy as np
import numpy.typing as npt
from safetensors import SafetensorError
from safetensors.numpy import load_file

from stream.errors import FileTrouble

__all__ = ["DATA_FILE", "MARK", "SEPARATOR", "WIDE", "WORD", "UnicodeTables", "load"]

DATA_FILE = Path(__file__).with_name("unicode-14.safetensors")

SEPARATOR, WORD, WIDE, MARK = 0, 1, 2, 3


@dataclass(frozen=True, slots=True)
class UnicodeTables:
    """What the tokenizer asks of Unicode. Code point c has its place at s = page[c >> 8] * 256 + (c & 255).

    `page`: uint16[0x1100], equal pages are stored once;
    `kind`: uint8[256 p], SEPARATOR, WORD, WIDE or MARK;
    `fold`: int32[256 p], NFC(casefold(c)): 0 where that is c itself (so that equal pages can be shared), the
    code point where it is one other, else -(1 + i) for row i of `long_fold`;
    `long_fold`: int32[k, 4], two to four code points, then -1;
    `compose_key`: uint64[n], ascending, a << 21 | mark for each pair whose NFC is one code point;
    `compose_value`: int32[n], that code point.
    """

    page: npt.NDArray[np.uint16]
    kind: npt.NDArray[np.uint8]
    fold: npt.NDArray[np.int32]
    long_fold: npt.NDArray[np.int32]
    compose_key: npt.NDArray[np.uint64]
    compose_value: npt.NDArray[np.int32]


def load() -> UnicodeTables:
    """The pinned tables. Raises FileTrouble when the installed data file cannot be read."""
    try:
        return UnicodeTables(**load_file(DATA_FILE))
    except (OSError, SafetensorError, TypeError) as error:
        raise FileTrouble(
            f"{DATA_FILE}: the Unicode tables cannot be read ({error}); install the program again."
        ) from error
