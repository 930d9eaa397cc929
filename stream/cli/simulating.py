"""The command `simulate`: settings of an invented feed in, a log with known truth out."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer

from stream.cli.options import AsJsonLines
from stream.cli.outputs import check_output
from stream.cli.screen import count, progress_bar, share
from stream.errors import BadSettings, UsageError

if TYPE_CHECKING:
    from simulator import CourierFeed

__all__ = ["add_to", "feed_of"]


def add_to(app: typer.Typer) -> None:
    """Adds the command of this file to `app`."""
    app.command()(simulate)


def simulate(
    out: Annotated[
        Path | None,
        typer.Option("--out", metavar="FILE", help="Log to write, never overwritten; .gz, .zst: compressed."),
    ] = None,
    messages: Annotated[int, typer.Option("--messages", metavar="N", help="How many messages.")] = 100_000,
    seed: Annotated[int, typer.Option("--seed", metavar="N", help="Same seed, same bytes.")] = 0,
    scenario: Annotated[
        str,
        typer.Option("--scenario", metavar="NAME", help="What moves in the feed: see docs/simulator.md."),
    ] = "steady",
    changes: Annotated[
        list[str] | None,
        typer.Option(
            "--set", metavar="KEY=VALUE", help="Another setting of the feed: see docs/simulator.md."
        ),
    ] = None,
    truth: Annotated[
        Path | None,
        typer.Option("--truth", metavar="FILE", help="Where the truth goes; FILE.truth.json beside the log."),
    ] = None,
    probabilities: Annotated[
        Path | None,
        typer.Option("--probabilities", metavar="FILE", help="Also write each message's true probability."),
    ] = None,
    as_json: AsJsonLines = False,
) -> None:
    """Make an invented courier feed, with known truth."""
    if (out is None) != as_json:
        raise UsageError("give one of --out FILE (a log in a file) and --json (messages on standard output)")
    from simulator import write_log

    feed = feed_of(messages, seed, scenario, changes or [])
    for path, option in ((out, "--out"), (truth, "--truth"), (probabilities, "--probabilities")):
        if path is not None and str(path) != "-":
            check_output(path, option, new=True)
    with progress_bar("simulating") as progress:
        drawn = write_log(
            feed,
            "-" if out is None else out,
            truth_path=truth,
            probability_path=probabilities,
            progress=lambda done, all_of_them: progress(done / all_of_them, done),
        )
    if out is not None:
        print(
            f"{out}: {count(drawn.messages)} messages, {share(drawn.redelivered_share)} redelivered, "
            f"{count(drawn.words)} words; the truth is in {truth or f'{out}.truth.json'}"
        )


def feed_of(messages: int, seed: int, scenario: str, changes: list[str]) -> CourierFeed:
    """The feed that the options mean. Raises BadSettings naming the key, its value and what is allowed."""
    from dataclasses import fields

    from simulator import CourierFeed

    kinds = {field.name: field.type for field in fields(CourierFeed) if field.type != "str"}
    given: dict[str, Any] = {"messages": messages, "seed": seed, "scenario": scenario}
    for change in changes:
        name, _, text = change.partition("=")
        if name not in kinds:
            raise BadSettings(f"--set {change}: no such setting of the feed; there are {', '.join(kinds)}")
        try:
            given[name] = int(text) if kinds[name] == "int" else float(text)
        except ValueError:
            kind = "a whole number" if kinds[name] == "int" else "a number"
            raise BadSettings(f"--set {change}: {name} must be {kind}") from None
    try:
        return CourierFeed(**given)
    except ValueError as error:
        raise BadSettings(f"simulate: {error}") from None
