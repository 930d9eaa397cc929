"""Chunks of one partition come in from the reader's thread; blocks go out to whoever learns, in order.

A lane belongs to whoever holds the reader's lock.
"""

from __future__ import annotations

from collections import deque
from dataclasses import dataclass, field

from stream.message import Block
from stream.topics.records import Chunk

__all__ = ["Lane", "Last"]


@dataclass(frozen=True, slots=True)
class Last:
    """The record of a partition that was given out last."""

    offset: int
    digest: str


@dataclass(slots=True)
class Lane:
    """One partition: what was fetched and not yet given out, and how far fetching has come.

    `floor`: records before it are not wanted; `fetch`: the offset to ask for next; `check`: a record before
    the floor that must still be what it was; `fresh`: nothing of it was ever given out, so that it may begin
    wherever the log does; `log_start`: where the log begins now, where what is to be fetched next was removed
    from it, None where it is there. `turn` changes whenever the lane is placed anew, `moved_s` when `fetch`
    moves.
    """

    partition: int
    floor: int
    fresh: bool = False
    check: Last | None = None
    log_start: int | None = None
    fetch: int = 0
    end: int | None = None
    until: int | None = None
    held_bytes: int = 0
    moved_s: float = 0.0
    stalls: int = 0
    turn: int = 0
    sought: bool = False
    _chunks: deque[Chunk] = field(default_factory=deque)
    _row: int = 0

    def __post_init__(self) -> None:
        self.fetch = self.floor if self.check is None else self.check.offset

    def place(self, offset: int) -> None:
        """Drops what was fetched, and begins again at `offset`."""
        self._chunks.clear()
        self._row = self.held_bytes = 0
        self.floor = self.fetch = offset
        self.check = self.log_start = None
        self.sought = False
        self.turn += 1

    def put(self, chunk: Chunk) -> None:
        """Adds what was fetched behind the rest."""
        if len(chunk):
            self._chunks.append(chunk)
            self.held_bytes += chunk.held_bytes

    @property
    def ahead(self) -> int | None:
        """Offset of the next record that is there, None where none is."""
        return int(self._chunks[0].offsets[self._row]) if self._chunks else None

    @property
    def reached(self) -> int:
        """Where giving out has come to, transaction marks passed that no record follows."""
        return self.fetch if self.ahead is None else self.ahead

    @property
    def at_gap(self) -> bool:
        """Whether all that was fetched is given out and what follows was removed from the log."""
        return self.log_start is not None and not self._chunks

    def take(self, limit: int, last: int | None = None) -> tuple[Block, int, Last] | None:
        """Up to `limit` records, of those before `last`; the offset behind them and the last of them."""
        if not self._chunks:
            return None
        chunk, start = self._chunks[0], self._row
        stop = min(start + limit, len(chunk))
        if last is not None:
            stop = min(stop, int(chunk.offsets.searchsorted(last)))
        if stop <= start:
            return None
        if stop == len(chunk):
            self._chunks.popleft()
            self.held_bytes -= chunk.held_bytes
            self._row, after = 0, chunk.after
        else:
            self._row, after = stop, int(chunk.offsets[stop - 1]) + 1
        self.fresh = False
        end = Last(int(chunk.offsets[stop - 1]), chunk.digest(stop - 1))
        return chunk.block(start, stop), after, end
