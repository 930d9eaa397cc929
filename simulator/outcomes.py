"""Messages and their outcomes in; the outcomes out when they become known, some lost and some repeated."""

from __future__ import annotations

from collections.abc import Iterable
from datetime import datetime, timedelta
from typing import Any

import numpy as np
import numpy.typing as npt

from simulator.arithmetic import exp, log
from simulator.draws import Raw, bits, raw_stream, uniform
from simulator.faults import Faults, Records
from simulator.feed import BLOCK, CourierFeed
from simulator.lines import FIRST_DAY

__all__ = ["DELAYS", "LateOutcomes", "time_text", "without_outcome"]

OUTCOME_STREAM = 7
DELAYS = ((0.0, 60), (0.35, 3_600), (0.5, 86_400), (1.0, 30 * 86_400))
"""Shares of outcomes known after so many seconds; between them the logarithm of the delay is even."""
HOUR = 3_600
MIDNIGHT = datetime.combine(FIRST_DAY, datetime.min.time())
LABEL = b',"redelivered":'

Ints = npt.NDArray[np.int64]
Flags = npt.NDArray[np.bool_]


def without_outcome(line: bytes) -> bytes:
    """A line of the feed without its label."""
    return line[: line.rindex(LABEL)] + b"}"


def time_text(second: int) -> str:
    """Seconds since the midnight before the first message, as RFC 3339 text."""
    return f"{MIDNIGHT + timedelta(seconds=second):%Y-%m-%dT%H:%M:%SZ}"


class LateOutcomes:
    """Outcomes under way; when each comes depends on the seed, its message and the shares.

    Counts, over what was taken and handed over so far: `written`; `lost`; `repeated`: second copies. Holds
    about 25 bytes for each outcome under way, which is 30 days of messages at most.
    """

    def __init__(self, feed: CourierFeed, faults: Faults) -> None:
        self._feed, self._faults = feed, faults
        self._block = -1
        self._hours: dict[int, list[tuple[Ints, Ints, Flags]]] = {}
        self.written = self.lost = self.repeated = 0

    def take(self, first: int, second: Ints, outcome: Flags) -> None:
        """Takes the outcomes of messages numbered from `first`, all of one block, which came at `second`."""
        self._draw(first // BLOCK)
        at = slice(first % BLOCK, first % BLOCK + len(outcome))
        come, twice = self._come[at], self._twice[at]
        self.lost += int(np.count_nonzero(~come))
        self.repeated += int(np.count_nonzero(twice))
        number, known = first + np.arange(len(outcome)), second + self._delay[at]
        self._add(known[come], number[come], outcome[come])
        self._add((known + self._until_again[at])[twice], number[twice], outcome[twice])

    def due(self, second: int) -> Records:
        """The outcomes known by then, in the order of time."""
        hour = second // HOUR
        parts = [part for h in sorted(self._hours) if h <= hour for part in self._hours.pop(h)]
        known, number, outcome = _joined(parts)
        early = known <= second
        self._add(known[~early], number[~early], outcome[~early])
        return self._written(known[early], number[early], outcome[early])

    def rest(self) -> Records:
        """All that are under way."""
        parts = [part for hour in sorted(self._hours) for part in self._hours.pop(hour)]
        return self._written(*_joined(parts))

    def counts(self) -> dict[str, Any]:
        """The counts as a document; `waiting`: outcomes not written because the run was ended early."""
        waiting = sum(len(known) for parts in self._hours.values() for known, _, _ in parts)
        return {
            "written": self.written,
            "lost": self.lost,
            "repeated": self.repeated,
            "waiting": waiting,
        }

    def _draw(self, block: int) -> None:
        """What the outcomes of this block meet."""
        if block == self._block:
            return
        self._block = block
        raw = raw_stream(self._feed.seed, OUTCOME_STREAM, block).random_raw((BLOCK, 2))
        self._delay = _delays(raw[:, 0])
        fate = uniform(raw[:, 1])
        self._come = fate >= self._faults.lost_outcomes
        self._twice = self._come & (fate >= 1.0 - self._faults.repeated_outcomes)
        self._until_again = 1 + bits(raw[:, 1], 0, 11) * HOUR // 2048

    def _add(self, known: Ints, number: Ints, outcome: Flags) -> None:
        order = np.argsort(known, kind="stable")
        known, number, outcome = known[order], number[order], outcome[order]
        hours, starts = np.unique(known // HOUR, return_index=True)
        for hour, at in zip(hours.tolist(), np.split(np.arange(len(known)), starts[1:]), strict=False):
            self._hours.setdefault(hour, []).append((known[at], number[at], outcome[at]))

    def _written(self, known: Ints, number: Ints, outcome: Flags) -> Records:
        order = np.lexsort((number, known))
        self.written += len(order)
        lines = [
            f'{{"id":"h{n:09d}","at":"{time_text(s)}","redelivered":{"true" if o else "false"}}}'.encode()
            for s, n, o in zip(
                known[order].tolist(), number[order].tolist(), outcome[order].tolist(), strict=True
            )
        ]
        return Records(number[order], lines)


def _joined(parts: Iterable[tuple[Ints, Ints, Flags]]) -> tuple[Ints, Ints, Flags]:
    columns = list(zip(*parts, strict=True)) or [(), (), ()]
    kinds = (np.int64, np.int64, np.bool_)
    known, number, outcome = (
        np.concatenate([np.empty(0, kind), *column]) for kind, column in zip(kinds, columns, strict=True)
    )
    return known, number, outcome


def _delays(raw: Raw) -> Ints:
    """Whole seconds, by the inverse of the distribution."""
    share = uniform(raw)
    shares, seconds = (np.array(column, dtype=np.float64) for column in zip(*DELAYS, strict=True))
    logs = log(seconds)
    cell = np.searchsorted(shares, share, side="right") - 1
    within = (share - shares[cell]) / (shares[cell + 1] - shares[cell])
    delay: Ints = np.floor(exp(logs[cell] + within * (logs[cell + 1] - logs[cell]))).astype(np.int64)
    return delay
