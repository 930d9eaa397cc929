"""The learn kernel against the bare moving of the two floats of each coordinate, in and out of the table."""

from __future__ import annotations

import dataclasses
from collections.abc import Iterator

import numpy as np
import numpy.typing as npt

from stream.batch import Batch
from stream.coordinate import FIRST, SECOND, row_of
from stream.decoding import Decoder
from stream.features import Batcher
from stream.kernel import kernel
from stream.learners import Learner
from stream.settings import Settings
from stream.sources import LogSource
from stream.tables import Table
from tests.bench.feed import learning_settings, log_of
from tests.bench.figures import Figure, Seconds, alternating, best, timed

__all__ = ["learn_kernel"]

BLOCK = 1024


@kernel
def _gather_and_scatter(
    floats: npt.NDArray[np.float64],
    slots: npt.NDArray[np.int64],
    row_ptr: npt.NDArray[np.int64],
    scratch: npt.NDArray[np.float64],
) -> None:
    """Row by row: both floats of each of its coordinates into `scratch`, then back, changed."""
    for example in range(len(row_ptr) - 1):
        begin = np.uint64(row_ptr[example])
        end = np.uint64(row_ptr[example + 1])
        for e in range(begin, end):
            row = row_of(slots[e])
            i = np.uint64(2) * (e - begin)
            scratch[i] = floats[row + FIRST]
            scratch[i + np.uint64(1)] = floats[row + SECOND]
        for e in range(begin, end):
            row = row_of(slots[e])
            i = np.uint64(2) * (e - begin)
            floats[row + FIRST] = scratch[i] + 1.0
            floats[row + SECOND] = scratch[i + np.uint64(1)] + 1.0


class _Stage:
    """A table and learner in the middle of a stream, and the batches that come next with their slots."""

    def __init__(self, settings: Settings, learned_before: int) -> None:
        self.table, self.learner = Table(settings.state), Learner(settings.learner)
        self.batches: list[Batch] = []
        self.slots: list[npt.NDArray[np.int64]] = []
        read = 0
        for batch in _batches(settings):
            if read >= learned_before:
                self.batches.append(_copy(batch))
                continue
            first = 0
            while first < len(batch):
                slots, stopped = self.table.admit(batch, first, len(batch))
                self.learner.predict_then_update(self.table.cells, batch, slots, first, stopped)
                first = stopped
            read += len(batch)
        self._settle()
        self._cells, self._state = self.table.cells.copy(), self.learner.state()
        self._scratch = np.empty(2 * max(int(np.diff(batch.row_ptr).max()) for batch in self.batches))

    def _settle(self) -> None:
        """Every coordinate of the batches gets its row first, so that none moves while they are timed."""
        for batch in self.batches:
            first = 0
            while first < len(batch):
                _, first = self.table.admit(batch, first, len(batch))
        self.slots = [self.table.slots_of(batch.addresses) for batch in self.batches]

    def time_learning(self) -> list[Seconds]:
        """Of each batch in turn, as in the stream."""
        self._rewind()
        return [
            timed(self._learn, batch, slots) for batch, slots in zip(self.batches, self.slots, strict=True)
        ]

    def time_moving(self) -> list[Seconds]:
        """Of each batch in turn."""
        self._rewind()
        return [
            timed(self._move, batch, slots) for batch, slots in zip(self.batches, self.slots, strict=True)
        ]

    def nonzero_share(self) -> float:
        """Of the tokens of the batches, how many have a weight before they are learned."""
        self._rewind()
        weights = self.learner.weights(self.table.cells, 0, self.table.slots)
        return float(np.count_nonzero(weights[np.concatenate(self.slots)]) / sum(map(len, self.slots)))

    def _rewind(self) -> None:
        self.table.cells[:] = self._cells
        self.learner.restore(self._state)

    def _learn(self, batch: Batch, slots: npt.NDArray[np.int64]) -> None:
        self.learner.predict_then_update(self.table.cells, batch, slots, 0, len(batch))

    def _move(self, batch: Batch, slots: npt.NDArray[np.int64]) -> None:
        _gather_and_scatter(self.table.floats, slots, batch.row_ptr, self._scratch)


def _batches(settings: Settings) -> Iterator[Batch]:
    source = LogSource(settings.feed.paths, settings.folder, settings.feed.max_line_bytes)
    decoder, batcher = Decoder(settings), Batcher(settings)
    while len(block := source.read(BLOCK)):
        batch, _ = batcher.batch(decoder.decode(block)[0])
        yield batch
    source.close()


def _copy(batch: Batch) -> Batch:
    """The batcher reuses its arrays."""
    return Batch(*(getattr(batch, part.name).copy() for part in dataclasses.fields(Batch)))


def _summed(passes: list[list[Seconds]]) -> float:
    """The best time of each batch over the passes, added up: short enough not to be interrupted."""
    return sum(best(list(times)).wall for times in zip(*passes, strict=True))


def learn_kernel(messages: int, rounds: int, distinct: int = 1_000_000) -> list[Figure]:
    """Both over the last third of the stream at the same slots, which then lie far apart and out of cache."""
    with log_of(messages, distinct) as folder:
        stage = _Stage(learning_settings(folder), learned_before=messages * 2 // 3)
    share = stage.nonzero_share()
    stage.time_learning(), stage.time_moving()
    ours_s, floor_s = map(_summed, alternating(rounds, stage.time_learning, stage.time_moving))
    tokens = sum(map(len, stage.slots))
    details = {
        "learning, ns a coordinate": ours_s * 1e9 / tokens,
        "moving, ns a coordinate": floor_s * 1e9 / tokens,
        "share of tokens with a weight": share,
        "live": stage.table.live,
    }
    return [
        Figure(
            "time against a bare gather and scatter",
            ours_s / floor_s,
            "times",
            at_most=2,
            details=details,
        )
    ]
