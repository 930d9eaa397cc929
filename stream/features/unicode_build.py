"""CPython 3.11's `unicodedata` comes in; the tokenizer's tables go out, the same bytes every time.

    python -m stream.features.unicode_build          writes the data file of `unicode_tables` anew

Needed only when the tables change on purpose, which changes the fingerprint of every feature space.
"""

from __future__ import annotations

import sys
import unicodedata
from collections import defaultdict
from collections.abc import Iterator

import numpy as np
import numpy.typing as npt
from safetensors.numpy import save

from stream.errors import UsageError
from stream.features.unicode_tables import DATA_FILE, MARK, SEPARATOR, WIDE, WORD, UnicodeTables
from stream.settings.models import UNICODE_VERSION

__all__ = ["build", "fold_text", "kind_of", "to_bytes"]

CODE_POINTS = 0x110000
LONGEST_FOLD = 4

# Blocks.txt of Unicode 14.0.0. In these, only letters and numbers count: kana blocks hold marks and dots too.
WIDE_LETTERS = (
    (0x3005, 0x3007),  # ideographic iteration mark, closing mark, zero
    (0x3021, 0x3029),  # Hangzhou numerals one to nine
    (0x3038, 0x303B),  # Hangzhou numerals ten to thirty, vertical iteration mark
    (0x3041, 0x30FF),  # Hiragana, Katakana
    (0x3105, 0x312F),  # Bopomofo
    (0x31A0, 0x31BF),  # Bopomofo Extended
    (0x31F0, 0x31FF),  # Katakana Phonetic Extensions
    (0x3400, 0x4DBF),  # CJK Unified Ideographs Extension A
    (0x4E00, 0x9FFF),  # CJK Unified Ideographs
    (0xF900, 0xFAFF),  # CJK Compatibility Ideographs
    (0xFF66, 0xFF9D),  # halfwidth Katakana
)
# Planes 2 and 3 are kept for ideographs: those of later versions fall in the right class already.
WIDE_WHOLE = (0x20000, 0x3FFFD)


def kind_of(point: int) -> int:
    """Class of one code point: SEPARATOR, WORD, WIDE or MARK."""
    if WIDE_WHOLE[0] <= point <= WIDE_WHOLE[1]:
        return WIDE
    major = unicodedata.category(chr(point))[0]
    if major == "M":
        return MARK
    if major not in "LN":
        return SEPARATOR
    return WIDE if any(first <= point <= last for first, last in WIDE_LETTERS) else WORD


def fold_text(text: str) -> str:
    """NFC of the full case folding."""
    return unicodedata.normalize("NFC", text.casefold())


def build() -> UnicodeTables:
    """All tables, from the running Python. Raises UsageError where its Unicode is not the pinned version."""
    if unicodedata.unidata_version != UNICODE_VERSION:
        raise UsageError(
            f"this Python knows Unicode {unicodedata.unidata_version}; the tables are those of "
            f"{UNICODE_VERSION}: build them with CPython 3.11."
        )
    kinds = np.array([kind_of(point) for point in range(CODE_POINTS)], dtype=np.uint8)
    folds, long_fold = _folds(kinds)
    page, kind, fold = _shared_pages(kinds, folds)
    pairs = sorted(_compositions(kinds))
    return UnicodeTables(
        page=page,
        kind=kind,
        fold=fold,
        long_fold=long_fold,
        compose_key=np.array([first << 21 | mark for first, mark, _ in pairs], dtype=np.uint64),
        compose_value=np.array([whole for _, _, whole in pairs], dtype=np.int32),
    )


def _folds(kinds: npt.NDArray[np.uint8]) -> tuple[npt.NDArray[np.int32], npt.NDArray[np.int32]]:
    """Folding of every code point that is not a separator, in the coding of `UnicodeTables.fold`."""
    folds = np.zeros(CODE_POINTS, dtype=np.int32)
    rows: list[list[int]] = []
    for point in np.flatnonzero(kinds != SEPARATOR).tolist():
        folded = [ord(letter) for letter in fold_text(chr(point))]
        if len(folded) > 1:
            rows.append(folded + [-1] * (LONGEST_FOLD - len(folded)))
            folds[point] = -len(rows)
        elif folded[0] != point:
            folds[point] = folded[0]
    return folds, np.array(rows, dtype=np.int32)


def _shared_pages(
    kinds: npt.NDArray[np.uint8], folds: npt.NDArray[np.int32]
) -> tuple[npt.NDArray[np.uint16], npt.NDArray[np.uint8], npt.NDArray[np.int32]]:
    """Cuts both tables into pages of 256 and stores equal ones once, in order of first appearance."""
    kind_pages, fold_pages = kinds.reshape(-1, 256), folds.reshape(-1, 256)
    known: dict[bytes, int] = {}
    kept: list[int] = []
    page = np.empty(len(kind_pages), dtype=np.uint16)
    for at, (kind, fold) in enumerate(zip(kind_pages, fold_pages, strict=True)):
        content = kind.tobytes() + fold.tobytes()
        if content not in known:
            known[content] = len(kept)
            kept.append(at)
        page[at] = known[content]
    return page, kind_pages[kept].reshape(-1), fold_pages[kept].reshape(-1)


def _compositions(kinds: npt.NDArray[np.uint8]) -> Iterator[tuple[int, int, int]]:
    """Every (first, mark, whole) with NFC(first + mark) = whole.

    first + mark and whole have the same canonical decomposition up to the order of its marks, so candidates
    are found by their sorted decompositions; NFC itself decides.
    """
    by_parts: dict[str, list[int]] = defaultdict(list)
    marks: dict[str, list[tuple[int, str]]] = defaultdict(list)
    for point in range(CODE_POINTS):
        letter = chr(point)
        parts = unicodedata.normalize("NFD", letter)
        by_parts["".join(sorted(parts))].append(point)
        if kinds[point] == MARK:
            marks[parts[0]].append((point, parts))
    for parts in [parts for parts in by_parts if len(parts) > 1]:
        for mark, mark_parts in [each for letter in sorted(set(parts)) for each in marks.get(letter, ())]:
            for first in by_parts.get(_without(parts, mark_parts), ()):
                whole = unicodedata.normalize("NFC", chr(first) + chr(mark))
                if len(whole) == 1:
                    yield first, mark, ord(whole)


def _without(parts: str, taken: str) -> str:
    """`parts` less the letters of `taken`, or nothing when one is not there."""
    for letter in taken:
        if letter not in parts:
            return ""
        parts = parts.replace(letter, "", 1)
    return parts


def to_bytes(tables: UnicodeTables) -> bytes:
    """The data file's content."""
    arrays = {name: getattr(tables, name) for name in UnicodeTables.__slots__}
    # One entry only: safetensors writes several in no fixed order.
    return save(arrays, metadata={"unicode": UNICODE_VERSION})


if __name__ == "__main__":
    content = to_bytes(build())
    DATA_FILE.write_bytes(content)
    print(f"{DATA_FILE}: {len(content):,} bytes", file=sys.stderr)
