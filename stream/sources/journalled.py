"""A live source and an order journal come in; messages in the journal's order go out, then new ones, noted.

A position is {"source": the source's own, "journal": {"records", "crc"}}: the records whose messages were all
read, and their sum. Of a record that was read in part the source's position says how far.
"""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path

from stream.errors import BadData
from stream.journal import Journal, Kind, Mark, Span, spans_after
from stream.message import Block, LiveSource, Position
from stream.sources.lines import empty_block

__all__ = ["FollowedSource", "JournalledSource"]


class _Order:
    """The records of a journal behind `mark`, followed one after the other.

    `done`: the place behind the last one that was read whole; `named`: partitions of those begun.
    """

    def __init__(self, source: LiveSource, path: Path, mark: Mark) -> None:
        self.done = mark
        self.named: set[int] = set()
        self._source = source
        self._path = path
        self._spans = spans_after(path, mark)
        self._ahead = next(self._spans, None)

    @property
    def ended(self) -> bool:
        """Whether nothing is left to follow."""
        return self._ahead is None

    def read(self, limit: int) -> Block | None:
        """Up to `limit` messages of the next record, none where they did not come yet; None at the end."""
        while self._ahead is not None:
            span, behind = self._ahead
            self.named.add(span.partition)
            block = self._read(span, limit)
            ended = self._source.next_offsets()[span.partition] == span.last
            if ended:
                if span.kind is Kind.READ:
                    self.done = behind
                self._ahead = next(self._spans, None)
            if len(block) or not ended:
                return block
        return None

    def _read(self, span: Span, limit: int) -> Block:
        if span.kind is not Kind.READ:
            self._source.place(span.partition, span.last)
            return empty_block("")
        first = self._source.next_offsets().get(span.partition)
        if first is None or not span.first <= first <= span.last:
            raise BadData(
                f"{self._path}: record {self.done.records:,} or later reads partition {span.partition} from "
                f"{span.first}, but the one before it ended at {first}. Put the file back from a copy, or "
                "begin again with another state folder"
            )
        return self._source.read_range(span.partition, first, span.last, limit)


class FollowedSource:
    """Reads again, in the journal's order, what a worker read: to the end of the journal and no further.

    Implements stream.message.Source. `journal`: the file, of which nothing is changed.
    """

    def __init__(self, source: LiveSource, journal: Path) -> None:
        self._source = source
        self._path = journal
        self._order = _Order(source, journal, Mark())

    def read(self, limit: int) -> Block:
        """Up to `limit` messages; an empty block at the end of the journal, or where none has come."""
        block = self._order.read(limit)
        return empty_block("") if block is None else block

    def position(self) -> Position:
        """As the worker's own at this place."""
        return {"source": self._source.position(), "journal": self._order.done.to_json()}

    def seek(self, position: Position) -> None:
        """Goes on from a position of this source or of the worker's. Raises BadSettings, BadData."""
        self._source.seek(position["source"])
        self._order = _Order(self._source, self._path, Mark.from_json(position["journal"]))

    def at_end(self) -> bool:
        """Whether the whole journal was followed."""
        return self._order.ended

    def fraction_read(self) -> float | None:
        """None: what is left of the journal is not counted."""
        return None

    def close(self) -> None:
        """Releases the source."""
        self._source.close()


class JournalledSource:
    """A live source whose reads are noted before they are given out, so that they can be followed again.

    What the journal in `folder` holds behind the position that is gone on from comes first. Implements
    stream.message.Source; `start` or `seek` comes before the first `read`. `passed_over`: messages in gaps
    that this object noted. `cut_bytes`: what a crash had torn at the journal's end.
    """

    def __init__(self, source: LiveSource, folder: Path) -> None:
        self._source = source
        self._folder = folder
        self._journal: Journal | None = None
        self._order: _Order | None = None  # what is still followed
        self._done = Mark()
        self._next: dict[int, int] = {}
        self.passed_over = 0
        self.cut_bytes = 0

    @property
    def following(self) -> bool:
        """Whether what the journal holds behind the position still comes, before anything new."""
        return self._order is not None

    def start(self) -> None:
        """Begins where the settings say, or follows the journal of a run that left no checkpoint."""
        self._source.start()
        self._follow(self._open(Mark()))

    def seek(self, position: Position) -> None:
        """Goes on from a position. Raises BadSettings, BadData.

        Where messages are gone for good and the source passes over them, records behind the position are
        dropped: no checkpoint has what they say, and it cannot be learned again.
        """
        mark = Mark.from_json(position["journal"])
        journal = self._open(mark)
        self._source.seek(position["source"])
        self._next = dict(self._source.next_offsets())
        gaps = self._source.gaps()
        if gaps:
            journal.cut_back(mark)
            self._note_gaps(gaps)
        self._done = mark
        self._follow(journal)

    def read(self, limit: int) -> Block:
        """Up to `limit` messages; an empty block where none has come."""
        if self._order is not None:
            block = self._order.read(limit)
            if block is not None:
                self._done = self._order.done
                return block
            self._go_live(self._order)
        block = self._source.read(limit)
        if len(block):
            self._note(block)
        elif gaps := self._source.gaps():
            self._note_gaps(gaps)
        return block

    def position(self) -> Position:
        """Where the next `read` begins; see the top of this file."""
        return {"source": self._source.position(), "journal": self._done.to_json()}

    def sync(self) -> None:
        """Makes the journal durable: before a checkpoint, and before anything learned is sent out."""
        if self._journal is not None:
            self._journal.sync()

    def at_end(self) -> bool:
        """Whether all that was there when the source was opened has been read."""
        return (self._order is None or self._order.ended) and self._source.at_end()

    def commit(self, position: Position) -> None:
        """Passes on that a checkpoint with `position` is durable."""
        self._source.commit(position["source"])

    def fraction_read(self) -> float | None:
        """What the source knows of it."""
        return self._source.fraction_read()

    def close(self) -> None:
        """Releases source and journal."""
        self._source.close()
        if self._journal is not None:
            self._journal.close()

    def _open(self, mark: Mark) -> Journal:
        self._journal = Journal(self._folder, mark)
        self.cut_bytes = self._journal.cut_bytes
        return self._journal

    def _follow(self, journal: Journal) -> None:
        self._order = _Order(self._source, journal.path, self._done)

    def _go_live(self, order: _Order) -> None:
        """From here on new messages come. Where a partition begins that nothing says yet is noted first."""
        self._order = None
        found = dict(self._source.next_offsets())
        unsaid = found.keys() - self._next.keys() - order.named
        self._append(*(Span(Kind.START, p, found[p], found[p]) for p in sorted(unsaid)))
        self._next = found
        self.sync()

    def _note(self, block: Block) -> None:
        partition = block.partition
        last = self._source.next_offsets()[partition]
        first = self._next.get(partition)
        spans = [Span(Kind.READ, partition, int(block.offsets[0]) if first is None else first, last)]
        if first is None:
            spans.insert(0, Span(Kind.START, partition, spans[0].first, spans[0].first))
        self._done = self._append(*spans)
        self._next[partition] = last

    def _note_gaps(self, gaps: Sequence[tuple[int, int, int]]) -> None:
        self._append(*(Span(Kind.GAP, *gap) for gap in gaps))
        for partition, first, last in gaps:
            self._next[partition] = last
            self.passed_over += last - first

    def _append(self, *spans: Span) -> Mark:
        assert self._journal is not None
        if spans:
            self._journal.append(*spans)
        return self._journal.mark
