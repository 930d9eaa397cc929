"""Messages in their order in; the records of them out as a bad line of transport hands them over."""

from __future__ import annotations

import math
from collections import Counter
from collections.abc import Callable, Sequence
from dataclasses import dataclass, fields
from typing import Any

import numpy as np
import numpy.typing as npt

from simulator.arithmetic import log
from simulator.draws import bits, raw_stream, uniform
from simulator.feed import BLOCK, CourierFeed

__all__ = ["Faults", "Records", "Transport"]

FAULT_STREAM = 6
LONGEST_GAP = 99
MOST_BEHIND = 100
MOST_BEHIND_TWICE = 200
MOST_MISSING = 0.9

Ints = npt.NDArray[np.int64]


@dataclass(frozen=True, slots=True)
class Faults:
    """What goes wrong on the way, as shares of messages (those of outcomes: of outcomes), none by default.

    `duplicates`: come twice, the second time up to 199 messages later;
    `reordering`: come behind one to 100 later messages;
    `malformed`: cannot be read any more, in one of the ways of MALFORMED;
    `gaps`: never come, from one to 99 in a row (at most 0.9);
    `lost_outcomes`: never come; `repeated_outcomes`: come again within an hour.

    A message has one of the first, third and fourth at most. Raises ValueError with the fault, its share and
    what is allowed.
    """

    duplicates: float = 0.0
    reordering: float = 0.0
    malformed: float = 0.0
    gaps: float = 0.0
    lost_outcomes: float = 0.0
    repeated_outcomes: float = 0.0

    def __post_init__(self) -> None:
        for field in fields(self):
            share, most = getattr(self, field.name), MOST_MISSING if field.name == "gaps" else 1.0
            if isinstance(share, bool) or not isinstance(share, int | float) or not math.isfinite(share):
                raise ValueError(f"{field.name} is {share!r}; it must be a share, 0 to {most:g}")
            if not 0 <= share <= most:
                raise ValueError(f"{field.name} is {share}; allowed is 0 to {most:g}")
        for one, other in (("duplicates", "malformed"), ("lost_outcomes", "repeated_outcomes")):
            if getattr(self, one) + getattr(self, other) > 1:
                raise ValueError(
                    f"{one} and {other} are {getattr(self, one)} and {getattr(self, other)}; together they "
                    "may be 1 at most, since nothing is both"
                )

    @property
    def in_outcomes(self) -> bool:
        """Whether any outcome is touched."""
        return self.lost_outcomes > 0 or self.repeated_outcomes > 0

    @property
    def in_messages(self) -> bool:
        """Whether any message is touched."""
        return any((self.duplicates, self.reordering, self.malformed, self.gaps))


@dataclass(frozen=True, slots=True)
class Records:
    """Lines without their ends, in the order of writing; `number`: int64[r], of the message of each."""

    number: Ints
    values: Sequence[bytes]

    def __len__(self) -> int:
        return len(self.values)


