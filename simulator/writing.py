"""A feed, its faults and a pace in; its records to a sink, and the truth behind them, out."""

from __future__ import annotations

from collections.abc import Callable
from typing import Protocol

from simulator.courier import Courier, FeedBlock
from simulator.faults import Faults, Records, Transport
from simulator.feed import CourierFeed
from simulator.outcomes import LateOutcomes, without_outcome
from simulator.pacing import Pace
from simulator.truth import Tally, Truth

__all__ = ["Progress", "Sink", "write_feed"]

Progress = Callable[[int, int], None]
"""Called with messages written so far and messages in all."""


class Sink(Protocol):
    """Where records go. What is handed over is whole when a call returns."""

    late_outcomes: bool
    """Whether outcomes come by themselves, later, instead of in the messages."""

    def messages(self, records: Records) -> None:
        """Takes the next messages."""
        ...

    def outcomes(self, records: Records) -> None:
        """Takes the next late outcomes."""
        ...

    def probabilities(self, block: FeedBlock, rows: slice) -> None:
        """Takes the true probabilities of messages that are on their way."""
        ...


def write_feed(
    feed: CourierFeed, sink: Sink, faults: Faults, pace: Pace, progress: Progress | None = None
) -> Truth:
    """Writes the messages of the feed and returns the truth behind those that were written.

    When `pace` says that a stop is asked for, what is under way is still handed over, but outcomes that are
    not known yet are not. Raises what the sink raises, and ValueError for faults of outcomes that stand in
    the messages.
    """
    if not sink.late_outcomes and faults.in_outcomes:
        raise ValueError(
            f"lost_outcomes is {faults.lost_outcomes} and repeated_outcomes {faults.repeated_outcomes}, but "
            "the outcomes stand in the messages; let them come late, by themselves"
        )
    courier = Courier(feed)
    tally, transport = Tally(courier), Transport(feed, faults)
    late = LateOutcomes(feed, faults) if sink.late_outcomes else None
    for number in range(feed.block_count):
        block = courier.block(number)
        lines = block.lines.splitlines()
        if late is not None:
            lines = [without_outcome(line) for line in lines]
        step = pace.at_once(len(lines))
        for start in range(0, len(lines), step):
            if not pace.wait(tally.messages):
                break
            rows = slice(start, min(start + step, len(lines)))
            sink.probabilities(block, rows)
            sink.messages(transport.take(block.first + start, lines[rows]))
            if late is not None:
                late.take(block.first + start, block.second[rows], block.outcome[rows])
                sink.outcomes(late.due(int(block.second[rows.stop - 1])))
            tally.add(block, rows)
            if progress is not None:
                progress(tally.messages, feed.messages)
        if pace.stopped():
            break
    sink.messages(transport.rest())
    if late is not None and tally.messages == feed.messages:
        sink.outcomes(late.rest())
    return tally.truth(faults, transport.counts(), None if late is None else late.counts())
