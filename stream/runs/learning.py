"""A run that can be left and gone on with: the steps of `stream.runs.steps`, and what a checkpoint holds."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace
from importlib.metadata import version
from pathlib import Path
from typing import Any

import numpy.typing as npt

from stream.background import View
from stream.errors import BadSettings
from stream.fingerprint import differences, fingerprint_difference, unlivable
from stream.metrics import Progress
from stream.rejects import RejectLog, RejectSink
from stream.runs.model import Model
from stream.runs.steps import OnScored, Steps, is_sliced
from stream.settings import Settings
from stream.snapshots import About

__all__ = ["LearningRun", "pinned"]


class LearningRun(Steps[Model]):
    """Everything that a checkpoint holds, and the step that moves it on by one block.

    `accepted`: after how many messages settings changed, and those before.
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

        `reject_sink`: where rejects are kept instead of files in `rejects_folder`; `on_scored`: see `Steps`.
        """
        if saved is not None:
            _check_pinned(settings, saved)
        rejects = RejectLog(
            rejects_folder,
            settings.message,
            saved["rejects"] if saved else None,
            action=settings.rejects.action,
            window=settings.metrics.window,
            sink=reject_sink,
        )
        progress = Progress(settings.metrics.window, is_sliced(settings))
        super().__init__(settings, Model(settings), progress, rejects, on_scored)
        self.accepted: list[dict[str, Any]] = []
        if saved is not None:
            self.messages, self.tokens, self.epoch = saved["messages"], saved["tokens"], saved["epoch"]
            self.position = saved["position"]
            self.accepted = saved.get("accepted", [])

    def next_epoch(self) -> None:
        """Begins another pass: the log is read again from its beginning."""
        self.epoch += 1
        self.position = None
        self.model.next_pass()

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


def _check_pinned(settings: Settings, saved: Mapping[str, Any]) -> None:
    here, there = settings.fingerprint(), saved["fingerprint"]
    now, then = pinned(settings), saved["pinned"]
    lines = fingerprint_difference(here, there) + differences(now, then)
    if lines:
        raise BadSettings(
            "the checkpoint was made with other settings (here: now; there: in the checkpoint):\n  "
            + "\n  ".join(lines)
            + f"\n{_cure(lines, unlivable(here, there, now, then))}, or begin again in another state.folder"
        )


def _cure(lines: list[str], unlivable: list[str]) -> str:
    """What to do about settings that differ, some of which no model lives through."""
    if not unlivable:
        return "set them back to go on, take them with --accept-settings"
    keys = ", ".join(line.partition(":")[0] for line in unlivable)
    if len(unlivable) == len(lines):
        return f"set them back to go on, as a live model cannot take another {keys}"
    return f"set {keys} back, which a live model cannot change, and take the rest with --accept-settings"


def pinned(settings: Settings) -> dict[str, Any]:
    """Settings that the state is made of, beside the fingerprint."""
    state, learner = settings.state.model_dump(mode="json"), settings.learner.model_dump(mode="json")
    if settings.learner.averaging is None:
        del learner["averaging"]  # a checkpoint without averages is that of a program that knew of none
    bounds = ("admit_after", "admission_bytes", "admission_halved_every", "idle_after", "max_live")
    return {
        "learner": learner,
        "state": {name: state[name] for name in bounds},
        "metrics": settings.metrics.model_dump(mode="json"),
    }
