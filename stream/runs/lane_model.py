"""Batches in, margins of many settings of the learner out: one table and one set of names for all of them."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
import numpy.typing as npt

from stream.batch import Batch
from stream.coordinate import tally_of
from stream.learners.lanes import Lanes
from stream.runs.table_model import Floats, Int64s, TableModel
from stream.settings import Settings
from stream.settings.models import Learner as LearnerSettings
from stream.tables import NamePile

__all__ = ["LaneModel", "LaneWeights"]


@dataclass(frozen=True, slots=True)
class LaneWeights:
    """Coordinates whose weight is not zero in at least one of K lanes, sorted by address.

    `addresses` uint64[n]; `values` float32[n, K]; `kept` float32[n, K], at the ends of what share of time
    blocks it was not zero; `names`, `messages` as in `Weights`; `intercepts` float64[K].
    """

    addresses: npt.NDArray[np.uint64]
    values: npt.NDArray[np.float32]
    kept: npt.NDArray[np.float32]
    names: tuple[bytes, ...]
    messages: Floats
    intercepts: Floats


class LaneModel(TableModel):
    """A learner for each of `lanes`, over one table: each ends with the bits of a model of its own, as long
    as nothing is removed. What is removed is zero in every lane.

    `frozen`: whether examples are scored only. `block_nnz`: non-zeros of each lane at each call of `nnz`.
    """

    def __init__(self, settings: Settings, lanes: Sequence[LearnerSettings]) -> None:
        self._lanes = Lanes(lanes)
        self._pile = NamePile()
        super().__init__(settings, self._lanes, self._pile)
        self.frozen = False
        self.block_nnz: list[Int64s] = []

    @property
    def lane_bytes(self) -> int:
        """Memory of the lanes, beside the table."""
        return self._lanes.row_bytes

    @property
    def refused(self) -> Int64s:
        """Updates that each lane refused, since a weight would have stopped being finite: int64[K]."""
        return self._lanes.refused

    def predict_then_update(self, batch: Batch) -> Floats:
        """As `TableModel`'s, margins float64[m, K]; nothing is learned while frozen."""
        if not len(batch):
            return np.empty((0, self._lanes.count))
        if self.frozen:
            batch = replace(batch, labels=np.full(len(batch), -1, np.int8))
        return super().predict_then_update(batch)

    def nnz(self) -> int:
        """Non-zero weights of all lanes together; a block ends."""
        found = self._lanes.sweep()
        self.block_nnz.append(found)
        return int(found.sum())

    def weights(self) -> LaneWeights:
        """The weights now."""
        cells = self._table.cells
        slots = np.flatnonzero(self._table.in_use(0, self._table.slots))
        slots = slots[self._lanes.any_on(cells, slots)]
        values = self._lanes.weights(cells, slots).astype(np.float32)
        some = values.any(axis=1)  # one too small for float32 is left out
        slots, values = slots[some], values[some]
        addresses = self._table.addresses_at(slots)
        order = np.argsort(addresses)
        addresses = addresses[order]
        return LaneWeights(
            addresses,
            values[order],
            (self._lanes.kept(cells, slots[order]) / max(len(self.block_nnz), 1)).astype(np.float32),
            self._pile.at(addresses),
            tally_of(self._table.touches(slots[order])),
            self._lanes.intercepts,
        )

    def _is_zero(self, begin: int, end: int) -> npt.NDArray[np.bool_]:
        zero = np.ones(end - begin, np.bool_)
        used = np.flatnonzero(self._table.in_use(begin, end))
        zero[used] = ~self._lanes.weights(self._table.cells, begin + used).any(axis=1)
        return zero

    def _forget(self, slots: Int64s) -> None:
        super()._forget(slots)
        if len(slots):
            self._lanes.close_up(self._table.cells, self._table.occupied()[1])
