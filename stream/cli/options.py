"""The options that commands share, each declared once with its help."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

import typer

__all__ = ["AcceptSettings", "AsJson", "AsJsonLines", "Changes", "Config", "Name", "StateFolder"]

Config = Annotated[
    Path | None,
    typer.Option("--config", metavar="FILE", help="Settings file (TOML); bedload.toml by default."),
]
Changes = Annotated[
    list[str] | None,
    typer.Option(
        "--set",
        metavar="SECTION.KEY=VALUE",
        help="Overrides one setting of the file; may be given many times.",
    ),
]
StateFolder = Annotated[
    Path | None,
    typer.Option("--state", metavar="FOLDER", help="State folder, instead of the one in the settings."),
]
Name = Annotated[
    str | None,
    typer.Option("--snapshot", metavar="NAME", help="Snapshot to read; the newest whole one by default."),
]
AsJson = Annotated[bool, typer.Option("--json", help="One JSON document on standard output.")]
AsJsonLines = Annotated[
    bool, typer.Option("--json", help="JSON Lines on standard output, one document a message.")
]
AcceptSettings = Annotated[
    bool,
    typer.Option(
        "--accept-settings",
        help="Go on with other settings than before: [learner], bounds of [state], more fields or crosses.",
    ),
]
