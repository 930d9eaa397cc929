"""Predictions of many lanes in, progressive figures of each by time block, bin and slice out."""

from __future__ import annotations

from collections.abc import Callable, Sequence

import numpy as np
import numpy.typing as npt

from stream.errors import BadData
from stream.metrics.lane_tally import LANE_BINS, tally_lanes
from stream.metrics.progress import Progress
from stream.metrics.slices import MAX_SLICES
from stream.metrics.summary import WindowRow

__all__ = ["SWEPT_EVERY", "LaneProgress"]

Floats = npt.NDArray[np.float64]
SWEPT_EVERY = 4
"""Blocks after which non-zeros are counted: it takes reading all weights of all lanes."""


class LaneProgress(Progress):
    """Progressive metrics of K lanes; its windows are the time blocks that end after `ends` messages each.

    `last_from`: the block that the last part begins with. `loss_window`: messages after which a replay closes
    its windows; sums go by the same windows, so that the log loss has the bits of a replay's.
    """

    def __init__(
        self, lanes: int, ends: Sequence[int], last_from: int, loss_window: int, sliced: bool = False
    ) -> None:
        super().__init__(loss_window, sliced)
        self.ends, self.last_from = list(ends), last_from
        blocks, slices = len(self.ends), MAX_SLICES + 1 if sliced else 1
        self._through = self._window_at = self.block = 0
        self._closed, self._open = np.zeros(lanes), np.zeros(lanes)
        self.block_loss, self.block_totals = np.zeros((blocks, lanes)), np.zeros((blocks, 4))
        self.bins = np.zeros((2, lanes, LANE_BINS, 3))
        self.slice_loss, self.slice_totals = np.zeros((slices, lanes)), np.zeros((slices, 4))

    @property
    def messages(self) -> int:
        """Messages so far, rejected ones too."""
        return self._through

    @property
    def window_left(self) -> int:
        """Messages until a block or a window of a replay ends; at 0 it must be closed."""
        if self.block == len(self.ends):
            return 1
        return min(self.ends[self.block], self._window_at + self.window) - self._through

    @property
    def loss(self) -> Floats:
        """Sum of weight * log loss over the run, nats: float64[K]."""
        return np.asarray(self._closed + self._open)

    def observe(
        self,
        margins: Floats,
        labels: npt.NDArray[np.int8],
        weights: Floats,
        slice_codes: npt.NDArray[np.int64] | None = None,
        *,
        rejected: int = 0,
    ) -> None:
        """As `Progress.observe`, with margins float64[m, K]. Raises BadData beyond the last block."""
        if self.block == len(self.ends):
            raise BadData(
                f"the log had {self.ends[-1]:,} messages when they were counted and has more now: tune over "
                "files that nobody writes to"
            )
        codes = np.zeros(0, np.int64) if slice_codes is None else slice_codes
        last = int(self.block >= self.last_from)
        totals = self.block_totals[self.block]
        totals[0] += rejected
        tally_lanes(
            margins, labels, weights, codes, last, self._open, self.block_loss[self.block], totals, self.bins,
            self.slice_loss, self.slice_totals,
        )  # fmt: skip
        self._through += len(margins) + rejected

    def close_window(self, nnz: Callable[[], int], live: int) -> WindowRow:
        """Closes what ends here. `nnz` is asked at the end of each SWEPT_EVERY-th block, else it is 0."""
        nonzeros = 0
        if self._through == self._window_at + self.window:
            self._window_at = self._through
            self._closed += self._open
            self._open[:] = 0.0
        if self._through == self.ends[self.block]:
            self.block += 1
            nonzeros = nnz() if self.block % SWEPT_EVERY == 0 else 0
        return WindowRow(self._through, self.summary(), nonzeros, live)
