"""A log in, as batches, as often as wanted; what models make of its labelled examples out."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np
import numpy.typing as npt

from stream.batch import Batch
from stream.decoding import Decoder
from stream.features import Batcher
from stream.message import Block
from stream.settings import Settings
from stream.sources import LogSource

__all__ = ["Log", "Progress", "Scored"]

BLOCK = 4_096
Floats = npt.NDArray[np.float64]
Progress = Callable[[str, float | None], None]


@dataclass
class Scored:
    """Labelled examples of a log and their margins: labels int8[m], weights and margins float64[m]."""

    _labels: list[npt.NDArray[np.int8]] = field(default_factory=list)
    _weights: list[Floats] = field(default_factory=list)
    _margins: list[Floats] = field(default_factory=list)

    count: int = 0

    def add(self, batch: Batch, margins: Floats) -> None:
        """Takes down the labelled examples of a batch."""
        there = batch.labels >= 0
        self._labels.append(batch.labels[there])
        self._weights.append(batch.weights[there])
        self._margins.append(margins[there])
        self.count += len(self._labels[-1])

    @property
    def labels(self) -> npt.NDArray[np.int8]:
        """int8[m]."""
        return np.concatenate([np.empty(0, np.int8), *self._labels])

    @property
    def weights(self) -> Floats:
        """float64[m]."""
        return np.concatenate([np.empty(0), *self._weights])

    @property
    def margins(self) -> Floats:
        """float64[m]."""
        return np.concatenate([np.empty(0), *self._margins])


class Log:
    """A log as batches, as often as wanted."""

    def __init__(self, settings: Settings, paths: tuple[str, ...], folder: Path) -> None:
        self._settings, self._paths, self._folder = settings, paths, folder
        self.messages = self.rejected = 0

    def batches(self, stage: str, progress: Progress) -> Iterator[Batch]:
        """All batches."""
        decoder, batcher = Decoder(self._settings), Batcher(self._settings)
        source = LogSource(self._paths, self._folder, self._settings.feed.max_line_bytes)
        self.messages = self.rejected = 0
        try:
            while len(block := source.read(BLOCK)):
                yield self._batch(block, decoder, batcher)
                progress(stage, source.fraction_read())
        finally:
            source.close()

    def _batch(self, block: Block, decoder: Decoder, batcher: Batcher) -> Batch:
        examples, _ = decoder.decode(block)
        batch, _ = batcher.batch(examples)
        self.messages += len(block)
        self.rejected += len(block) - len(batch)
        return batch
