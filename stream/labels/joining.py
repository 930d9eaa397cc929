"""Messages and their late outcomes in, in any order of partitions; what to score and learn out, in one order.

Everything follows from event times. The watermark is the lowest event time that any partition of the two
feeds has reached; what is earlier has been seen, and is gone through in the order of (event time, messages
before outcomes, partition, offset). A message is released at the time of its outcome, or when its waiting
time is over. Messages come out twice, when they arrive and when they are released, in the order of (event
time, arrivals before releases, partition, offset). So feeds whose partitions ascend in event time give the
same, however their partitions were interleaved and cut into blocks.
"""

from __future__ import annotations

import heapq
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import asdict, dataclass
from itertools import repeat
from typing import Any

import numpy as np
import numpy.typing as npt

from stream.labels.counts import JoinCounts
from stream.labels.delays import Delays
from stream.labels.events import (
    ARRIVED,
    DIFFERING,
    HALVES,
    RELEASED,
    UNKNOWN,
    Ahead,
    Event,
    Outcome,
    as_arrays,
    digest_of,
    from_arrays,
    halves_of,
    taken_before,
)
from stream.labels.fates import (
    AHEAD,
    CAME_LATE,
    CONTRADICTED,
    ENDED,
    EXPIRED,
    HELD,
    JOINED,
    KIND,
    POSITIVE,
    REMEMBERED,
    REPEATED,
    WAITING,
)
from stream.labels.id_index import ABSENT, IdIndex
from stream.labels.segments import ROWS, WaitingRow
from stream.labels.store import WaitingStore
from stream.labels.watermark import Feed, Watermark
from stream.settings import Outcomes

__all__ = ["Join"]

SEGMENTS_AT_ONCE = 64
"""Segments whose expiry one step looks at, more only where they begin at one time."""


AT_ONCE = 256
"""Segments whose ids are put into the index together when a store is opened."""
BEGINNING, END = -(1 << 60), 1 << 60
"""Before and after every event time."""


@dataclass(slots=True)
class _Known:
    """The message that an id stands for; `slot`: its place in the index, ABSENT while it has none."""

    handle: int
    time: int
    partition: int
    offset: int
    fate: int
    slot: int


