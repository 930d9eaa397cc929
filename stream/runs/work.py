"""A feed that never ends in, a model that lives for months out: the loop of replay, until told to stop."""

from __future__ import annotations

import time
from collections.abc import Callable, Iterator
from contextlib import ExitStack, suppress
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from stream.checkpoints import Checkpoints
from stream.errors import BedloadError, Unavailable
from stream.message import LiveSource
from stream.metrics import WindowRow
from stream.retention import Retention
from stream.runs.feeds import OnGap, live_source, publisher_of
from stream.runs.loop import OnWindow, begin, learn
from stream.runs.outbox import Outbox, Publisher
from stream.runs.presence import refuse_unlearnable
from stream.runs.result import RunResult, result_of
from stream.runs.stopping import stop_on_signal
from stream.runs.watching import Watch, WatchedPacer
from stream.settings import Settings
from stream.snapshots import Snapshots
from stream.sources import JournalledSource, Overwritten
from stream.state_folder import StateFolder

__all__ = ["WorkResult", "work"]

IDLE_S = 0.05
"""How long to wait where nothing came, beside what the source waits by itself."""


@dataclass(frozen=True, slots=True)
class WorkResult:
    """What a worker did from its start to its stop; `passed_over`: messages that were gone before it came."""

    run: RunResult
    passed_over: int

    def to_json(self) -> dict[str, Any]:
        """The keys of a replay, but for windows and epochs, which a worker has no end of or none."""
        found = self.run.to_json()
        del found["windows"], found["epochs"]
        return {**found, "passed_over": self.passed_over}


def work(
    settings: Settings,
    folder: Path,
    *,
    until_end: bool = False,
    on_gap: OnGap = "refuse",
    accept_settings: bool = False,
    on_window: OnWindow = lambda row: None,
    warn: Callable[[str], None] = lambda text: None,
    source: LiveSource | None = None,
    connect: Callable[[], Publisher] | None = None,
) -> WorkResult:
    """Learns from the feed of `settings` as it comes, keeping state in `folder`, until SIGTERM or SIGINT.

    Goes on from the newest whole checkpoint and the journal behind it, where there are some. `until_end`:
    stops at the end of what was there at the start. `on_gap`: what to do where messages were removed before
    they were read. `accept_settings`: go on with settings other than the checkpoint's (docs/settings.md
    says which can change). `on_window` is given each window's row, `warn` a line on what a person should
    know. `source`, `connect`: in place of the feed's own and its cluster's.

    A signal ends it after the block at hand, with a checkpoint and a snapshot, also while the feed is
    waited for. Raises TryLater where another
    process holds the folder, and what the stages raise; the last checkpoint is then whole.
    """
    refuse_unlearnable(settings)
    began = time.monotonic()
    with StateFolder(folder) as state, stop_on_signal() as stopping, Watch(settings, stopping) as watch:
        feed = source or live_source(settings, on_gap=on_gap, stopping=lambda: bool(stopping))
        place = JournalledSource(feed, folder)
        worker = _Worker(settings, state, place, stopping, connect, watch, accept_settings)

        def tell(text: str) -> None:
            watch.warn(text)
            warn(text)

        try:
            for warning in (*_entry_delay(settings), *worker.warnings):
                tell(warning)
            watch.opening(worker.run, feed)
            if worker.open(tell):
                worker.live(until_end, on_window, tell)
            watch.ending()
            worker.pacer.checkpoint()
            return WorkResult(worker.result(time.monotonic() - began), place.passed_over)
        except Overwritten:
            with suppress(BedloadError):  # no journal can give again what was learned since the last one
                worker.pacer.checkpoint()
            raise
        finally:
            worker.close()


