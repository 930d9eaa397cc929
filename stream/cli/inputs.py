"""Options of a command in, what they mean out: settings, the state folder, its snapshots."""

from __future__ import annotations

import json
from pathlib import Path
from typing import TYPE_CHECKING

from stream.errors import UsageError

if TYPE_CHECKING:
    from stream.settings import Settings

__all__ = ["DEFAULT_CONFIG", "settings_from", "state_folder"]

DEFAULT_CONFIG = Path("bedload.toml")
"""Read where no --config is given and it is there."""


def settings_from(config: Path | None, changes: list[str] | None, state: Path | None = None) -> Settings:
    """Settings of the file, the environment and `--set`; `--state` is seen from the working folder.

    Raises UsageError where there is nothing to read settings from; what `stream.settings.load` raises.
    """
    from stream.settings import load

    overrides = list(changes or ())
    if config is None and DEFAULT_CONFIG.exists():
        config = DEFAULT_CONFIG
    if config is None and not overrides:
        raise UsageError(
            f"no {DEFAULT_CONFIG} here: give --config FILE, or write one with `bedload init --sample LOG`"
        )
    if state is not None:
        overrides.append(f"state.folder={json.dumps(str(state.absolute()))}")
    return load(config, overrides)


def state_folder(config: Path | None, state: Path | None) -> Path:
    """The state folder that a command without other settings is about.

    Raises UsageError where neither option nor a settings file names one.
    """
    if state is not None:
        return state
    settings = settings_from(config, None)
    return settings.resolve(settings.state.folder)
