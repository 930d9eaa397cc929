"""The options that commands share, each declared once with its help."""

from __future__ import annotations

import re
from pathlib import Path
from typing import Annotated

import typer

from stream.errors import UsageError

__all__ = ["AcceptSettings", "AsJson", "AsJsonLines", "Changes", "Config", "Name", "StateFolder", "size_of"]

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
    typer.Option(
        "--snapshot",
        metavar="NAME",
        help="Snapshot to read, or its folder (./NAME); the newest whole one by default.",
    ),
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

UNITS = {"": 1, "KB": 10**3, "MB": 10**6, "GB": 10**9}


def size_of(text: str, option: str) -> int:
    """Bytes that `text` says, a number with KB, MB, GB or nothing. Raises UsageError for another text."""
    match = re.fullmatch(r"([0-9]+(?:\.[0-9]+)?) ?(|KB|MB|GB)", text.upper())
    if match is None or not float(match[1]) > 0:
        raise UsageError(
            f"{option} takes bytes, or a number with KB, MB or GB, for example 4GB; got {text!r}"
        )
    return int(float(match[1]) * UNITS[match[2]])
