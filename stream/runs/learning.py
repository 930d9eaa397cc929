"""The loop of every run that learns: blocks of a source in, a model, metrics and rejects brought up to date.

Order of events for a block: decode, batch, judge rejects, predict then update, sweep, metrics. Blocks are
cut so that windows and checkpoints fall between them.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import replace
from importlib.metadata import version
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt

from stream.background import View
from stream.decoding import Decoder
from stream.errors import BadSettings
from stream.features import Batcher
from stream.fingerprint import differences, fingerprint_difference
from stream.message import Block, Examples, Reject, Source
from stream.metrics import Progress, WindowRow
from stream.rejects import RejectLog, RejectSink
from stream.runs.model import Model
from stream.runs.presence import Presence
from stream.settings import Settings
from stream.snapshots import About

__all__ = ["LearningRun", "pinned"]

BLOCK = 1024
"""Messages in a block at most: enough to spread the cost of a call, few enough to stay in the cache."""

OnScored = Callable[[Block, npt.NDArray[np.int64], npt.NDArray[np.float64]], None]


class LearningRun:
    """Everything that a checkpoint holds, and the step that moves it on by one block.

    `accepted`: after how many messages settings changed, and those before. `messages`: read over all epochs,
    rejected ones too. Metrics and rejects count the first epoch only.
    """

    def __init__(
        self,
        settings: Settings,
        rejects_folder: Path,
        saved: Mapping[str, Any] | None = None,
        *,
        reject_sink: RejectSink | None = None,
        on_scored: OnScored | None = None,
    ) -> None:
        """`saved`: what `about()` gave; then `restore` must follow with the arrays.

        `reject_sink`: where rejects are kept instead of files in `rejects_folder`; `on_scored` is given each
        block with the rows that have a margin (int64[m]) and those margins, from before their update.
        """
        self._settings = settings
        self._on_scored = on_scored
        self._decoder = Decoder(settings)
        self._batcher = Batcher(settings)
        self._slice_path = _slice_path(settings)
        self.presence = Presence(settings)
        self.model = Model(settings)
        self.progress = Progress(settings.metrics.window, self._slice_path is not None)
        self.messages = self.tokens = self.epoch = 0
        self.position: Mapping[str, Any] | None = None
        self.accepted: list[dict[str, Any]] = []
        if saved is not None:
            self._check_pinned(saved)
            self.messages, self.tokens, self.epoch = saved["messages"], saved["tokens"], saved["epoch"]
            self.position = saved["position"]
            self.accepted = saved.get("accepted", [])
        self.rejects = RejectLog(
            rejects_folder,
            settings.message,
            saved["rejects"] if saved else None,
            action=settings.rejects.action,
            window=settings.metrics.window,
            sink=reject_sink,
        )

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
                return self.progress.close_window(self.model.nnz(), self.model.live)
        return True

    def next_epoch(self) -> None:
        """Begins another pass: the log is read again from its beginning."""
        self.epoch += 1
        self.position = None

    def state(self) -> dict[str, npt.NDArray[Any]]:
        """Arrays of a checkpoint, by name."""
        return {**self.model.state(), **self._metrics_state()}

    def begin_saving(self, weights: bool = False) -> View:
        """`state` as it is now, for another thread to write meanwhile: see `Model.begin_saving`."""
        metrics = self._metrics_state()
        view = self.model.begin_saving(weights)
        return replace(view, rest=lambda: {**view.rest(), **metrics})

    def restore(self, arrays: Mapping[str, npt.NDArray[Any]]) -> None:
        """Goes on from what `state` gave."""
        self.model.restore(arrays)
        self.progress.restore(
            {name.removeprefix("metrics."): a for name, a in arrays.items() if name.startswith("metrics.")}
        )

    def about(self) -> dict[str, Any]:
        """The rest of a checkpoint, as JSON types: equal for equal streams, whenever it is asked for."""
        return {
            "program": version("bedload"),
            "fingerprint": self._settings.fingerprint(),
            "pinned": pinned(self._settings),
            "messages": self.messages,
            "tokens": self.tokens,
            "epoch": self.epoch,
            "position": self.position,
            "accepted": self.accepted,
            "rejects": self.rejects.state(),
        }

    def about_snapshot(self) -> About:
        """What a snapshot says beside its weights."""
        window = self.progress.window_summary()
        metrics = (window if window.messages else self.progress.summary()).to_json()
        calibration = {
            name: metrics[name] for name in ("calibration_ratio", "expected_calibration_error", "base_rate")
        }
        return About(self._settings.model_dump(mode="json"), metrics, calibration, version("bedload"))

    def _metrics_state(self) -> dict[str, npt.NDArray[Any]]:
        return {f"metrics.{name}": array for name, array in self.progress.state().items()}

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

    def _check_pinned(self, saved: Mapping[str, Any]) -> None:
        lines = fingerprint_difference(self._settings.fingerprint(), saved["fingerprint"])
        lines += differences(pinned(self._settings), saved["pinned"])
        if lines:
            raise BadSettings(
                "the checkpoint was made with other settings (here: now; there: in the checkpoint):\n  "
                + "\n  ".join(lines)
                + "\nset them back to go on, take them with --accept-settings, or begin again in another "
                "state.folder"
            )


def pinned(settings: Settings) -> dict[str, Any]:
    """Settings that the state is made of, beside the fingerprint."""
    state = settings.state.model_dump(mode="json")
    bounds = ("admit_after", "admission_bytes", "admission_halved_every", "idle_after", "max_live")
    return {
        "learner": settings.learner.model_dump(mode="json"),
        "state": {name: state[name] for name in bounds},
        "metrics": settings.metrics.model_dump(mode="json"),
    }


def _without(rows: npt.NDArray[np.int64], over: list[Reject]) -> npt.NDArray[np.int64]:
    return rows[~np.isin(rows, [reject.row for reject in over])] if over else rows


def _slice_path(settings: Settings) -> str | None:
    by = settings.metrics.slice_by
    return next((field.path for field in settings.fields if field.name == by), None)
