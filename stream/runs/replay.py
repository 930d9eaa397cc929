"""A log in, learned over once in order: checkpoints on the way, a snapshot and metrics out."""

from __future__ import annotations

import resource
import signal
import threading
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from types import FrameType
from typing import Any

from stream.checkpoints import Checkpoints
from stream.errors import BadSettings, CannotCreate
from stream.metrics import Summary, WindowRow
from stream.runs.learning import LearningRun
from stream.settings import Settings
from stream.snapshots import Snapshots
from stream.sources import LogSource
from stream.state_folder import StateFolder

__all__ = ["ReplayResult", "replay"]

OnWindow = Callable[[WindowRow], None]
OnProgress = Callable[[float | None, int], None]


@dataclass(frozen=True, slots=True)
class ReplayResult:
    """What a replay found; `seconds` from opening the log to results, `messages_read` in this run."""

    summary: Summary
    windows: list[WindowRow]
    slices: list[tuple[str, Summary]]
    rejects_by_reason: dict[str, int]
    tokens: int
    nnz: int
    live: int
    learned: int
    epochs: int
    refused_updates: int
    refused_coordinates: int
    seconds: float
    messages_read: int
    peak_rss_bytes: int
    resumed_from: int | None
    checkpoints: int
    snapshot: Path
    memory: dict[str, int]
    interrupted: bool
    warnings: list[str]

    def to_json(self) -> dict[str, Any]:
        """One document; an undefined metric is null."""
        return {
            **self.summary.to_json(),
            "tokens": self.tokens,
            "nnz": self.nnz,
            "live": self.live,
            "learned": self.learned,
            "epochs": self.epochs,
            "seconds": self.seconds,
            "messages_per_s": self.messages_read / self.seconds if self.seconds > 0 else None,
            "peak_rss_bytes": self.peak_rss_bytes,
            "resumed_from": self.resumed_from,
            "checkpoints": self.checkpoints,
            "snapshot": str(self.snapshot),
            "interrupted": self.interrupted,
            "rejects_by_reason": self.rejects_by_reason,
            "refused_updates": self.refused_updates,
            "refused_coordinates": self.refused_coordinates,
            "memory": self.memory,
            "windows": [row.to_json() for row in self.windows],
            "slices": {name: summary.to_json() for name, summary in self.slices},
            "warnings": self.warnings,
        }


def replay(
    settings: Settings,
    folder: Path,
    *,
    resume: bool = False,
    fresh: bool = False,
    epochs: int = 1,
    on_window: OnWindow = lambda row: None,
    progress: OnProgress = lambda fraction, messages: None,
) -> ReplayResult:
    """Learns over the log of `settings.feed`, keeping state in `folder`.

    `resume`: go on from the newest whole checkpoint, if there is one; `fresh`: start anew; without either
    a used state folder is refused. `epochs`: passes over the log (>= 1). `on_window` is given each
    window's row, `progress` the share of the log read (None where unknown) and the messages so far.
    SIGINT and SIGTERM end the run after the block at hand, with a checkpoint and a snapshot; a second
    one ends it at once. Raises what the stages raise; the last checkpoint is then whole.
    """
    began = time.monotonic()
    with StateFolder(folder) as state, _stop_on_signal() as stopping:
        checkpoints = Checkpoints(state.checkpoints, settings.state.keep_checkpoints)
        snapshots = Snapshots(state.snapshots, settings.state.keep_snapshots)
        if state.used() and not (resume or fresh):
            raise CannotCreate(
                f"{folder} holds a state already: go on from it with --resume, start anew with --fresh, "
                "or give another state.folder"
            )
        if fresh:
            state.clear()
            snapshots.retire_after(-1)
        run, warnings, resumed_from = _begin(settings, state, checkpoints)
        pacer = _Pacer(run, settings, checkpoints)
        windows: list[WindowRow] = []

        def keep(row: WindowRow) -> None:
            windows.append(row)
            on_window(row)

        _learn(run, settings, epochs, pacer, keep, progress, stopping)
        pacer.checkpoint()
        weights = run.model.weights()
        snapshot = snapshots.write(run.messages, weights, run.about_snapshot())
        run.rejects.close()
        model, metrics = run.model, run.progress
        if metrics.window_left < metrics.window:
            keep(WindowRow(metrics.messages, metrics.window_summary(), len(weights), model.live))
        return ReplayResult(
            summary=metrics.summary(),
            windows=windows,
            slices=metrics.slice_summaries(),
            rejects_by_reason=dict(run.rejects.by_reason),
            tokens=run.tokens,
            nnz=len(weights),
            live=model.live,
            learned=model.learned,
            epochs=run.epoch + 1,
            refused_updates=model.refused_updates,
            refused_coordinates=model.refused_coordinates,
            seconds=time.monotonic() - began,
            messages_read=run.messages - (resumed_from or 0),
            peak_rss_bytes=1024 * resource.getrusage(resource.RUSAGE_SELF).ru_maxrss,
            resumed_from=resumed_from,
            checkpoints=pacer.written,
            snapshot=snapshot,
            memory=model.memory(),
            interrupted=bool(stopping),
            warnings=warnings,
        )


