"""A log in, learned over once in order: checkpoints on the way, a snapshot and metrics out."""

from __future__ import annotations

import time
from collections.abc import Callable
from pathlib import Path

from stream.checkpoints import Checkpoints
from stream.errors import BadSettings
from stream.metrics import WindowRow
from stream.runs.learning import LearningRun
from stream.runs.loop import OnWindow, begin, learn, refuse_used
from stream.runs.pacing import Pacer
from stream.runs.presence import refuse_unlearnable
from stream.runs.result import RunResult, result_of
from stream.runs.stopping import stop_on_signal
from stream.settings import Settings
from stream.snapshots import Snapshots
from stream.sources import LogSource
from stream.state_folder import StateFolder

__all__ = ["replay"]

OnProgress = Callable[[float | None, int], None]


def replay(
    settings: Settings,
    folder: Path,
    *,
    resume: bool = False,
    fresh: bool = False,
    accept_settings: bool = False,
    epochs: int = 1,
    on_window: OnWindow = lambda row: None,
    progress: OnProgress = lambda fraction, messages: None,
) -> RunResult:
    """Learns over the log of `settings.feed`, keeping state in `folder`.

    `resume`: go on from the newest whole checkpoint, if there is one; `fresh`: start anew; without either
    a used state folder is refused. `accept_settings`: go on with settings other than the checkpoint's
    (docs/settings.md says which can change). `epochs`: passes over the log (>= 1). `on_window` is given each
    window's row, `progress` the share of the log read (None where unknown) and the messages so far.
    SIGINT and SIGTERM end the run after the block at hand, with a checkpoint and a snapshot; a second
    one ends it at once. Raises what the stages raise; the last checkpoint is then whole.
    """
    refuse_unlearnable(settings)
    _refuse_topic(settings)
    began = time.monotonic()
    with StateFolder(folder) as state, stop_on_signal() as stopping:
        checkpoints = Checkpoints(state.checkpoints, settings.state.keep_checkpoints)
        snapshots = Snapshots(state.snapshots, settings.state.keep_snapshots)
        refuse_used(state, snapshots, resume=resume, fresh=fresh)
        run, warnings, resumed_from = begin(
            settings, state, checkpoints, journalled=False, accept=accept_settings
        )
        pacer = Pacer(run, settings, checkpoints)
        windows: list[WindowRow] = []

        def keep(row: WindowRow) -> None:
            windows.append(row)
            on_window(row)

        _learn(run, settings, epochs, pacer, keep, progress, stopping)
        pacer.checkpoint()
        weights = run.model.weights()
        snapshot = snapshots.write(run.messages, weights, run.about_snapshot())
        run.rejects.close()
        metrics = run.progress
        if metrics.window_left < metrics.window:
            keep(WindowRow(metrics.messages, metrics.window_summary(), len(weights), run.model.live))
        return result_of(
            run,
            windows,
            nnz=len(weights),
            seconds=time.monotonic() - began,
            resumed_from=resumed_from,
            checkpoints=pacer.written,
            snapshot=snapshot,
            interrupted=bool(stopping),
            warnings=warnings,
        )


def _refuse_topic(settings: Settings) -> None:
    if settings.feed.kind != "log":
        raise BadSettings(
            'replay reads logs: set feed.kind = "log" with feed.paths. A topic is learned by `bedload work`, '
            "and again in the same order by `bedload replay --journal STATE`"
        )


def _learn(
    run: LearningRun,
    settings: Settings,
    epochs: int,
    pacer: Pacer,
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

        def over(read: bool, source: LogSource = source) -> bool:
            fraction = source.fraction_read()
            progress(None if fraction is None else (run.epoch + fraction) / epochs, run.messages)
            return not read

        try:
            if run.position is not None:
                source.seek(dict(run.position))
            learn(run, source, pacer, stopping, on_window, over)
        finally:
            source.close()
        if stopping or run.epoch + 1 == epochs:
            return
        run.next_epoch()
