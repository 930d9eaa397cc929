"""A log in; its labelled messages as rows in memory, with the address of each column, out."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from stream.batch_fits import Rows
from stream.decoding import Decoder
from stream.errors import BadData, CannotCreate
from stream.features import Batcher
from stream.settings import Settings
from stream.sources import LogSource
from stream.weights import Weights

__all__ = ["ENTRY_BYTES", "Held", "hold"]

ENTRY_BYTES = 48
"""Of memory for each token of a message while columns are numbered, and then for a batch fit."""
BLOCK = 4_096

Tell = Callable[[float, str], None]


@dataclass(frozen=True, slots=True)
class Held:
    """The labelled messages of a log.

    `rows`: columns are numbered as they first appear; `addresses` uint64[columns]; `numbers` int64[m]: the
    number of each row's message, from 0; `messages`: how many there are, rejected and unlabelled ones too.
    """

    rows: Rows
    addresses: npt.NDArray[np.uint64]
    numbers: npt.NDArray[np.int64]
    messages: int
    rejected: int

    def row_after(self, messages: int) -> int:
        """How many of the first `messages` messages are rows."""
        return int(np.searchsorted(self.numbers, messages))

    def part(self, first: int, last: int) -> Rows:
        """Rows of messages first to last - 1."""
        return self.rows.part(self.row_after(first), self.row_after(last))

    def dense(self, weights: Weights) -> npt.NDArray[np.float64]:
        """float64[columns] of weights that were learned from these messages."""
        order = np.argsort(self.addresses)
        at = order[np.searchsorted(self.addresses, weights.addresses, sorter=order)]
        found = np.zeros(len(self.addresses))
        found[at] = weights.values
        return found


def hold(settings: Settings, messages: int | None, memory_bytes: int, tell: Tell) -> Held:
    """Reads the first `messages` messages of the log, or all.

    Raises CannotCreate where they take more than `memory_bytes`, BadData without a labelled one, and what
    reading raises.
    """
    source = LogSource(settings.feed.paths, settings.folder, settings.feed.max_line_bytes)
    decoder, batcher = Decoder(settings), Batcher(settings)
    addresses, values, lengths = [np.empty(0, np.uint64)], [np.empty(0, np.float32)], [np.empty(0, np.int64)]
    labels, weights, numbers = [np.empty(0, np.int8)], [np.empty(0)], [np.empty(0, np.int64)]
    read = scored = entries = 0
    try:
        while len(block := source.read(BLOCK if messages is None else min(BLOCK, messages - read) or 1)):
            if read == messages:
                break
            examples, _ = decoder.decode(block)
            batch, over = batcher.batch(examples)
            rows = examples.rows[~np.isin(examples.rows, [reject.row for reject in over])]
            there = batch.labels >= 0
            kept = np.repeat(there, np.diff(batch.row_ptr))
            addresses.append(batch.addresses[kept])
            values.append(batch.values[kept])
            lengths.append(np.diff(batch.row_ptr)[there])
            labels.append(batch.labels[there])
            weights.append(batch.weights[there])
            numbers.append(read + rows[there])
            read, scored, entries = read + len(block), scored + len(batch), entries + len(addresses[-1])
            if entries * ENTRY_BYTES > memory_bytes:
                raise CannotCreate(
                    f"batch fits hold the log in memory: {entries:,} tokens of {read:,} messages so far take "
                    f"more than {memory_bytes / 1e6:,.0f} MB. Allow more (--memory), or give fewer messages"
                )
            tell(read / messages if messages else source.fraction_read() or 0.0, "reading")
    finally:
        source.close()
    if not sum(map(len, labels)):
        raise BadData(f"none of {read:,} messages has an outcome: a batch fit needs some")
    columns, by_column = _numbered(np.concatenate(addresses))
    row_ptr = np.concatenate([np.zeros(1, np.int64), np.cumsum(np.concatenate(lengths))])
    return Held(
        Rows(
            row_ptr,
            columns,
            np.concatenate(values),
            np.concatenate(labels),
            np.concatenate(weights),
            len(by_column),
        ),
        by_column,
        np.concatenate(numbers),
        read,
        read - scored,
    )


def _numbered(
    addresses: npt.NDArray[np.uint64],
) -> tuple[npt.NDArray[np.int32], npt.NDArray[np.uint64]]:
    """int32[nnz] column of each entry, numbered as they first appear, and uint64[n] the address of each."""
    distinct, first, inverse = np.unique(addresses, return_index=True, return_inverse=True)
    order = np.argsort(first)
    place = np.empty(len(order), np.int32)
    place[order] = np.arange(len(order), dtype=np.int32)
    return place[inverse], distinct[order]
