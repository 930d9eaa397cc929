"""The tokenizer's Unicode tables against the standard library."""

from __future__ import annotations

import itertools
import time
import unicodedata
from pathlib import Path

import numpy as np
import numpy.typing as npt
import pytest

from stream.errors import FileTrouble, UsageError
from stream.features import unicode_build, unicode_tables
from stream.features.unicode_tables import SEPARATOR, UnicodeTables
from stream.settings.models import UNICODE_VERSION
from tests.twins import features_twin

PINNED = unicodedata.unidata_version == UNICODE_VERSION
needs_pinned = pytest.mark.skipif(not PINNED, reason="this Python has another Unicode than the tables")

KINDS = ["separator", "word", "wide", "mark"]

# Letters, numbers and marks outside planes 2 and 3 that Unicode 15.0.0 added (15.1.0: none; no character of
# 14.0.0 changed its class, name or normal form in either). CPython 3.12 has 15.0.0, CPython 3.13 has 15.1.0;
# to the tables these stay separators.
ADDED_SINCE = [
    *[(0xCF3, 0xCF3), (0xECE, 0xECE), (0x10EFD, 0x10EFF), (0x1123F, 0x11241), (0x11F00, 0x11F10)],
    *[(0x11F12, 0x11F3A), (0x11F3E, 0x11F42), (0x11F50, 0x11F59), (0x1342F, 0x1342F), (0x13440, 0x13455)],
    *[(0x1B132, 0x1B132), (0x1B155, 0x1B155), (0x1D2C0, 0x1D2D3), (0x1DF25, 0x1DF2A), (0x1E030, 0x1E06D)],
    *[(0x1E08F, 0x1E08F), (0x1E4D0, 0x1E4F9)],
]


@pytest.fixture(scope="module")
def tables() -> UnicodeTables:
    return unicode_tables.load()


@pytest.fixture(scope="module")
def kinds(tables: UnicodeTables) -> npt.NDArray[np.uint8]:
    """Class of every code point."""
    return tables.kind.reshape(-1, 256)[tables.page].reshape(-1)


@pytest.fixture(scope="module")
def folds(tables: UnicodeTables) -> list[str]:
    """Folding of every code point, as the tables have it."""
    coded = tables.fold.reshape(-1, 256)[tables.page].reshape(-1).tolist()
    long_folds = ["".join(chr(point) for point in row if point >= 0) for row in tables.long_fold.tolist()]
    return [chr(c or at) if c >= 0 else long_folds[-1 - c] for at, c in enumerate(coded)]


def test_arrays_have_the_shapes_that_the_kernels_expect(tables: UnicodeTables) -> None:
    assert (tables.page.dtype, tables.page.shape) == (np.uint16, (0x1100,))
    assert (tables.kind.dtype, tables.fold.dtype) == (np.uint8, np.int32)
    assert tables.kind.shape == tables.fold.shape == (256 * (int(tables.page.max()) + 1),)
    assert (tables.long_fold.dtype, tables.long_fold.shape[1]) == (np.int32, 4)
    assert (tables.compose_key.dtype, tables.compose_value.dtype) == (np.uint64, np.int32)
    assert tables.compose_key.shape == tables.compose_value.shape
    assert bool(np.all(tables.compose_key[:-1] < tables.compose_key[1:]))


def test_tables_stay_small_and_load_fast(tables: UnicodeTables) -> None:
    assert sum(getattr(tables, name).nbytes for name in UnicodeTables.__slots__) < 300_000
    seconds = []
    for _ in range(5):
        start = time.perf_counter()
        unicode_tables.load()
        seconds.append(time.perf_counter() - start)
    assert min(seconds) < 0.005


def test_class_of_every_code_point_agrees_with_character_names(kinds: npt.NDArray[np.uint8]) -> None:
    named = np.array([KINDS.index(features_twin.kind_by_name(chr(point))) for point in range(0x110000)])
    added = {point for first, last in ADDED_SINCE for point in range(first, last + 1)}
    allowed = set() if PINNED else added
    assert set(np.flatnonzero(named != kinds).tolist()) <= allowed


def test_folding_of_every_code_point_agrees_with_the_standard_library(
    kinds: npt.NDArray[np.uint8], folds: list[str]
) -> None:
    known = np.flatnonzero(kinds != SEPARATOR).tolist()
    assert [hex(point) for point in known if folds[point] != features_twin.fold(chr(point))] == []


def test_folding_never_leaves_the_classes_that_make_tokens(
    kinds: npt.NDArray[np.uint8], folds: list[str]
) -> None:
    for point in np.flatnonzero(kinds != SEPARATOR).tolist():
        assert all(kinds[ord(letter)] != SEPARATOR for letter in folds[point]), hex(point)


def test_every_composition_is_what_normalization_says(tables: UnicodeTables) -> None:
    for key, whole in zip(tables.compose_key.tolist(), tables.compose_value.tolist(), strict=True):
        assert unicodedata.normalize("NFC", chr(key >> 21) + chr(key & 0x1FFFFF)) == chr(whole)


def test_no_composition_of_a_letter_and_a_mark_is_missing(
    tables: UnicodeTables, kinds: npt.NDArray[np.uint8]
) -> None:
    """Against NFC itself, over all code points that are a part of some decomposition or made of such."""
    decomposed = [unicodedata.normalize("NFD", chr(point)) for point in range(0x110000)]
    parts = {part for whole in decomposed if len(whole) > 1 for part in whole}
    touched = [point for point, whole in enumerate(decomposed) if parts.intersection(whole)]
    marks = [point for point in touched if kinds[point] == unicode_tables.MARK]
    firsts = [point for point in touched if not 0xAC00 <= point <= 0xD7A3]  # Hangul composes without marks
    keys = set(tables.compose_key.tolist())
    for first, mark in itertools.product(firsts, marks):
        single = len(unicodedata.normalize("NFC", chr(first) + chr(mark))) == 1
        assert single == ((first << 21 | mark) in keys), (hex(first), hex(mark))


@needs_pinned
def test_the_file_is_rebuilt_byte_for_byte() -> None:
    assert unicode_build.to_bytes(unicode_build.build()) == unicode_tables.DATA_FILE.read_bytes()


def test_another_python_refuses_to_rebuild_the_file(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(unicodedata, "unidata_version", "13.0.0")
    with pytest.raises(UsageError, match=r"knows Unicode 13\.0\.0.*build them with CPython 3\.11"):
        unicode_build.build()


@pytest.mark.parametrize("content", [b"", b"\x10" * 100, None])
def test_a_damaged_or_missing_file_says_to_install_again(
    content: bytes | None, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    if content is not None:
        (tmp_path / "tables").write_bytes(content)
    monkeypatch.setattr(unicode_tables, "DATA_FILE", tmp_path / "tables")
    with pytest.raises(FileTrouble, match="install the program again"):
        unicode_tables.load()
