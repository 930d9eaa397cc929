"""A worker's turns, windows and checkpoints in; its port, its log lines and what both say, out."""

from __future__ import annotations

import logging
import threading
import time
from collections.abc import Iterator
from contextlib import ExitStack, contextmanager
from pathlib import Path
from types import TracebackType
from typing import Any

from stream.errors import BedloadError
from stream.kernel import compiled_before
from stream.metrics import WindowRow
from stream.operating import (
    Exposition,
    FeedHealth,
    Figures,
    HasHealth,
    Port,
    log_lines,
    not_ready,
    progress_fields,
    stuck,
)
from stream.runs.learning import LearningRun
from stream.runs.pacing import LivePacer
from stream.settings import Settings

__all__ = ["Watch", "WatchedPacer"]

PAUSE_S = 0.005
"""A shorter stay with the pacer is no pause: most of them do nothing."""
LOOK_S = 1.0
log = logging.getLogger(__name__)


class Watch:
    """Watches one worker, from when it is entered to when it is left; for one thread, that which learns.

    `stopping` holds the signal once one came. Opens the port that the settings name, if any, and raises what
    `Port` raises.
    """

    def __init__(self, settings: Settings, stopping: list[int]) -> None:
        self.figures = Figures(
            message_s=time.monotonic(), to_compile=not compiled_before(settings.learner.method)
        )
        self._worker = settings.worker
        self._stopping = stopping
        self._source: HasHealth | None = None
        self._rejects_before: dict[str, int] = {}
        self._learned_before = 0
        self._over = threading.Event()
        self._parts = ExitStack()
        self._thread = threading.Thread(target=self._look, name="log lines", daemon=True)
        self.exposition = Exposition(self.figures, self._feed, lambda: self._not_ready() is None)

    def __enter__(self) -> Watch:
        with ExitStack() as parts:
            parts.enter_context(log_lines(self._worker.log_format))
            if self._worker.metrics_port is not None:
                checks = {"/healthz": self._stuck, "/readyz": self._not_ready}
                where = self._worker.metrics_address, self._worker.metrics_port
                parts.callback(Port(*where, self.exposition.page, checks).close)
            self._thread.start()
            parts.callback(self._thread.join)
            parts.callback(self._over.set)
            self._parts = parts.pop_all()
        self.say("started", port=self._worker.metrics_port)
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        fields = {"messages": self.figures.learned, "checkpoints": self.figures.checkpoints}
        if kind is None:
            self.say("stopped", **fields)
        else:  # its text may hold a part of a message, and goes to whoever called
            code = error.exit_code if isinstance(error, BedloadError) else _code_of_bug(error)
            self.say("failed", logging.ERROR, error=kind.__name__, exit_code=code, **fields)
        self._parts.close()

    def say(self, event: str, level: int = logging.INFO, **fields: Any) -> None:
        """Logs an event, with fields of plain numbers and words."""
        log.log(level, event, extra={"event": event, "fields": fields})

    def warn(self, text: str) -> None:
        """Logs what a person should know."""
        self.say("warning", logging.WARNING, text=text)

    def opening(self, run: LearningRun, source: object) -> None:
        """The newest checkpoint is read; the feed is to be opened."""
        self._rejects_before, self._learned_before = dict(run.rejects.by_reason), run.messages
        self._source = source if isinstance(source, HasHealth) else None
        self._take(run)
        self.figures.phase = "opening"
        if run.position is None:
            self.say("began")
        else:
            self.say("resumed", messages=run.messages)

    def opened(self) -> None:
        """The feed is open: what the journal holds behind the checkpoint comes first."""
        self.figures.turned_s = self.figures.checkpoint_s = time.monotonic()
        self.figures.phase = "replaying"

    def turned(self, run: LearningRun, read: bool, replaying: bool) -> None:
        """The loop went round, with messages or without."""
        figures = self.figures
        figures.turned_s = time.monotonic()
        if read:
            figures.message_s = figures.turned_s
            self._take(run)
        if figures.phase == "replaying" and not replaying:
            figures.phase = "live"
            self.say("live", messages=run.messages)

    def window(self, row: WindowRow) -> None:
        """A window was closed."""
        figures = self.figures
        figures.log_loss, figures.calibration_ratio = row.summary.log_loss, row.summary.calibration_ratio
        figures.nonzeros = row.nnz

    @contextmanager
    def waiting(self) -> Iterator[None]:
        """Learning waits for brokers to take what is sent out."""
        self.figures.waiting = True
        try:
            yield
        finally:
            self.figures.waiting = False
            self.figures.turned_s = time.monotonic()

    def sending(self, trouble: str | None) -> None:
        """Why brokers do not take what is sent out; None where they do."""
        if trouble is not None and self.figures.untaken is None:
            self.warn(f"dead letters or scores are not taken: {trouble}")
        self.figures.untaken = trouble

    def ending(self) -> None:
        """Nothing more is learned; the last checkpoint is to be written."""
        self.figures.phase = "ending"
        self.say("stopping", signal=self._stopping[0] if self._stopping else None)

    def _take(self, run: LearningRun) -> None:
        figures = self.figures
        figures.messages, figures.learned = run.messages - self._learned_before, run.messages
        figures.live = run.model.live
        before = self._rejects_before
        figures.rejects = {
            reason: count - before.get(reason, 0)
            for reason, count in run.rejects.by_reason.items()
            if count > before.get(reason, 0)
        }

    # ---- from any thread ---------------------------------------------------------------------------------

    def _feed(self) -> FeedHealth | None:
        return None if self._source is None else self._source.health()

    def _not_ready(self) -> str | None:
        stale = self._worker.stale_after_s
        return not_ready(self.figures, self._feed(), time.monotonic(), stale, bool(self._stopping))

    def _stuck(self) -> str | None:
        return stuck(self.figures, self._feed(), time.monotonic(), self._worker.stale_after_s)

    def _look(self) -> None:
        """A line an interval, and an event where the brokers go away or come back."""
        every_s, away = self._worker.log_every_s, False
        said_s, said = time.monotonic(), 0
        while not self._over.wait(min(LOOK_S, every_s)):
            feed, now = self._feed(), time.monotonic()
            trouble = None if feed is None else feed.trouble
            if (trouble is not None) != away:
                away = trouble is not None
                if away:
                    self.say("feed_away", logging.WARNING, trouble=trouble)
                else:
                    self.say("feed_back")
            if now - said_s >= every_s and self.figures.phase in ("replaying", "live"):
                self.say("progress", **progress_fields(self.figures, feed, now, said, now - said_s))
                said_s, said = now, self.figures.messages