class _Worker:
    """The parts of a worker, put together."""

    def __init__(
        self,
        settings: Settings,
        state: StateFolder,
        source: JournalledSource,
        stopping: list[int],
        connect: Callable[[], Publisher] | None,
        watch: Watch,
        accept: bool,
    ) -> None:
        self._settings, self._source, self._stopping = settings, source, stopping
        self._watch = watch
        self._told_of = 0
        keep = settings.state
        snapshots = Snapshots(
            state.snapshots, Retention(keep.keep_snapshots, keep.keep_hourly, keep.keep_daily)
        )
        checkpoints = Checkpoints(
            state.checkpoints,
            Retention(keep.keep_checkpoints, keep.keep_hourly, keep.keep_daily),
            snapshots.pinned,
        )
        self._outbox: Outbox | None = None
        rejects_out, scores_out = settings.rejects.topic is not None, settings.scores.topic is not None
        if rejects_out or scores_out:
            self._outbox = Outbox(
                settings, connect or publisher_of(settings), source.sync, self._newest_snapshot
            )
        self.run, self.warnings, self._resumed_from = begin(
            settings,
            state,
            checkpoints,
            journalled=True,
            accept=accept,
            reject_sink=self._outbox if rejects_out else None,
            on_scored=self._outbox.scored if self._outbox is not None and scores_out else None,
        )
        self.pacer = WatchedPacer(
            watch, self.run, settings, checkpoints, snapshots, self._ready, source.commit
        )
        self._first_snapshot = next((entry.name for entry in snapshots.list()), None)

    def open(self, warn: Callable[[str], None]) -> bool:
        """Goes to where the run goes on; False where a signal came before the feed answered."""
        position = self.run.position
        try:
            if position is None:
                self._source.start()
            else:
                self._source.seek(dict(position))
        except Unavailable:
            if self._stopping:
                return False
            raise
        if self._source.cut_bytes:
            warn(f"the journal's last {self._source.cut_bytes} bytes were torn by a crash and are cut off")
        self._warn_of_gaps(warn)
        return True

    def live(self, until_end: bool, on_window: OnWindow, warn: Callable[[str], None]) -> None:
        """Learns until a signal comes, or the end where one is wanted."""

        watch = self._watch

        def seen(row: WindowRow) -> None:
            watch.window(row)
            on_window(row)

        def over(read: bool) -> bool:
            watch.turned(self.run, read, self._source.following)
            self._warn_of_gaps(warn)
            if not read:
                time.sleep(IDLE_S)
            self._send()
            return until_end and self._source.at_end()

        watch.opened()
        learn(self.run, self._source, self.pacer, self._stopping, seen, over)
        with watch.waiting():
            while self._outbox is not None and not self._stopping and not self._outbox.try_sync():
                time.sleep(IDLE_S)

    def result(self, seconds: float) -> RunResult:
        """What it found, after the last checkpoint."""
        assert self.pacer.snapshot is not None
        return result_of(
            self.run,
            [],
            nnz=self.pacer.snapshot_nnz,
            seconds=seconds,
            resumed_from=self._resumed_from,
            checkpoints=self.pacer.written,
            snapshot=self.pacer.snapshot,
            interrupted=bool(self._stopping),
            warnings=self.warnings,
        )

    def close(self) -> None:
        """Releases everything, whatever of it fails."""
        with ExitStack() as parts:
            parts.callback(self._source.close)
            if self._outbox is not None:
                parts.callback(self._outbox.close)
            parts.callback(self.run.rejects.close)
            parts.callback(self.pacer.close)

    def _warn_of_gaps(self, warn: Callable[[str], None]) -> None:
        """Tells of messages that were passed over since the last call."""
        new = self._source.passed_over - self._told_of
        if new:
            self._told_of += new
            warn(f"{new:,} messages were removed before they were read: passed over")

    def _send(self) -> None:
        """Sends what waits; where too much does, learning waits for the brokers."""
        if self._outbox is None:
            return
        self._outbox.keep_up()
        self._watch.sending(self._outbox.trouble)
        if not self._outbox.full:
            return
        with self._watch.waiting():
            while self._outbox.full and not self._stopping:
                time.sleep(IDLE_S)
                self._outbox.keep_up()
                self._watch.sending(self._outbox.trouble)

    def _ready(self) -> bool:
        """Makes durable what a checkpoint relies on: order, rejects, scores. False: perhaps later."""
        self._source.sync()
        if self._outbox is None or self._settings.rejects.topic is None:
            self.run.rejects.sync()
        return self._outbox is None or self._outbox.try_sync()

    def _newest_snapshot(self) -> str | None:
        written = self.pacer.snapshot
        return self._first_snapshot if written is None else written.name


def _entry_delay(settings: Settings) -> Iterator[str]:
    """What strength that grows for ever does to tokens that come late (docs/settings.md has the formula)."""
    learner = settings.learner
    if learner.method == "ftrl" and learner.l1_per_example > 0 and learner.horizon is None:
        after = 10**8
        share, lift = 0.001, 0.449  # from 20 % to 64.9 %: 2 in log-odds
        gain = share * lift - learner.l1_per_example
        if gain > 0:
            delay = f"needs {after * learner.l1_per_example / gain:,.0f} messages to count"
        else:
            delay = "never counts"
        yield (
            f"learner.horizon is not set: strength grows for ever, and after {after:,} messages a token "
            f"that stands in 0.1 % of them and lifts log-odds by 2 {delay}. Set learner.horizon"
        )
