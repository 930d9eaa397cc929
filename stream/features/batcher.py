"""Examples in, a Batch of hashed sparse rows out; messages with too many tokens are handed back."""

from __future__ import annotations

from collections.abc import Iterable
from itertools import accumulate
from typing import Any

import numpy as np
import numpy.typing as npt

from stream.batch import Batch
from stream.features import rows
from stream.features.hashing import PADDING
from stream.features.merging import SMALLEST_MASK
from stream.features.plan import make_plan
from stream.message import Examples, Reject
from stream.settings.models import Category, ListOf, Quantity, Settings, Words

__all__ = ["Batcher"]

SEPARATOR = "\x1f"


def _escape(text: str) -> str:
    """Keeps 0x1F for parting: 0x1B doubles, 0x1F becomes 0x1B and an underscore."""
    return text.replace("\x1b", "\x1b\x1b").replace("\x1f", "\x1b_")


def _category(value: Any) -> str:
    """Text of a category or list item, escaped; "" where there is no token."""
    if value is None:
        return ""
    if isinstance(value, bool):
        return "true" if value else "false"
    return _escape(value) if isinstance(value, str) else str(value)


def _list(values: Iterable[Any] | None) -> str:
    return "" if values is None else SEPARATOR.join(map(_category, values))


class _TextColumns:
    """Texts of all fields of a batch in one UTF-8 buffer, with the range of each."""

    def __init__(self, fields: int, size: int) -> None:
        self.parts: list[bytes] = []
        self.begins = np.full((fields, size), -1, np.int64)
        self.ends = np.full((fields, size), -1, np.int64)
        self._length = 0

    def put(self, field: int, texts: list[str]) -> None:
        joined = "".join(texts)
        if joined.isascii():
            encoded = joined.encode()
            ends = np.fromiter(accumulate(map(len, texts)), np.int64, len(texts))
        else:
            pieces = [text.encode() for text in texts]
            encoded = b"".join(pieces)
            ends = np.fromiter(accumulate(map(len, pieces)), np.int64, len(texts))
        ends += self._length
        self.ends[field] = ends
        self.begins[field, :1] = self._length
        self.begins[field, 1:] = ends[:-1]
        self.parts.append(encoded)
        self._length += len(encoded)

    def buffer(self) -> npt.NDArray[np.uint8]:
        return np.frombuffer(b"".join([*self.parts, bytes(PADDING)]), np.uint8)

    def longest(self) -> int:
        return int(np.max(self.ends - self.begins, initial=0))


class Batcher:
    """Turns examples into rows by the settings' fields and crosses, as docs/addresses.md says."""

    def __init__(self, settings: Settings) -> None:
        self._settings = settings
        self._plan = make_plan(settings)
        self._cap = settings.message.max_tokens
        index_size = 1 << (4 * self._cap + 4 * SMALLEST_MASK).bit_length()
        self._index = np.zeros(2 * index_size, np.uint64)
        self._index_state = np.zeros(2, np.int64)
        self._make_scratch(1024)
        self._out = np.zeros(1 << 16, np.uint8)
        self._make_entries(1 << 14)

    def batch(self, examples: Examples) -> tuple[Batch, list[Reject]]:
        """Rows of the examples, in order; those over `message.max_tokens` are left out and rejected.

        The arrays of the batch are views of larger ones: they hold until the next call.
        """
        size = len(examples)
        texts, numbers = self._columns(examples)
        if texts.longest() > self._longest_text:
            self._make_scratch(texts.longest())
        row_ptr = np.zeros(size + 1, np.int64)
        kept = np.empty(size, np.int64)
        progress = np.zeros(rows.PROGRESS, np.int64)
        while not self._fill(texts, numbers, row_ptr, kept, progress):
            self._grow(int(progress[rows.ENTRIES]), int(progress[rows.PLACE]))
        rows_made, entries = int(progress[rows.KEPT]), int(progress[rows.ENTRIES])
        kept = kept[:rows_made]
        batch = Batch(
            row_ptr[: rows_made + 1],
            self._addresses[:entries],
            self._values[:entries],
            examples.labels[kept],
            examples.weights[kept],
            self._out[: int(progress[rows.PLACE])],
            self._text_starts[:entries],
            self._text_lengths[:entries],
        )
        return batch, self._rejects(examples, kept)

    def _columns(self, examples: Examples) -> tuple[_TextColumns, npt.NDArray[np.float64]]:
        size = len(examples)
        texts = _TextColumns(len(self._settings.fields), size)
        numbers = np.full((len(self._settings.fields), size), np.nan)
        for place, field in enumerate(self._settings.fields):
            column = examples.columns[field.path]
            match field:
                case Words():
                    texts.put(place, ["" if text is None else text for text in column])
                case Category():
                    texts.put(place, list(map(_category, column)))
                case ListOf():
                    texts.put(place, list(map(_list, column)))
                case Quantity():
                    numbers[place] = [np.nan if x is None else x for x in column]
        return texts, numbers

    def _fill(
        self,
        texts: _TextColumns,
        numbers: npt.NDArray[np.float64],
        row_ptr: npt.NDArray[np.int64],
        kept: npt.NDArray[np.int64],
        progress: npt.NDArray[np.int64],
    ) -> bool:
        plan = self._plan
        done: bool = rows.fill_rows(
            texts.buffer(),
            texts.begins,
            texts.ends,
            numbers,
            plan.fields,
            plan.crosses,
            plan.prefixes,
            plan.dropped,
            plan.edges,
            plan.bin_starts,
            plan.bin_ends,
            plan.unicode,
            plan.seed,
            plan.shift,
            self._cap,
            self._settings.space.unit_length,
            self._out,
            row_ptr,
            kept,
            self._addresses,
            self._values,
            self._text_starts,
            self._text_lengths,
            self._starts,
            self._lengths,
            self._hashes,
            self._run,
            self._chars,
            self._index,
            self._index_state,
            progress,
        )
        return done

    def _rejects(self, examples: Examples, kept: npt.NDArray[np.int64]) -> list[Reject]:
        if len(kept) == len(examples):
            return []
        detail = (
            f"more than {self._cap} tokens (message.max_tokens); raise the limit, or leave out a long field"
        )
        missing = np.setdiff1d(np.arange(len(examples)), kept)
        return [Reject(int(examples.rows[i]), "too_many_tokens", detail) for i in missing]

    def _make_scratch(self, longest_text: int) -> None:
        """Room for the tokens of one field of one row, and for the longest run of characters."""
        self._longest_text = longest_text
        room = max(2 * longest_text, self._cap) + 8
        self._starts = np.empty(room, np.int64)
        self._lengths = np.empty(room, np.int32)
        self._hashes = np.empty(room, np.uint64)
        self._run = np.empty(4 * longest_text + 16, np.int32)
        self._chars = np.empty(longest_text + 4, np.int64)

    def _make_entries(self, size: int) -> None:
        self._addresses = np.empty(size, np.uint64)
        self._values = np.empty(size, np.float32)
        self._text_starts = np.empty(size, np.int64)
        self._text_lengths = np.empty(size, np.int32)

    def _grow(self, entries: int, place: int) -> None:
        """Doubles the arrays that `fill_rows` found too small, keeping what it has filled."""
        size = 2 * len(self._addresses) + self._cap
        for name in ("_addresses", "_values", "_text_starts", "_text_lengths"):
            grown = np.empty(size, getattr(self, name).dtype)
            grown[:entries] = getattr(self, name)[:entries]
            setattr(self, name, grown)
        out = np.empty(2 * len(self._out), np.uint8)
        out[:place] = self._out[:place]
        self._out = out
