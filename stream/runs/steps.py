"""The loop of every run that learns: blocks of a source in, a model, metrics and rejects brought up to date.

Order of events for a block: decode, batch, judge rejects, predict then update, sweep, metrics. Blocks are
cut so that windows and checkpoints fall between them.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from typing import Any, Generic, TypeVar

import numpy as np
import numpy.typing as npt

from stream.decoding import Decoder
from stream.features import Batcher
from stream.message import Block, Examples, Reject, Source
from stream.metrics import Progress, WindowRow
from stream.rejects import RejectLog
from stream.runs.presence import Presence
from stream.runs.table_model import TableModel
from stream.settings import Settings

__all__ = ["BLOCK", "OnScored", "Steps", "is_sliced"]

BLOCK = 1024
"""Messages in a block at most: enough to spread the cost of a call, few enough to stay in the cache."""

OnScored = Callable[[Block, npt.NDArray[np.int64], npt.NDArray[np.float64]], None]
M = TypeVar("M", bound=TableModel)


class Steps(Generic[M]):
    """A model of any kind, what is counted about it, and the step that moves both on by one block.

    `messages`: read over all epochs, rejected ones too. Metrics and rejects count the first epoch only.
    `on_scored` is given each block with the rows that have a margin (int64[m]) and those margins, from before
    their update.
    """

    def __init__(
        self,
        settings: Settings,
        model: M,
        progress: Progress,
        rejects: RejectLog,
        on_scored: OnScored | None = None,
    ) -> None:
        self._settings = settings
        self._on_scored = on_scored
        self._decoder = Decoder(settings)
        self._batcher = Batcher(settings)
        self._slice_path = _slice_path(settings)
        self.presence = Presence(settings)
        self.model, self.progress, self.rejects = model, progress, rejects
        self.messages = self.tokens = self.epoch = 0
        self.position: Mapping[str, Any] | None = None

    def step(self, source: Source, limit: int) -> WindowRow | bool:
        """Reads and learns one block of at most `limit` messages.

        Returns False at the end of the source, the window's row when one was filled, else True. Raises
        BadData when too many messages are rejected; nothing of that block has then been learned.
        """
        first_epoch = self.epoch == 0
        most = min(limit, BLOCK)
        block = source.read(min(most, self.progress.window_left) if first_epoch else most)
        if not len(block):
            return False
        examples, rejects = self._decoder.decode(block)
        self.presence.observe(examples)
        batch, over = self._batcher.batch(examples)
        if first_epoch:
            self.rejects.add(block, rejects + over, self.messages)
        margins = self.model.predict_then_update(batch)
        if self._on_scored is not None:
            self._on_scored(block, _without(examples.rows, over), margins)
        self.messages += len(block)
        self.tokens += len(batch.addresses)
        self.position = source.position()
        if first_epoch:
            codes = self._slice_codes(examples, over)
            self.progress.observe(
                margins, batch.labels, batch.weights, codes, rejected=len(block) - len(batch)
            )
            if self.progress.window_left == 0:
                return self.progress.close_window(self.model.nnz, self.model.live)
        return True

    def _slice_codes(self, examples: Examples, over: list[Reject]) -> npt.NDArray[np.int64] | None:
        if self._slice_path is None:
            return None
        values = examples.columns[self._slice_path]
        if over:
            gone = {reject.row for reject in over}
            values = [
                value for value, row in zip(values, examples.rows.tolist(), strict=True) if row not in gone
            ]
        return self.progress.slices.codes(values)


def is_sliced(settings: Settings) -> bool:
    """Whether metrics are wanted by slice."""
    return _slice_path(settings) is not None


def _without(rows: npt.NDArray[np.int64], over: list[Reject]) -> npt.NDArray[np.int64]:
    return rows[~np.isin(rows, [reject.row for reject in over])] if over else rows


def _slice_path(settings: Settings) -> str | None:
    by = settings.metrics.slice_by
    return next((field.path for field in settings.fields if field.name == by), None)
