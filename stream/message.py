"""Raw messages as they come from a source, and decoded ones: the nouns Block, Source, Examples, Reject."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from typing import Any, Protocol

import numpy as np
import numpy.typing as npt

__all__ = ["Block", "Examples", "LiveSource", "Message", "Reject", "Source"]

Int64s = npt.NDArray[np.int64]
Position = dict[str, Any]
"""Where to read next, as a source understands it: JSON types only, kept whole in a checkpoint."""


@dataclass(frozen=True, slots=True)
class Message:
    """One raw message. For a log, `topic` is the file and `offset` a byte position in it."""

    topic: str
    partition: int
    offset: int
    timestamp_ms: int | None
    key: bytes | None
    value: bytes


@dataclass(frozen=True, slots=True)
class Block:
    """Consecutive raw messages of one partition, side by side in one buffer.

    `starts`, `ends`: int64[m], byte range of each value in `buffer` (line ends excluded);
    `offsets`: int64[m], where each message begins in its file. `buffer` holds the m values in
    order, one per line, so that buffer[starts[0]:ends[-1]] is JSON Lines. `originals`: gives the message
    of a row as it came, where the buffer cannot: with key and time, and the value's own line ends.
    """

    topic: str
    partition: int
    buffer: bytes
    starts: Int64s
    ends: Int64s
    offsets: Int64s
    originals: Callable[[int], Message] | None = None

    def __len__(self) -> int:
        return len(self.starts)

    def value(self, row: int) -> bytes:
        """The bytes of message `row`."""
        return self.buffer[self.starts[row] : self.ends[row]]

    def message(self, row: int) -> Message:
        """Message `row` on its own, as it came."""
        if self.originals is not None:
            return self.originals(row)
        return Message(self.topic, self.partition, int(self.offsets[row]), None, None, self.value(row))


@dataclass(frozen=True, slots=True)
class Reject:
    """A message of a block that cannot be used: which row, a reason code, and what was found.

    `reason` is a fixed snake_case word (it is counted by reason); `detail` says place, value and
    limit for a person.
    """

    row: int
    reason: str
    detail: str


class Source(Protocol):
    """Reads messages in order. `read` returns an empty block at the end of what is there.

    A block never spans two files. `position` is the *next* message to read after the last
    block returned; `seek` goes there.
    """

    def read(self, limit: int) -> Block:
        """Up to `limit` (>= 1) further messages."""
        ...

    def position(self) -> Position:
        """Where the next `read` begins."""
        ...

    def seek(self, position: Position) -> None:
        """Goes to a position that `position` gave, or raises BadSettings with the difference."""
        ...

    def fraction_read(self) -> float | None:
        """Share of the input read so far, 0 to 1; None where it cannot be known."""
        ...

    def close(self) -> None:
        """Releases files."""
        ...


class LiveSource(Source, Protocol):
    """A source that goes on for ever and can read its messages again by partition and offset.

    What comes when is decided by whoever feeds it, so `read` may return an empty block that is not the end.
    Offsets are *next* offsets throughout. A position says what was read and where each partition that was
    read or placed goes on; nothing in it depends on when or how often reading stopped.
    """

    def start(self) -> None:
        """Goes to where a first start begins; raises BadSettings where the settings do not say."""
        ...

    def next_offsets(self) -> Mapping[int, int]:
        """The next offset of each partition that was read or placed; a view, not a copy."""
        ...

    def place(self, partition: int, offset: int) -> None:
        """The next `read` of `partition` begins at `offset`, as after reading up to it."""
        ...

    def read_range(self, partition: int, first: int, last: int, limit: int) -> Block:
        """Up to `limit` (>= 1) messages of `partition` with first <= offset < last; empty where none is left.

        The partition goes on behind them, at `last` once all were given. Raises BadSettings where a part of
        the range is not there any more.
        """
        ...

    def gaps(self) -> list[tuple[int, int, int]]:
        """Ranges (partition, from, to) that were passed over because they are gone for good, told once.

        `seek` passes over several at once, `read` over one, and returns an empty block then.
        """
        ...

    def at_end(self) -> bool:
        """Whether all that was there when the source was opened has been read."""
        ...

    def commit(self, position: Position) -> None:
        """Tells whoever watches the lag that `position` is in a durable checkpoint; nothing relies on it."""
        ...


@dataclass(slots=True)
class Examples:
    """Decoded messages, column by column; a rejected message has no place here.

    `rows`: int64[m], which message of the block each example is;
    `columns`: one list of m values for each distinct path that fields and crosses read
    (str, int, float, bool, list or None as decoded), by path;
    `labels`: int8[m], 1, 0, or -1 without a label; `weights`: float64[m];
    `ids`, `times`: m values when they were asked for, else empty.
    """

    rows: Int64s
    columns: dict[str, list[Any]]
    labels: npt.NDArray[np.int8]
    weights: npt.NDArray[np.float64]
    ids: list[Any] = field(default_factory=list)
    times: list[Any] = field(default_factory=list)

    def __len__(self) -> int:
        return len(self.rows)