class Join:
    """Joins two feeds over a store; `counts` and `delays` say what happened so far.

    The partitions of both feeds are named by `watermark.expect` before anything is released. State is split:
    rows, and what became of them, are in the store, the rest in `state()`.
    """

    def __init__(self, outcomes: Outcomes, store: WaitingStore) -> None:
        self._wait = outcomes.wait_ms
        self._learn_absent = outcomes.when_absent == "negative"
        self._on_conflict = outcomes.on_conflict
        self._allow_early = outcomes.allow_early
        self._store = store
        self._index = IdIndex()
        self.watermark = Watermark()
        self.counts = JoinCounts()
        self.delays = Delays()
        self._clock = BEGINNING
        self._ahead: list[Ahead] = []
        self._inbox: list[Outcome] = []
        self._early: dict[bytes, Outcome] = {}
        self._settled = store.first
        self._unsettled: list[tuple[int, int]] = []  # lowest time of what may be unsettled in a segment
        self._latest: dict[int, int] = {}  # the latest time in a segment
        self._open = (ABSENT, 0)  # the segment being filled, and a time in self._unsettled for it

    @property
    def waiting(self) -> int:
        """Messages that have been taken and are not decided."""
        return self.counts.waiting

    def add_messages(
        self,
        partition: int,
        offsets: Iterable[int],
        times: Sequence[int],
        ids: Iterable[str | int],
        payloads: Iterable[bytes],
    ) -> None:
        """Takes messages of one partition with their event times in ms."""
        if not times:
            return
        append, ahead, latest = self._store.append, self._ahead, self._latest
        for offset, time, digest, payload in zip(offsets, times, map(digest_of, ids), payloads, strict=True):
            low, high = HALVES.unpack(digest)
            handle = append(WaitingRow(time, partition, offset, low, high, payload), AHEAD)
            segment = handle // ROWS
            if self._open[0] != segment or time < self._open[1]:
                heapq.heappush(self._unsettled, (time, segment))
                self._open = (segment, time)
            if latest.get(segment, BEGINNING) < time:
                latest[segment] = time
            heapq.heappush(ahead, Ahead(time, partition, offset, digest, handle))
        self.counts.messages += len(times)
        self.watermark.reach(Feed.MESSAGES, partition, max(times))

    def add_outcomes(
        self,
        partition: int,
        offsets: Iterable[int],
        times: Sequence[int],
        ids: Iterable[str | int],
        labels: Iterable[int],
    ) -> None:
        """Takes outcomes of one partition, 0 or 1, with their event times in ms."""
        if not times:
            return
        for offset, time, digest, label in zip(offsets, times, map(digest_of, ids), labels, strict=True):
            heapq.heappush(self._inbox, Outcome(time, partition, offset, digest, label))
        self.counts.outcomes += len(times)
        self.watermark.reach(Feed.OUTCOMES, partition, max(times))

    def advance(self) -> list[Event] | None:
        """The next events, in order; None when there is nothing to do before more comes.

        Some thousands at once; the list may be empty. All of them must be dealt with, in this order, before
        more is asked for or state is saved: each one that arrives scored (`note_score`), each one that is
        released learned, with what was noted as its score (`score_of`).
        """
        until = self.watermark.time()
        return None if until is None else self._step(until)

    def release_all(self) -> list[Event] | None:
        """As `advance`, but as if time had come to its end: what has no outcome by now has none."""
        return self._step(END)

    def note_score(self, handle: int, score: float) -> None:
        """The margin that a message was given when it arrived."""
        self._store.note_score(handle, score)

    def score_of(self, handle: int) -> float:
        """What was noted."""
        return self._store.score_of(handle)

    def state(self) -> dict[str, npt.NDArray[Any]]:
        """Outcomes whose time has not come, or whose message has not; equal for equal feeds."""
        return {
            **{f"ahead.{name}": array for name, array in as_arrays(sorted(self._inbox)).items()},
            **{f"early.{name}": array for name, array in as_arrays(sorted(self._early.values())).items()},
            "delays": self.delays.counts,
        }

    def about(self) -> dict[str, Any]:
        """The rest of the state as JSON types."""
        return {"clock": self._clock, "counts": asdict(self.counts), "watermark": self.watermark.state()}

    def restore(self, about: Mapping[str, Any], arrays: Mapping[str, npt.NDArray[Any]]) -> None:
        """Goes on from what `about` and `state` gave, over a store opened at the moment kept with them."""
        self._clock = about["clock"]
        self.counts = JoinCounts(**about["counts"])
        self.watermark.restore(about["watermark"])
        self._inbox = from_arrays(arrays, "ahead.")
        self._early = {outcome.digest: outcome for outcome in from_arrays(arrays, "early.")}
        self.delays.counts = arrays["delays"].astype(np.int64)
        keys: list[npt.NDArray[np.uint64]] = []
        named: list[npt.NDArray[np.int64]] = []
        for segment, columns, fates in self._store.segments():
            kinds = fates & KIND
            self._latest[segment] = int(columns.times.max())
            held = np.flatnonzero((columns.times + 2 * self._wait >= self._clock) & REMEMBERED[kinds])
            keys.append(columns.low[held])
            named.append(held + segment * ROWS)
            if len(keys) == AT_ONCE:
                self._index.insert(np.concatenate(keys), np.concatenate(named))
                keys, named = [], []
            for at in np.flatnonzero(kinds == AHEAD).tolist():
                digest = HALVES.pack(int(columns.low[at]), int(columns.high[at]))
                place = int(columns.times[at]), int(columns.partitions[at]), int(columns.offsets[at])
                self._ahead.append(Ahead(*place, digest, segment * ROWS + at))
            unsettled = kinds <= CONTRADICTED
            if unsettled.any():
                self._unsettled.append((int(columns.times[unsettled].min()), segment))
        if keys:
            self._index.insert(np.concatenate(keys), np.concatenate(named))
        heapq.heapify(self._ahead)
        heapq.heapify(self._unsettled)
        self._index.forget_below(self._store.first_handle)

    def _step(self, watermark: int) -> list[Event] | None:
        until, segments = self._next_stop(watermark)
        if until <= self._clock and not segments and not self._pending(until):
            return None
        events: list[Event] = []
        self._go_through(until, events)
        self._give_up_early(until)
        self._clock = until
        for segment in segments:
            self._expire(segment, until, events)
        events.sort()
        self._forget()
        return events

    def _pending(self, until: int) -> bool:
        ahead, inbox = self._ahead, self._inbox
        return bool((ahead and ahead[0].time < until) or (inbox and inbox[0].time < until))

    def _next_stop(self, watermark: int) -> tuple[int, list[int]]:
        """A time to go to, up to the watermark, and the segments in which something may expire before it."""
        heap, wait = self._unsettled, self._wait
        segments: dict[int, None] = {}
        time = BEGINNING
        while heap and heap[0][0] + wait < watermark:
            if len(segments) >= SEGMENTS_AT_ONCE and heap[0][0] > time:
                break
            time, segment = heapq.heappop(heap)
            segments[segment] = None
        until = max(min(watermark, heap[0][0] + wait) if heap else watermark, self._clock)
        while heap and heap[0][0] + wait < until:
            segments[heapq.heappop(heap)[1]] = None
        return until, list(segments)

    def _go_through(self, until: int, events: list[Event]) -> None:
        """All events before `until`, in order."""
        messages, outcomes = taken_before(self._ahead, until), taken_before(self._inbox, until)
        digests = dict.fromkeys([*(m.digest for m in messages), *(o.digest for o in outcomes)])
        known = self._look_up(list(digests))
        new: dict[bytes, _Known] = {}
        at = 0
        for outcome in outcomes:
            while at < len(messages) and messages[at].time <= outcome.time:
                self._arrive(messages[at], known, new, events)
                at += 1
            self._decide(outcome, known.get(outcome.digest), events)
        for message in messages[at:]:
            self._arrive(message, known, new, events)
        if new:
            low, _ = halves_of(list(new))
            self._index.insert(low, np.array([entry.handle for entry in new.values()], np.int64))

    def _look_up(self, digests: list[bytes]) -> dict[bytes, _Known]:
        """The messages of those ids that have one."""
        known: dict[bytes, _Known] = {}
        if not digests:
            return known
        low, high = halves_of(digests)
        left = np.arange(len(digests))
        after = None
        while len(left):
            handles, slots = self._index.find(low[left], after)
            again = []
            for place in np.flatnonzero(handles != ABSENT).tolist():
                at, handle = int(left[place]), int(handles[place])
                row = self._store.row(handle)
                if row.high != high[at]:  # another id with the same first half
                    again.append(place)
                    continue
                fate = self._store.fate(handle)
                known[digests[at]] = _Known(
                    handle, row.time, row.partition, row.offset, fate, int(slots[place])
                )
            left, after = left[again], slots[again]
        return known

    def _arrive(
        self, message: Ahead, known: dict[bytes, _Known], new: dict[bytes, _Known], events: list[Event]
    ) -> None:
        """The event time of a message has come."""
        entry = known.get(message.digest)
        repeated = entry is not None and message.time <= entry.time + 2 * self._wait
        row = message.time, ARRIVED, message.partition, message.offset, message.handle, UNKNOWN
        events.append(Event(*row, repeated, self._store.payload(message.handle)))
        if repeated:
            self._store.settle(message.handle, REPEATED)
            self.counts.repeated_messages += 1
            return
        slot = ABSENT if entry is None else entry.slot
        entry = _Known(message.handle, message.time, message.partition, message.offset, WAITING, slot)
        known[message.digest] = entry
        if slot == ABSENT:
            new[message.digest] = entry
        else:
            self._index.replace(slot, entry.handle)
        self._settle(entry, WAITING)
        early = self._early.get(message.digest)
        if early is not None and message.time - early.time <= self._wait:
            del self._early[message.digest]
            self._take(entry, early, events)

    def _decide(self, outcome: Outcome, entry: _Known | None, events: list[Event]) -> None:
        """The event time of an outcome has come."""
        if entry is None or outcome.time > entry.time + 2 * self._wait:
            if self._allow_early:
                self._hold_early(outcome)
            else:
                self.counts.orphans += 1
        elif outcome.time < entry.time and not (
            self._allow_early and entry.time - outcome.time <= self._wait
        ):  # out of order: it would have met no message in time
            self.counts.orphans += 1
        elif entry.fate & KIND == WAITING and not entry.fate & CAME_LATE:
            if outcome.time <= entry.time + self._wait:
                self._take(entry, outcome, events)
            else:
                self._come_late(entry, outcome)
        elif entry.fate & KIND == EXPIRED and not entry.fate & CAME_LATE:
            self._come_late(entry, outcome)
        else:
            self._come_again(entry, outcome)

    def _take(self, entry: _Known, outcome: Outcome, events: list[Event]) -> None:
        """The first outcome of a message that waits."""
        early = outcome.time < entry.time
        self.counts.early += early
        if outcome.label == DIFFERING:
            self._settle(entry, CONTRADICTED)
            return
        if outcome.label:
            self.delays.add(max(0, outcome.time - entry.time))
        if self._on_conflict != "first":
            self._settle(entry, HELD + POSITIVE * outcome.label)
            return
        self._settle(entry, JOINED + POSITIVE * outcome.label)
        self.counts.joined += 1
        due = max(entry.time, outcome.time)
        row = due, RELEASED, entry.partition, entry.offset, entry.handle, outcome.label
        events.append(Event(*row, False, self._store.payload(entry.handle)))

    def _come_late(self, entry: _Known, outcome: Outcome) -> None:
        self.counts.late += 1
        if outcome.label:
            self.delays.add(outcome.time - entry.time)
        self._settle(entry, entry.fate + CAME_LATE + POSITIVE * outcome.label)

    def _come_again(self, entry: _Known, outcome: Outcome) -> None:
        """A further outcome of a message."""
        if outcome.label == (entry.fate & POSITIVE) // POSITIVE:
            self.counts.repeated += 1
            return
        self.counts.conflicting += 1
        if entry.fate & KIND == HELD and outcome.time <= entry.time + self._wait:
            if self._on_conflict == "last":
                self._settle(entry, HELD + POSITIVE * outcome.label)
            else:
                self._settle(entry, CONTRADICTED + (entry.fate & POSITIVE))

    def _hold_early(self, outcome: Outcome) -> None:
        """Keeps an outcome whose message may still come."""
        held = self._early.get(outcome.digest)
        if held is None or held.time + self._wait < outcome.time:
            self.counts.orphans += held is not None
            self._early[outcome.digest] = outcome
        elif held.label == outcome.label:
            self.counts.repeated += 1
        else:
            self.counts.conflicting += 1
            if self._on_conflict == "last":
                self._early[outcome.digest] = outcome
            elif self._on_conflict == "reject":
                self._early[outcome.digest] = held._replace(label=DIFFERING)

    def _give_up_early(self, until: int) -> None:
        gone = [digest for digest, outcome in self._early.items() if outcome.time + self._wait < until]
        for digest in gone:
            del self._early[digest]
        self.counts.orphans += len(gone)

    def _settle(self, entry: _Known, fate: int) -> None:
        entry.fate = int(fate)
        self._store.settle(entry.handle, entry.fate)

    def _expire(self, segment: int, until: int, events: list[Event]) -> None:
        """Ends the waiting of the rows of a segment whose time is over before `until`."""
        columns = self._store.columns(segment)
        fates = self._store.fates_of(segment)[: len(columns)].copy()
        kinds = fates & KIND
        over = (kinds >= WAITING) & (kinds <= CONTRADICTED) & (columns.times + self._wait < until)
        left = (kinds <= CONTRADICTED) & ~over
        if left.any():
            heapq.heappush(self._unsettled, (int(columns.times[left].min()), segment))
        if segment == self._open[0]:
            self._open = (ABSENT, 0)
        rows = np.flatnonzero(over)
        self._store.settle_all(segment, rows, fates[rows] - kinds[rows] + ENDED[kinds[rows]])
        tally = np.bincount(kinds[rows], minlength=CONTRADICTED + 1).tolist()
        self.counts.expired += tally[WAITING]
        self.counts.joined += tally[HELD]
        self.counts.discarded += tally[CONTRADICTED]
        rows = rows[(kinds[rows] == HELD) | ((kinds[rows] == WAITING) & self._learn_absent)]
        expired = kinds[rows] == WAITING
        labels = np.where(expired, 0, (fates[rows] & POSITIVE) // POSITIVE)
        events.extend(
            map(
                Event,
                (columns.times[rows] + self._wait).tolist(),
                repeat(RELEASED),
                columns.partitions[rows].tolist(),
                columns.offsets[rows].tolist(),
                (rows + segment * ROWS).tolist(),
                labels.tolist(),
                expired.tolist(),
                self._store.payloads(segment, rows.tolist()),
            )
        )

    def _forget(self) -> None:
        """Lets go of segments whose rows are all decided, and of those that nobody may ask for any more."""
        first, sealed = self._store.first, self._store.next_handle // ROWS
        while self._settled < sealed and self._latest[self._settled] + self._wait < self._clock:
            self._settled += 1
        while first < self._settled and self._latest[first] + 2 * self._wait < self._clock:
            del self._latest[first]
            first += 1
        self._store.forget(first, self._settled)
        self._index.forget_below(self._store.first_handle)
