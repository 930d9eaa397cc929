"""A run in, checkpoints and snapshots out when they are due: who knows what the last one does not hold."""

from __future__ import annotations

import time
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from stream.background import BackgroundCheckpoints, BackgroundWriter
from stream.checkpoints import Checkpoints
from stream.errors import Unavailable
from stream.runs.learning import LearningRun
from stream.settings import Settings
from stream.snapshots import About, Snapshots
from stream.weights import Weights

__all__ = ["LivePacer", "Pacer"]

RETRY_S = 1.0


class Pacer:
    """Writes a checkpoint whenever the messages reach a multiple of `checkpoint_every`, and at the end.

    `most`: messages that the run ends at, if any; `written`: checkpoints so far. Raises what writing raises;
    the older checkpoints are then still there.
    """

    def __init__(
        self, run: LearningRun, settings: Settings, checkpoints: Checkpoints, most: int | None = None
    ) -> None:
        self._run = run
        self._most = most
        self._every = settings.state.checkpoint_every
        self._checkpoints = checkpoints
        self._saved_at = run.messages if run.position is not None else -1
        self.written = 0

    def left(self) -> int:
        """Messages until the next checkpoint is due, or the end: a block may not reach past it."""
        left = self._every - self._run.messages % self._every
        return left if self._most is None else min(left, self._most - self._run.messages)

    def keep_up(self) -> None:
        """Writes what is due; to be called after each block."""
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


class LivePacer(Pacer):
    """As Pacer, and by the clock too: checkpoints in the background, snapshots once those are durable.

    The clock decides when, never what. A snapshot is always one of a durable checkpoint, so that who goes on
    from there never finds a snapshot ahead of itself. `before` makes durable what a checkpoint relies on, or
    says that this cannot be done yet; `after` is given the position of each one that is durable.
    `snapshot`: the newest one written.
    """

    def __init__(
        self,
        run: LearningRun,
        settings: Settings,
        checkpoints: Checkpoints,
        snapshots: Snapshots,
        before: Callable[[], bool],
        after: Callable[[dict[str, Any]], None],
        clock: Callable[[], float] = time.monotonic,
    ) -> None:
        super().__init__(run, settings, checkpoints)
        self._saved_at = run.messages  # before the first message there is nothing to save
        self._worker = settings.worker
        self._snapshots = snapshots
        self._background = BackgroundCheckpoints(checkpoints)
        self._publishing: BackgroundWriter[tuple[Path, int]] = BackgroundWriter("snapshot")
        self._before, self._after, self._clock = before, after, clock
        self._checkpoint_at = clock() + self._worker.checkpoint_every_s
        self._snapshot_at = clock() + self._worker.snapshot_every_s
        self._position: dict[str, Any] | None = None
        self._due: _Due | None = None  # the snapshot of the checkpoint under way
        self._snapshot_of = -1
        self.snapshot: Path | None = None
        self.snapshot_nnz = 0

    def keep_up(self) -> None:
        """Begins what is due and takes note of what became durable; after each block, and now and then."""
        self._note(self._background.done())
        self._note_snapshot(self._publishing.done())
        now = self._clock()
        new = self._run.messages != self._saved_at
        snapshot = self._run.messages > 0 and now >= self._snapshot_at and not self._publishing.busy
        if new and self._run.messages % self._every == 0:
            self._note(self._background.wait())
            self._begin(snapshot)
        elif not self._background.busy and (snapshot or now >= self._checkpoint_at):
            self._begin(snapshot)

    def checkpoint(self) -> None:
        """Returns once a checkpoint and a snapshot of the present state are durable."""
        self._note(self._background.wait())
        if not self._begin(snapshot=True):
            raise Unavailable(
                "the last checkpoint could not be written, as not all records sent out were acknowledged; "
                "the one before it is whole, and what came since will be learned again in the same order"
            )
        self._note(self._background.wait())
        self._note_snapshot(self._publishing.wait())

    def close(self) -> None:
        """Waits until neither checkpoint nor snapshot is being written any more."""
        self._background.close()
        self._publishing.close()

    def _begin(self, snapshot: bool) -> bool:
        """Begins a checkpoint of what is new, and a snapshot with it; False where that must wait."""
        run, now = self._run, self._clock()
        new = run.messages != self._saved_at
        if new and not self._before():
            self._checkpoint_at = now + min(RETRY_S, self._worker.checkpoint_every_s)
            self._snapshot_at = max(self._snapshot_at, self._checkpoint_at)
            return False
        self._checkpoint_at = now + self._worker.checkpoint_every_s
        if snapshot:
            self._snapshot_at = now + self._worker.snapshot_every_s
            snapshot = self._snapshot_of != run.messages
        view = run.begin_saving(snapshot) if new else None
        if snapshot:
            weights = view.weights if view is not None else None
            self._due = _Due(run.messages, weights or _known(run.model.weights()), run.about_snapshot())
        if view is None:
            self._publish()
            return True
        about = run.about()
        self._background.begin(run.messages, view, about)
        self._saved_at, self._position = run.messages, about["position"]
        return True

    def _note(self, durable: Path | None) -> None:
        """What is to be done once a checkpoint is durable."""
        if durable is None:
            return
        self.written += 1
        if self._position is not None:
            self._after(self._position)
        self._publish()

    def _publish(self) -> None:
        """Begins to write the snapshot that is due, after the one before it."""
        due, self._due = self._due, None
        if due is None:
            return
        self._note_snapshot(self._publishing.wait())
        self._snapshot_of = due.messages
        self._publishing.start(lambda: due.write(self._snapshots))

    def _note_snapshot(self, written: tuple[Path, int] | None) -> None:
        if written is not None:
            self.snapshot, self.snapshot_nnz = written


@dataclass(frozen=True, slots=True)
class _Due:
    """A snapshot to be written once the checkpoint of the same moment is durable."""

    messages: int
    weights: Callable[[], Weights]
    about: About

    def write(self, snapshots: Snapshots) -> tuple[Path, int]:
        """Its path and its number of weights."""
        weights = self.weights()
        return snapshots.write(self.messages, weights, self.about), len(weights)


def _known(weights: Weights) -> Callable[[], Weights]:
    return lambda: weights
