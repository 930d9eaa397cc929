"""A checkpoint and changed settings in; the same model as a checkpoint of those out, or a refusal."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace
from typing import Any

import numpy as np
import numpy.typing as npt

from stream.checkpoints import Checkpoint
from stream.errors import BadSettings
from stream.fingerprint import differences, fingerprint_difference, unlivable
from stream.learners import Rows, rebuild
from stream.runs.learning import pinned
from stream.settings import Settings
from stream.settings.models import Learner

__all__ = ["accept_settings"]


def accept_settings(settings: Settings, saved: Checkpoint) -> tuple[Checkpoint, list[str]]:
    """`saved` as `settings` go on from it, every weight as it is, and lines on what changed.

    Its `about` tells of the change in `accepted`. Without one, `saved` itself and no lines. Raises
    BadSettings with the difference where something changed that a model cannot live through.
    """
    about, now = saved.about, pinned(settings)
    fingerprint = settings.fingerprint()
    changed = fingerprint_difference(fingerprint, about["fingerprint"]) + differences(now, about["pinned"])
    if not changed:
        return saved, []
    _refuse(unlivable(fingerprint, about["fingerprint"], now, about["pinned"]))
    before = {"fingerprint": about["fingerprint"], "pinned": about["pinned"]}
    accepted = [*about.get("accepted", []), {"messages": saved.messages, "before": before}]
    arrays, lines = _arrays(saved.arrays, settings, about["pinned"])
    said = f"settings accepted after {saved.messages:,} messages (here: now; there: until then):"
    return (
        replace(
            saved,
            arrays=arrays,
            about={**about, "fingerprint": fingerprint, "pinned": now, "accepted": accepted},
        ),
        [said, *(f"  {line}" for line in changed), *lines],
    )


def _refuse(lines: list[str]) -> None:
    if lines:
        raise BadSettings(
            "these changes cannot be accepted on a live model (here: now; there: in the checkpoint):\n  "
            + "\n  ".join(lines)
            + "\nset them back to go on, or learn anew in another state.folder"
        )


def _arrays(
    saved: Mapping[str, npt.NDArray[Any]], settings: Settings, then: Mapping[str, Any]
) -> tuple[dict[str, npt.NDArray[Any]], list[str]]:
    arrays, lines = dict(saved), []
    old = Learner.model_validate(then["learner"])
    if old != settings.learner:
        rows = Rows(saved["table.first"], saved["table.second"], saved["learner.sums"])
        rebuilt = rebuild(rows, old, settings.learner)
        arrays["table.first"], arrays["table.second"] = rebuilt.first, rebuilt.second
        arrays["learner.sums"] = rebuilt.sums
    state = settings.state
    admission = arrays.pop("table.admission", np.empty(0, np.uint8))
    if state.admit_after > 1:
        if len(admission) != state.admission_bytes:
            admission = np.zeros(state.admission_bytes, np.uint8)
            lines.append("the admission filter starts empty: sightings count from now on")
        arrays["table.admission"] = admission
    if state.max_live != then["state"]["max_live"]:
        counts = arrays["model.counts"].copy()
        counts[0] = 0  # when room may be sought again was reckoned from the old bound
        arrays["model.counts"] = counts
    return arrays, lines
