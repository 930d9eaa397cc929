"""A log in; how long it is, and how strong a penalty makes all weights zero, out."""

from __future__ import annotations

import hashlib
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt

from stream.decoding import Decoder
from stream.durable import os_errors
from stream.errors import BadSettings
from stream.learners.gradient_sums import GradientSums
from stream.message import Block
from stream.metrics import Progress, WindowRow
from stream.rejects import RejectLog
from stream.runs.steps import BLOCK, Steps
from stream.runs.table_model import TableModel
from stream.settings import Settings
from stream.sources import LogSource
from stream.sources.files import STANDARD_INPUT, matching_files
from stream.tables import NamePile

__all__ = ["LogFacts", "count", "digest_of_log", "find_strongest"]

OnProgress = Callable[[float | None, int], None]
COUNTED_AT_ONCE = 1 << 14


@dataclass(frozen=True, slots=True)
class LogFacts:
    """A log, read once: its messages, times of the first and the last (None where unknown).

    `reached_after`: where a time was asked for, how many messages came before the first of that time or
    later; None where none came.
    Where gradients were taken: the strongest useful `l1_per_example`, the sum of weights, and how many
    coordinates there are.
    """

    messages: int
    first_time_ms: int | None
    last_time_ms: int | None
    strongest: float | None = None
    weight: float | None = None
    coordinates: int | None = None
    reached_after: int | None = None


def digest_of_log(settings: Settings) -> tuple[list[str], str]:
    """Names of the log's files, and a sha256 over the sizes and bytes of all of them, in order."""
    files = matching_files(settings.feed.paths, settings.folder)
    if files[0].name == STANDARD_INPUT:
        raise BadSettings("tune reads a log more than once, which standard input cannot be: give files")
    digest = hashlib.sha256()
    for file in files:
        content = hashlib.sha256()
        with os_errors("read", file.path), file.path.open("rb") as opened:
            while piece := opened.read(1 << 20):
                content.update(piece)
        digest.update(content.digest())
    return [file.name for file in files], digest.hexdigest()


def count(settings: Settings, progress: OnProgress, until_ms: int | None = None) -> LogFacts:
    """Counts the messages without decoding them, but for their times until one is `until_ms` or later."""
    messages, times = 0, _Times(settings, until_ms)
    source = _Watched(settings, times)
    try:
        while len(block := source.read(COUNTED_AT_ONCE)):
            messages += len(block)
            progress(source.fraction_read(), messages)
    finally:
        source.close()
    return LogFacts(messages, *times.ends(), reached_after=times.reached_after)


def find_strongest(settings: Settings, progress: OnProgress, until_ms: int | None = None) -> LogFacts:
    """Takes the gradients of all tokens of the log at the best constant model.

    Every token counts, whatever `state` bounds: the strength is that of a batch fit of the whole log.
    """
    free = settings.state.model_copy(update={"admit_after": 1, "idle_after": None, "max_live": None})
    settings = settings.model_copy(update={"state": free})
    model, times = _SumsModel(settings), _Times(settings, until_ms)
    rejects = RejectLog(Path(), settings.message, action="skip")
    run = Steps(settings, model, _Nothing(settings.metrics.window), rejects)
    source = _Watched(settings, times)
    try:
        while run.step(source, BLOCK):
            progress(source.fraction_read(), run.messages)
    finally:
        source.close()
    return LogFacts(
        run.messages, *times.ends(), model.strongest, model.sums.weight, model.live, times.reached_after
    )


class _SumsModel(TableModel):
    """Sums over a table: nothing is ever removed."""

    def __init__(self, settings: Settings) -> None:
        self.sums = GradientSums()
        super().__init__(settings, self.sums, NamePile())

    @property
    def strongest(self) -> float:
        return self.sums.largest(self._table.cells)

    def nnz(self) -> int:
        return 0

    def _is_zero(self, begin: int, end: int) -> npt.NDArray[np.bool_]:
        return np.ones(end - begin, np.bool_)


class _Nothing(Progress):
    """Progress of a run whose predictions mean nothing."""

    @property
    def window_left(self) -> int:
        return self.window

    def observe(self, *arrays: Any, rejected: int = 0) -> None:
        """Takes nothing down."""

    def close_window(self, nnz: Callable[[], int], live: int) -> WindowRow:
        raise AssertionError("no window ends")


class _Times:
    """Times of the first and the last message that blocks showed, in epoch milliseconds.

    `reached_after`: how many messages came before the first whose time is `until_ms` or later, if any.
    """

    def __init__(self, settings: Settings, until_ms: int | None) -> None:
        self._decoder = Decoder(settings, times=True, labels=False) if settings.message.time else None
        self._first: Block | None = None
        self._last: Block | None = None
        self._until_ms = until_ms
        self._messages = 0
        self.reached_after: int | None = None

    def see(self, block: Block) -> None:
        if not len(block):
            return
        self._first, self._last = self._first or block, block
        if self._until_ms is not None and self.reached_after is None:
            late = [row for row, time in self._times(block) if time >= self._until_ms]
            self.reached_after = self._messages + late[0] if late else None
        self._messages += len(block)

    def ends(self) -> tuple[int | None, int | None]:
        first, last = self._times(self._first), self._times(self._last)
        return (first[0][1] if first else None), (last[-1][1] if last else None)

    def _times(self, block: Block | None) -> list[tuple[int, int]]:
        """Rows of a block that have a time, with it."""
        if self._decoder is None or block is None:
            return []
        examples, _ = self._decoder.decode(block)
        found = zip(examples.rows.tolist(), examples.times, strict=True)
        return [(row, time) for row, time in found if time is not None]


class _Watched(LogSource):
    """A log whose blocks are shown to `times`."""

    def __init__(self, settings: Settings, times: _Times) -> None:
        super().__init__(settings.feed.paths, settings.folder, settings.feed.max_line_bytes)
        self._times = times

    def read(self, limit: int) -> Block:
        block = super().read(limit)
        self._times.see(block)
        return block
