"""The command `work`: settings in; a row a window while it lives, and what it found in the end, out."""

from __future__ import annotations

from typing import TYPE_CHECKING, Annotated

import typer

from stream.cli.compiling import note_compiling
from stream.cli.inputs import settings_from
from stream.cli.learning import WindowTable, show_summary
from stream.cli.options import AcceptSettings, AsJson, Changes, Config, StateFolder
from stream.cli.screen import count, show_json
from stream.errors import UsageError

if TYPE_CHECKING:
    from stream.metrics import WindowRow

__all__ = ["add_to"]


def add_to(app: typer.Typer) -> None:
    """Adds the commands of this file to `app`."""
    app.command()(work)


def work(
    config: Config = None,
    changes: Changes = None,
    state: StateFolder = None,
    until_end: Annotated[
        bool, typer.Option("--until-end", help="Stop at the end of what is there at the start.")
    ] = False,
    on_gap: Annotated[
        str,
        typer.Option(
            "--on-gap",
            metavar="WHAT",
            help="Where messages were removed before they were read: refuse to go on, or skip them.",
        ),
    ] = "refuse",
    accept_settings: AcceptSettings = False,
    as_json: AsJson = False,
) -> None:
    """Learn from a topic, or a log that grows, for as long as it lasts.

    Goes on where it was stopped or killed, without losing or doubling a message, and writes checkpoints and
    snapshots on the way. SIGTERM or Ctrl-C end it well: exit code 0."""
    if on_gap not in ("refuse", "skip"):
        raise UsageError(f"--on-gap {on_gap}: must be refuse or skip")
    from stream.runs.work import work as run_work

    settings = settings_from(config, changes, state)
    note_compiling(settings.learner.method)
    table = WindowTable()
    result = run_work(
        settings,
        settings.resolve(settings.state.folder),
        until_end=until_end,
        on_gap="skip" if on_gap == "skip" else "refuse",
        accept_settings=accept_settings,
        on_window=_no_window if as_json else table.add,
    )
    found = result.to_json()
    if as_json:
        show_json(found)
    else:
        table.begin()
        show_summary(found)
        if found["passed_over"]:
            print(f"{count(found['passed_over'])} messages were removed before they were read: passed over")


def _no_window(row: WindowRow) -> None:
    """A document has no place for windows without end."""
