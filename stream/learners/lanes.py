"""Many settings of one method: a batch and the slots of its entries in, a margin for each setting out."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from stream.batch import Batch
from stream.coordinate import CELLS, FIRST, NO_UNDO
from stream.errors import CannotCreate
from stream.learners import ftrl_lanes, truncated_gradient_lanes
from stream.learners.eight import LANES
from stream.learners.layout import REFUSED
from stream.memory import reserve
from stream.settings.models import Learner as LearnerSettings

__all__ = ["Lanes", "lane_bytes"]

MOST_ROWS = 1 << 27
SCRATCH = 10
CLOSED_AT_ONCE = 1 << 14
Floats = npt.NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class _Method:
    learn: Callable[..., int]
    weights: Callable[..., None]
    intercepts: Callable[..., None]
    sweep: Callable[..., None]


METHODS = {
    "ftrl": _Method(
        ftrl_lanes.ftrl_lanes_learn,
        ftrl_lanes.ftrl_lane_weights,
        ftrl_lanes.ftrl_lane_intercepts,
        ftrl_lanes.ftrl_lane_sweep,
    ),
    "truncated-gradient": _Method(
        truncated_gradient_lanes.truncated_lanes_learn,
        truncated_gradient_lanes.truncated_lane_weights,
        truncated_gradient_lanes.truncated_lane_intercepts,
        truncated_gradient_lanes.truncated_lane_sweep,
    ),
}


def lane_bytes(lanes: int) -> int:
    """Memory of one coordinate in so many lanes, beside its row in the table."""
    return (16 + 1) * _padded(lanes)


def _padded(lanes: int) -> int:
    return -(-lanes // LANES) * LANES


class Lanes:
    """One learner for each of the settings, which share method, coordinates and sightings.

    Each ends with the bits of a `Learner` of its own that saw the same batches and slots. `settings`: at
    least one, all of the same method. Kept here are the lane rows, whose numbers stand in the table's rows.
    """

    def __init__(self, settings: Sequence[LearnerSettings]) -> None:
        self.count = len(settings)
        filled = [*settings, *[settings[-1]] * (_padded(self.count) - self.count)]
        rows = [
            (s.learning_rate, s.damping, s.l1, s.l1_per_example, s.l2, s.horizon or np.inf) for s in filled
        ]
        self._options = np.ascontiguousarray(np.array(rows, np.float64).T)
        self._method = METHODS[settings[0].method]
        self._lanes = len(filled)
        self._sums = np.zeros((3, self._lanes))
        self._counts = np.zeros((2, self._lanes), np.int64)
        self._used = np.array([1, 0], np.int64)  # lane row 0 stays zero
        self._rows = reserve(2 * self._lanes * MOST_ROWS, huge=True).view(np.float64)
        self._kept = reserve(self._lanes * MOST_ROWS // 8).view(np.uint8)
        self._margins = np.empty((0, self._lanes))
        self._scratch, self._places, self._masks = np.empty(0), np.empty(0, np.uint64), np.empty(0, np.uint64)
        self._named = np.empty(0, np.int64)

    @property
    def learned(self) -> int:
        """Labelled examples learned so far."""
        return int(self._used[1])

    @property
    def refused(self) -> npt.NDArray[np.int64]:
        """Updates that each lane refused: int64[lanes]."""
        return self._counts[REFUSED, : self.count].copy()

    @property
    def intercepts(self) -> Floats:
        """The unpenalised constant of each lane: float64[lanes]."""
        out = np.empty(self._lanes)
        self._method.intercepts(self._sums, self._options, out)
        return out[: self.count]

    @property
    def row_bytes(self) -> int:
        """Memory of the lane rows in use."""
        return int(self._used[0]) * lane_bytes(self._lanes)

    def predict_then_update(
        self,
        cells: npt.NDArray[np.uint64],
        batch: Batch,
        slots: npt.NDArray[np.int64],
        first: int,
        last: int,
        undo: npt.NDArray[np.uint64] = NO_UNDO,
    ) -> tuple[Floats, npt.NDArray[np.int64]]:
        """As `Learner.predict_then_update`; margins float64[m, lanes]. No checkpoint is written of lanes.

        Raises CannotCreate when no more coordinates fit the reserved addresses.
        """
        self._make_room(batch, first, last)
        events = self._method.learn(
            cells,
            self._rows,
            self._used,
            slots,
            batch.row_ptr,
            batch.values,
            batch.labels,
            batch.weights,
            first,
            last,
            self._sums,
            self._counts,
            self._options,
            self._scratch,
            self._places,
            self._masks,
            self._margins,
            self._named,
        )
        return self._margins[:, : self.count], self._named[:events]

    def sweep(self) -> npt.NDArray[np.int64]:
        """Non-zero weights of each lane now, int64[lanes]; each counts as kept once more (`kept`)."""
        return self._sweep(self._kept)[0]

    def any_on(self, cells: npt.NDArray[np.uint64], slots: npt.NDArray[np.int64]) -> npt.NDArray[np.bool_]:
        """Whether any weight of the rows in the given slots is not zero now, bool[k]."""
        rows = cells[CELLS * slots + int(FIRST)].astype(np.int64)
        forgotten = np.zeros(int(self._used[0]) * self._lanes, np.uint8)
        return np.asarray(self._sweep(forgotten)[1][rows])

    def _sweep(self, kept: npt.NDArray[np.uint8]) -> tuple[npt.NDArray[np.int64], npt.NDArray[np.bool_]]:
        nonzeros, used = np.zeros(self._lanes, np.int64), int(self._used[0])
        some = np.zeros(used, np.uint8)
        self._method.sweep(self._rows, 1, used, self._sums, self._options, nonzeros, kept, some)
        return nonzeros[: self.count], some.view(np.bool_)

    def kept(self, cells: npt.NDArray[np.uint64], slots: npt.NDArray[np.int64]) -> npt.NDArray[np.uint8]:
        """In how many sweeps (modulo 256) each weight was not zero, uint8[k, lanes]."""
        rows = cells[CELLS * slots + int(FIRST)].astype(np.int64)
        places = rows[:, None] * self._lanes + np.arange(self.count)
        return np.asarray(self._kept[places])

    def close_up(self, cells: npt.NDArray[np.uint64], slots: npt.NDArray[np.int64]) -> None:
        """Gives up the lane rows of all table rows but those in the given slots."""
        places = CELLS * slots + int(FIRST)
        rows = cells[places].astype(np.int64)
        order = np.argsort(rows)
        places, rows = places[order], rows[order]
        places, rows = places[rows > 0], rows[rows > 0]
        size, left = 2 * self._lanes, 1 + len(rows)
        for first in range(0, len(rows), CLOSED_AT_ONCE):  # ascending: none is written before it is read
            some = rows[first : first + CLOSED_AT_ONCE]
            at = slice(1 + first, 1 + first + len(some))
            for array, width in ((self._rows, size), (self._kept, self._lanes)):
                table = array[: (int(self._used[0])) * width].reshape(-1, width)
                table[at] = table[some]
        cells[places] = np.arange(1, left, dtype=np.uint64)
        self._rows[left * size : int(self._used[0]) * size] = 0.0
        self._kept[left * self._lanes : int(self._used[0]) * self._lanes] = 0
        self._used[0] = left

    def weights(self, cells: npt.NDArray[np.uint64], slots: npt.NDArray[np.int64]) -> Floats:
        """Weights now of the rows in the given slots, float64[k, lanes]."""
        rows = cells[CELLS * slots + int(FIRST)].astype(np.int64)
        out = np.empty((len(slots), self._lanes))
        self._method.weights(self._rows, rows, self._sums, self._options, out)
        return out[:, : self.count]

    def _make_room(self, batch: Batch, first: int, last: int) -> None:
        longest = int(np.max(np.diff(batch.row_ptr), initial=1))
        if len(self._places) < longest:
            self._scratch = np.zeros((SCRATCH + 2 * longest) * self._lanes)
            self._places, self._masks = np.zeros(longest, np.uint64), np.zeros(longest, np.uint64)
        if len(self._margins) < len(batch):
            self._margins = np.empty((len(batch), self._lanes))
        if len(self._named) < len(batch.addresses):
            self._named = np.empty(len(batch.addresses), np.int64)
        entries = int(batch.row_ptr[last] - batch.row_ptr[first])
        if (int(self._used[0]) + entries) * 2 * self._lanes > len(self._rows):
            raise CannotCreate(
                f"{int(self._used[0]):,} coordinates in {self.count} lanes fill the reserved addresses; "
                "tune fewer lanes at once (a smaller --memory)"
            )
