"""A log in; its labelled messages as rows in memory, with the address of each column, out."""

from __future__ import annotations

from collections.abc import Callable
from contextlib import closing
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from stream.batch_fits import Rows
from stream.decoding import Decoder
from stream.errors import BadData, CannotCreate
from stream.features import Batcher
from stream.message import Block
from stream.settings import Settings
from stream.sources import LogSource
from stream.weights import Weights

__all__ = ["Held", "hold"]

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
        return weights.at(self.addresses)


def hold(settings: Settings, messages: int, memory_bytes: int, tell: Tell) -> Held:
    """Reads the first `messages` messages of the log, or all where there are fewer.

    Raises CannotCreate where they take more than `memory_bytes`, BadData without a labelled one, and what
    reading raises.
    """
    reading = _Reading(settings)
    source = LogSource(settings.feed.paths, settings.folder, settings.feed.max_line_bytes)
    with closing(source):
        while reading.messages < messages:
            block = source.read(min(BLOCK, messages - reading.messages))
            if not len(block):
                break
            reading.add(block)
            if reading.entries * ENTRY_BYTES > memory_bytes:
                raise CannotCreate(
                    f"batch fits hold the log in memory: {reading.entries:,} tokens of {reading.messages:,} "
                    f"messages so far take more than {memory_bytes / 1e6:,.3g} MB. Allow more (--memory), or "
                    "take fewer messages"
                )
            tell(reading.messages / messages, "reading")
    return reading.held()


class _Reading:
    """Blocks of a log, gathered as rows."""

    def __init__(self, settings: Settings) -> None:
        self._decoder, self._batcher = Decoder(settings), Batcher(settings)
        self._label = settings.message.label
        self._addresses, self._values = [np.empty(0, np.uint64)], [np.empty(0, np.float32)]
        self._lengths, self._numbers = [np.empty(0, np.int64)], [np.empty(0, np.int64)]
        self._labels, self._weights = [np.empty(0, np.int8)], [np.empty(0)]
        self.messages = self.entries = self._rejected = 0

    def add(self, block: Block) -> None:
        examples, _ = self._decoder.decode(block)
        batch, over = self._batcher.batch(examples)
        rows = examples.rows[~np.isin(examples.rows, [reject.row for reject in over])]
        there, lengths = batch.labels >= 0, np.diff(batch.row_ptr)
        kept = np.repeat(there, lengths)
        self._addresses.append(batch.addresses[kept])
        self._values.append(batch.values[kept])
        self._lengths.append(lengths[there])
        self._labels.append(batch.labels[there])
        self._weights.append(batch.weights[there])
        self._numbers.append(self.messages + rows[there])
        self.messages += len(block)
        self.entries += len(self._values[-1])
        self._rejected += len(block) - len(batch)

    def held(self) -> Held:
        labels = np.concatenate(self._labels)
        if not len(labels):
            raise BadData(
                f"none of {self.messages:,} messages has an outcome, and a batch fit needs some: none had "
                f"`{self._label}` (message.label). Is the path right, and are the outcomes in this log?"
            )
        columns, addresses = _numbered(np.concatenate(self._addresses))
        row_ptr = np.concatenate([np.zeros(1, np.int64), np.cumsum(np.concatenate(self._lengths))])
        values, weights = np.concatenate(self._values), np.concatenate(self._weights)
        rows = Rows(row_ptr, columns, values, labels, weights, len(addresses))
        return Held(rows, addresses, np.concatenate(self._numbers), self.messages, self._rejected)


def _numbered(
    addresses: npt.NDArray[np.uint64],
) -> tuple[npt.NDArray[np.int32], npt.NDArray[np.uint64]]:
    """int32[nnz] column of each entry, numbered as they first appear, and uint64[n] the address of each."""
    distinct, first, inverse = np.unique(addresses, return_index=True, return_inverse=True)
    order = np.argsort(first)
    place = np.empty(len(order), np.int32)
    place[order] = np.arange(len(order), dtype=np.int32)
    return place[inverse], distinct[order]