class WatchedPacer(LivePacer):
    """As LivePacer; a watch is told how long learning stood still, and what became of each checkpoint."""

    def __init__(self, watch: Watch, *parts: Any) -> None:
        super().__init__(*parts)
        self._watch = watch
        self._begun_s = 0.0

    def keep_up(self) -> None:
        """As LivePacer's."""
        began = time.monotonic()
        with self._failures_told():
            super().keep_up()
        took = time.monotonic() - began
        if took >= PAUSE_S:
            self._watch.exposition.pause(took)

    def checkpoint(self) -> None:
        """As LivePacer's."""
        with self._failures_told():
            super().checkpoint()

    def _begin(self, snapshot: bool) -> bool:
        self._begun_s = time.monotonic()
        return super()._begin(snapshot)

    def _note(self, durable: Path | None) -> None:
        begun_s, now = self._begun_s, time.monotonic()
        super()._note(durable)
        if durable is not None:
            watch = self._watch
            watch.exposition.checkpoint(now - begun_s)
            watch.figures.checkpoints, watch.figures.checkpoint_s = self.written, now
            watch.say("checkpoint", messages=int(durable.name), seconds=round(now - begun_s, 3))

    def _note_snapshot(self, written: tuple[Path, int] | None) -> None:
        super()._note_snapshot(written)
        if written is not None:
            self._watch.say("snapshot", name=written[0].name, nonzeros=written[1])

    @contextmanager
    def _failures_told(self) -> Iterator[None]:
        try:
            yield
        except BedloadError as error:
            self._watch.figures.checkpoint_failures += 1
            self._watch.say("checkpoint_failed", logging.ERROR, error=type(error).__name__, text=str(error))
            raise


def _code_of_bug(error: BaseException | None) -> int | None:
    """Of what is no error of ours: that of a bug, but for what the operating system or a person did."""
    is_bug = isinstance(error, Exception) and not isinstance(error, OSError)
    return BedloadError.exit_code if is_bug else None
