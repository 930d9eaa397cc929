"""A table and a moment in; its rows as they were then out, by ascending address, while learning goes on.

Learning waits only while the keys of the rows are copied. From then on whoever changes or removes a row
for the first time leaves it in an undo log before. The writer, on another thread, reads a piece of rows
without regard to who is changing them, then waits for the block being learned and takes the log so far:
what is in it stands, whatever was read; what is not in it has not changed. Rows may move
between two pieces, since the writer finds them by their addresses, not during one.
"""

from __future__ import annotations

import threading
from collections.abc import Callable, Iterator, Mapping
from contextlib import contextmanager
from typing import Any

import numpy as np
import numpy.typing as npt

from stream.coordinate import CELLS, LEAST, NAMED, TOUCH, TOUCH_SHIFT
from stream.tables import probing

__all__ = ["Saving"]

PIECE = 1 << 16
"""Rows read at once, at least: learning waits for so many if it must move rows meanwhile."""
MOST_PIECES = 256
SORTED_AT_ONCE = 1 << 18

Uint64s = npt.NDArray[np.uint64]


class Saving:
    """The rows of one moment. `keep` and `undo` are for who learns, `pieces` and `close` for who writes."""

    dtypes: Mapping[str, np.dtype[Any]] = {
        "addresses": np.dtype(np.uint64),
        "first": np.dtype(np.float64),
        "second": np.dtype(np.float64),
        "touch": np.dtype(np.uint64),
    }

    def __init__(
        self,
        keys: Uint64s,
        secret: Uint64s,
        learned: int,
        gather: Callable[[Uint64s, np.uint64], Uint64s],
        close: Callable[[], None],
    ) -> None:
        """`keys` of all rows after `learned` examples, in any order; `gather` as `probing.gather` does."""
        self.close = close
        self.length = len(keys)
        self._addresses, self._secret = keys, secret
        self._limit = np.uint64(learned) << TOUCH_SHIFT
        self._gather = gather
        self._log = np.empty(0, np.uint64)
        self._between_blocks = threading.Lock()
        self._kept: list[Uint64s] = []

    def keep(self, rows: Uint64s) -> None:
        """Leaves rows that are about to be removed, uint64[k, 4], in the log."""
        with self._between_blocks:
            self._kept.append(rows[rows[:, int(TOUCH)] - LEAST < self._limit])

    @contextmanager
    def undo(self, room: int) -> Iterator[Uint64s]:
        """The log for a block that changes `room` rows at most; see `stream.coordinate`."""
        if len(self._log) < CELLS * (1 + room):
            self._log = np.empty(CELLS * (1 + room), np.uint64)
        self._log[:2] = self._limit, 0
        with self._between_blocks:
            yield self._log
            used = int(self._log[1])
            self._kept.append(self._log[CELLS : CELLS * (1 + used)].reshape(-1, CELLS).copy())

    def pieces(self) -> Iterator[dict[str, npt.NDArray[Any]]]:
        """The columns of consecutive rows, as in a checkpoint; closes at the end. To be asked for once."""
        try:
            probing.unmix_keys(self._addresses, self._secret)
            self._addresses.sort()
            size = max(PIECE, self.length // MOST_PIECES + 1)
            firsts = self._addresses[size::size]
            undone: list[list[Uint64s]] = [[] for _ in range(len(firsts) + 1)]
            for piece, rows in enumerate(undone):
                addresses = self._addresses[piece * size : (piece + 1) * size]
                state = self._gather(addresses, self._limit)
                self._sort_in(undone, firsts, piece)
                for left in rows:
                    state[:, np.searchsorted(addresses, left[:, 0])] = left[:, 1:].T
                rows.clear()
                first, second, touch = state
                touch &= ~NAMED
                yield {
                    "addresses": addresses,
                    "first": first.view(np.float64),
                    "second": second.view(np.float64),
                    "touch": touch,
                }
        finally:
            self.close()

    def _sort_in(self, undone: list[list[Uint64s]], firsts: Uint64s, piece: int) -> None:
        """Takes the log so far and shares its rows out to the pieces from `piece` on."""
        with self._between_blocks:
            kept, self._kept = self._kept, []
        while kept:  # some at a time: all copied at once could be half of the table
            some = [kept.pop()]
            while kept and sum(map(len, some)) < SORTED_AT_ONCE:
                some.append(kept.pop())
            rows = np.concatenate(some)
            addresses = np.ascontiguousarray(rows[:, 0])
            probing.unmix_keys(addresses, self._secret)
            rows[:, 0] = addresses
            order = np.argsort(addresses)
            for part, indices in enumerate(np.split(order, np.searchsorted(addresses[order], firsts))):
                if part >= piece and len(indices):
                    undone[part].append(rows[indices])