class _Pacer:
    """Writes a checkpoint whenever the messages reach a multiple of `checkpoint_every`, and at the end."""

    def __init__(self, run: LearningRun, settings: Settings, checkpoints: Checkpoints) -> None:
        self._run = run
        self._every = settings.state.checkpoint_every
        self._checkpoints = checkpoints
        self._saved_at = run.messages if run.position is not None else -1
        self.written = 0

    def left(self) -> int:
        """Messages until the next checkpoint is due."""
        return self._every - self._run.messages % self._every

    def checkpoint_if_due(self) -> None:
        if self._run.messages % self._every == 0:
            self.checkpoint()

    def checkpoint(self) -> None:
        """Rejects first, then the checkpoint that counts them; nothing when it would say the same again."""
        run = self._run
        if run.messages == self._saved_at:
            return
        run.rejects.sync()
        self._checkpoints.write(run.messages, run.state(), run.about())
        self._saved_at = run.messages
        self.written += 1


def _begin(
    settings: Settings, state: StateFolder, checkpoints: Checkpoints
) -> tuple[LearningRun, list[str], int | None]:
    """A run, gone on with from the newest checkpoint where there is one; warnings; messages it had then."""
    saved = checkpoints.newest()
    if saved is None:
        return LearningRun(settings, state.rejects), [], None
    run = LearningRun(settings, state.rejects, saved.about)
    run.restore(saved.arrays)
    return run, list(saved.moved_aside), run.messages


def _learn(
    run: LearningRun,
    settings: Settings,
    epochs: int,
    pacer: _Pacer,
    on_window: OnWindow,
    progress: OnProgress,
    stopping: list[int],
) -> None:
    """Runs to the end of the last epoch, or until a signal came."""
    if run.epoch >= epochs:
        raise BadSettings(
            f"the checkpoint is in epoch {run.epoch + 1}, beyond --epochs {epochs}: "
            f"give at least {run.epoch + 1}"
        )
    while not stopping:
        source = LogSource(settings.feed.paths, settings.folder, settings.feed.max_line_bytes)
        try:
            if run.position is not None:
                source.seek(dict(run.position))
            while not stopping:
                done = run.step(source, pacer.left())
                if done is False:
                    break
                pacer.checkpoint_if_due()
                if isinstance(done, WindowRow):
                    on_window(done)
                fraction = source.fraction_read()
                progress(None if fraction is None else (run.epoch + fraction) / epochs, run.messages)
        finally:
            source.close()
        if stopping or run.epoch + 1 == epochs:
            return
        run.next_epoch()


@contextmanager
def _stop_on_signal() -> Iterator[list[int]]:
    """A list that holds the signal once SIGINT or SIGTERM came; a second one acts as it did before."""
    came: list[int] = []
    signals = (signal.SIGINT, signal.SIGTERM)
    before = {number: signal.getsignal(number) for number in signals}

    def as_before() -> None:
        for number, handler in before.items():
            signal.signal(number, handler)

    def note(number: int, frame: FrameType | None) -> None:
        came.append(number)
        as_before()

    if threading.current_thread() is not threading.main_thread():  # nobody could tell it
        yield came
        return
    for number in signals:
        signal.signal(number, note)
    try:
        yield came
    finally:
        as_before()
