"""Settings in; the weights that a learner has after so many messages, learned as `replay` does, out."""

from __future__ import annotations

import time
from collections.abc import Callable, Generator, Iterator, Sequence
from contextlib import closing
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import numpy.typing as npt

from stream.batch import Batch
from stream.metrics import Progress, WindowRow
from stream.rejects import RejectLog
from stream.runs.model import Model
from stream.runs.steps import BLOCK, Steps, is_sliced
from stream.settings import Settings
from stream.sources import LogSource
from stream.weights import Weights

__all__ = ["Followed", "after_epochs", "followed", "warm_up", "window_losses"]

Tell = Callable[[float, str], None]
WARMING = 10_000
"""Messages after which every kernel has been called once; tables have grown by then."""


@dataclass(frozen=True, slots=True)
class Followed:
    """A learner after `messages` of the log: its weights, seconds of whole passes from bytes on, and of them
    those of learning alone, from rows on, as a batch fit counts."""

    messages: int
    weights: Weights
    seconds: float
    learning_seconds: float


class _Timed(Model):
    """A model that knows how long it learned."""

    def __init__(self, settings: Settings) -> None:
        super().__init__(settings)
        self.seconds = 0.0

    def predict_then_update(self, batch: Batch) -> npt.NDArray[np.float64]:
        """As a model does."""
        began = time.perf_counter()
        margins = super().predict_then_update(batch)
        self.seconds += time.perf_counter() - began
        return margins


class _Run:
    """The loop of `replay` over a log, stopped where asked, with nothing kept on disk."""

    def __init__(self, settings: Settings, tell: Tell, messages: int) -> None:
        self._settings, self._tell, self._whole = settings, tell, messages
        self.model = _Timed(settings)
        window = settings.metrics.window
        rejects = RejectLog(Path(), settings.message, action="skip", window=window)
        self._steps = Steps(settings, self.model, Progress(window, is_sliced(settings)), rejects)
        self.windows: list[WindowRow] = []
        self._seconds = 0.0

    def follow(self, cuts: Sequence[int], epoch: int = 0) -> Iterator[Followed]:
        """Reads the log from its beginning to the last of `cuts`, and stops at each."""
        settings, self._steps.epoch, begun = self._settings, epoch, self._steps.messages
        stage = f"learning, {settings.learner.method}"
        if epoch:
            self.model.next_pass()
        log = LogSource(settings.feed.paths, settings.folder, settings.feed.max_line_bytes)
        with closing(log) as source:
            for cut in cuts:
                began = time.perf_counter()
                while (left := begun + cut - self._steps.messages) > 0:
                    done = self._steps.step(source, min(BLOCK, left))
                    if done is False:
                        break
                    if isinstance(done, WindowRow):
                        self.windows.append(done)
                    self._tell(self._steps.messages / self._whole, stage)
                self._seconds += time.perf_counter() - began
                yield Followed(cut, self.model.weights(), self._seconds, self.model.seconds)


def followed(settings: Settings, cuts: Sequence[int], tell: Tell) -> Generator[Followed, None, None]:
    """One pass, looked at after each of `cuts`, which ascend."""
    yield from _Run(settings, tell, cuts[-1]).follow(cuts)


def after_epochs(settings: Settings, messages: int, epochs: int, tell: Tell) -> Followed:
    """So many passes over the first `messages`."""
    run = _Run(settings, tell, epochs * messages)
    return [found for epoch in range(epochs) for found in run.follow([messages], epoch)][-1]


def warm_up(settings: Settings) -> None:
    """Loads, or compiles, the kernels, so that no pass is timed with that."""
    for _ in followed(settings, [WARMING], lambda share, text: None):
        pass


def window_losses(settings: Settings, messages: int, window: int, tell: Tell) -> list[float | None]:
    """Progressive log loss of one pass in each window of so many messages: of predictions from before each
    update, as `replay` prints them."""
    metrics = settings.metrics.model_copy(update={"window": window, "slice_by": None})
    run = _Run(settings.model_copy(update={"metrics": metrics}), tell, messages)
    for _ in run.follow([messages]):
        pass
    return [row.summary.log_loss for row in run.windows]
