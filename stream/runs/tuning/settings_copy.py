"""A settings file and a candidate in, the file's text with the candidate's numbers out: comments stay."""

from __future__ import annotations

from pathlib import Path

import tomlkit

from stream.durable import os_errors
from stream.runs.tuning.trial import Lane

__all__ = ["settings_with"]


def settings_with(config: Path, lane: Lane) -> str:
    """The text of `config` whose [learner] has the learning rate and strengths of `lane`.

    The file was read as settings before, so that it is TOML. Raises InputMissing, NoPermission, FileTrouble.
    """
    with os_errors("read", config):
        document = tomlkit.parse(config.read_bytes().decode())
    learner = document.setdefault("learner", tomlkit.table())
    learner["learning_rate"] = lane.learning_rate
    learner["l1_per_example"] = lane.l1_per_example
    if lane.l1 or "l1" in learner:
        learner["l1"] = lane.l1
    return tomlkit.dumps(document)
