"""The command `bedload`: arguments in, an exit code out.

Importing this must stay as fast as importing typer: each command imports what it runs when it runs.
"""

from __future__ import annotations

import sys
from collections.abc import Sequence
from typing import Annotated

import typer

from stream.cli import (
    certifying,
    converging,
    demo,
    learning,
    rejecting,
    scoring,
    simulating,
    stored,
    tuning,
    working,
)
from stream.cli.exits import exit_code_of

__all__ = ["app", "main", "run"]

app = typer.Typer(
    name="bedload",
    add_completion=False,
    rich_markup_mode=None,
    pretty_exceptions_enable=False,
    context_settings={"help_option_names": ["--help", "-h"], "max_content_width": 100},
)


def _version(asked: bool) -> None:
    if asked:
        from importlib.metadata import version

        print(f"bedload {version('bedload')}")
        raise typer.Exit


@app.callback()
def bedload(
    version: Annotated[
        bool, typer.Option("--version", callback=_version, is_eager=True, help="Show the version and exit.")
    ] = False,
) -> None:
    """Learn a sparse model of a yes/no outcome from a feed of messages, in memory that stays bounded.

    Exit codes: 0 fine, 64 usage, 65 bad data, 66 input missing, 69 service unavailable, 70 bug, 73 cannot
    create, 74 input/output error, 75 state folder in use, 77 no permission, 78 bad settings or state that
    does not match them.
    """


for commands in (
    demo,
    learning,
    working,
    tuning,
    certifying,
    scoring,
    stored,
    rejecting,
    simulating,
    converging,
):
    commands.add_to(app)


def main(arguments: Sequence[str]) -> int:
    """Runs `bedload` with `arguments` (without the program's name); the exit code, 0 to 255."""

    def call() -> None:
        command = typer.main.get_command(app)
        with command.make_context("bedload", list(arguments)) as context:
            command.invoke(context)

    return exit_code_of(call)


def run() -> None:
    """Entry point of the installed command."""
    sys.exit(main(sys.argv[1:]))