MALFORMED: dict[str, Callable[[bytes], bytes]] = {
    "cut_off": lambda line: line[: len(line) // 2],
    "no_json": lambda line: line.replace(b'"id":', b'"id"=', 1),
    "no_object": lambda line: b"[" + line + b"]",
    "note_is_a_number": lambda line: line.replace(b'"note":"', b'"note":7,"text":"', 1),
    "broken_utf8": lambda line: line.replace(b'"note":"', b'"note":"\xff', 1),
}
"""Ways of being malformed, each with what it makes of a line. The last two only hurt who reads the note."""


class Transport:
    """Hands messages over with their faults; what a message meets depends on seed, shares and its number.

    Counts, over what was taken and handed over so far: `records`; `missing` messages; `malformed` by way;
    `duplicates`: second copies; `reordered`: records behind one of a later message.
    """

    def __init__(self, feed: CourierFeed, faults: Faults) -> None:
        self._feed, self._faults = feed, faults
        self._ways = list(MALFORMED.items())
        self._block = -1
        self._latest = -1
        # Those under way: when they are due, as a message number and a rank among those due with it
        self._due, self._rank, self._number = (np.empty(0, np.int64) for _ in range(3))
        self._values: list[bytes] = []
        self.records = self.missing = self.duplicates = self.reordered = 0
        self.malformed = Counter(dict.fromkeys(MALFORMED, 0))

    def take(self, first: int, lines: Sequence[bytes]) -> Records:
        """Takes the messages numbered from `first`, all of one block; the records that are due by then."""
        if not self._faults.in_messages:
            self.records += len(lines)
            return Records(first + np.arange(len(lines)), lines)
        self._draw(first // BLOCK)
        at = slice(first % BLOCK, first % BLOCK + len(lines))
        number = first + np.arange(len(lines))
        here, bad, twice = ~self._missing[at], self._bad[at], self._twice[at]
        behind, again, way = self._behind[at], self._again[at], self._way[at]
        self.missing += int(np.count_nonzero(~here))
        values = list(lines)
        for row in np.flatnonzero(here & bad).tolist():
            name, spoil = self._ways[way[row]]
            values[row] = spoil(values[row])
            self.malformed[name] += 1
        rows, copies = np.flatnonzero(here), np.flatnonzero(here & twice)
        due = np.concatenate([number[rows] + behind[rows], (number + behind + again)[copies]])
        rank = np.concatenate([np.where(behind[rows] > 0, 1, 0), np.full(len(copies), 2)])
        rows = np.concatenate([rows, copies])
        self._add(due, rank, number[rows], [values[row] for row in rows.tolist()])
        return self._hand_over(first + len(lines))

    def rest(self) -> Records:
        """The records still under way."""
        return self._hand_over(np.iinfo(np.int64).max)

    def counts(self) -> dict[str, Any]:
        """The counts as a document."""
        return {
            "written": self.records,
            "missing": self.missing,
            "duplicates": self.duplicates,
            "malformed": dict(self.malformed),
            "reordered": self.reordered,
        }

    def _draw(self, block: int) -> None:
        """What the messages of this block meet."""
        if block == self._block:
            return
        self._block = block
        faults = self._faults
        raw = raw_stream(self._feed.seed, FAULT_STREAM, block).random_raw((BLOCK, 4))
        fate = uniform(raw[:, 1])
        self._bad = fate < faults.malformed
        self._twice = ~self._bad & (fate < faults.malformed + faults.duplicates)
        late = uniform(raw[:, 2]) < faults.reordering
        self._behind = np.where(late, 1 + bits(raw[:, 2], 0, 11) % MOST_BEHIND, 0)
        self._again = bits(raw[:, 3], 0, 16) % MOST_BEHIND_TWICE
        self._way = bits(raw[:, 3], 16, 16) % len(MALFORMED)
        # With gaps of n messages beginning at a share q of places, a share exp(-q n) of messages is in none.
        begins = -float(log(np.array([1.0 - faults.gaps]))[0]) / ((1 + LONGEST_GAP) / 2)
        self._missing = np.zeros(BLOCK, np.bool_)
        for start in np.flatnonzero(uniform(raw[:, 0]) < begins).tolist():
            length = 1 + int(bits(raw[start, 0:1], 0, 11)[0]) % LONGEST_GAP
            self._missing[start : start + length] = True

    def _add(self, due: Ints, rank: Ints, number: Ints, values: list[bytes]) -> None:
        self._due = np.concatenate([self._due, due])
        self._rank = np.concatenate([self._rank, rank])
        self._number = np.concatenate([self._number, number])
        self._values += values

    def _hand_over(self, before: int) -> Records:
        """What is due before message `before`, in order."""
        order = np.lexsort((self._number, self._rank, self._due))
        ready = order[self._due[order] < before]
        number, values = self._number[ready], [self._values[i] for i in ready.tolist()]
        self.records += len(values)
        self.duplicates += int(np.count_nonzero(self._rank[ready] == 2))
        latest = np.maximum.accumulate(np.append(self._latest, number))
        self.reordered += int(np.count_nonzero(number < latest[:-1]))
        self._latest = int(latest[-1])
        kept = np.sort(order[len(ready) :])
        self._due, self._rank, self._number = self._due[kept], self._rank[kept], self._number[kept]
        self._values = [self._values[i] for i in kept.tolist()]
        return Records(number, values)
