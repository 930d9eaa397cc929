"""The command `converge`: a scenario or a log in, how near learners come to batch fits of it out."""

from __future__ import annotations

import shlex
import sys
import tempfile
from collections.abc import Callable
from dataclasses import dataclass
from enum import StrEnum
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any, cast

import typer

from stream.cli.compiling import note_compiling
from stream.cli.convergence import show_convergence
from stream.cli.inputs import settings_from
from stream.cli.options import AsJson, Changes, Config, size_of
from stream.cli.outputs import check_output
from stream.cli.scoring import log_pattern
from stream.cli.screen import show_json, stage_bar
from stream.cli.simulating import feed_of
from stream.errors import BadData, UsageError

if TYPE_CHECKING:
    from simulator import CourierFeed
    from stream.runs.converging.job import Job, Known, Wanted
    from stream.settings import Settings

__all__ = ["add_to"]

STEADY = "steady"
AVERAGED = "averaged"
METHODS = ("ftrl", "truncated-gradient")
RATES = {"ftrl": 0.2, "truncated-gradient": 0.005}
"""Learning rates on a courier feed: the best of a grid (docs/proof.md)."""
LEARNED, FRESH = 100_000, 50_000
FEWEST_IN_WINDOW = 100
HIGHEST_STRENGTH = 1e9
IN_OPTIONS = {"messages": "--messages (and --fresh)", "seed": "--seed"}
IN_LEARNERS = dict.fromkeys(("learner.method", "learner.averaging"), "--learner METHOD[:RATE][:averaged]")
FRESH_SHARE = 5
"""Of a log, one message in so many is left to be scored only, or FRESH where that is fewer."""


class Solver(StrEnum):
    """Libraries that make the batch fits."""

    liblinear = "liblinear"
    saga = "saga"
    skglm = "skglm"


def add_to(app: typer.Typer) -> None:
    """Adds the command to `app`."""
    app.command()(converge)


def converge(
    logs: Annotated[
        list[str] | None,
        typer.Argument(metavar="LOG", help="JSON Lines files of your own, instead of a scenario."),
    ] = None,
    scenario: Annotated[
        str | None,
        typer.Option(
            "--scenario", metavar="NAME", help="Invented stream: see docs/simulator.md; steady by default."
        ),
    ] = None,
    messages: Annotated[
        int | None,
        typer.Option(
            "--messages",
            min=100,
            metavar="N",
            help=f"How many messages to learn; {LEARNED:,} of a scenario, all of a log but the fresh ones.",
        ),
    ] = None,
    fresh: Annotated[
        int | None,
        typer.Option(
            "--fresh",
            min=1,
            metavar="N",
            help=f"How many messages after them to score only; {FRESH:,}, of a log a fifth at most.",
        ),
    ] = None,
    seed: Annotated[
        int | None, typer.Option("--seed", metavar="N", help="Seed of the scenario; 0 by default.")
    ] = None,
    feed: Annotated[
        list[str] | None,
        typer.Option("--feed", metavar="KEY=VALUE", help="A setting of the feed: see docs/simulator.md."),
    ] = None,
    config: Config = None,
    changes: Changes = None,
    strengths: Annotated[
        list[float] | None,
        typer.Option(
            "--strength",
            metavar="X",
            help="l1_per_example of learners and batch fits, that of the settings by default; may be given "
            "many times.",
        ),
    ] = None,
    learners: Annotated[
        list[str] | None,
        typer.Option(
            "--learner",
            metavar="METHOD[:RATE][:averaged]",
            help="ftrl or truncated-gradient, its learning rate, and whether by learner.averaging; may be "
            "given many times; one of each by default. RATE: that of the settings for their method, else "
            f"{RATES['ftrl']:g} and {RATES['truncated-gradient']:g}.",
        ),
    ] = None,
    epochs: Annotated[
        int,
        typer.Option("--epochs", min=1, metavar="N", help="A further row after so many passes; 1: none."),
    ] = 5,
    solver: Annotated[Solver, typer.Option("--batch", help="What makes the batch fits.")] = Solver.liblinear,
    cuts: Annotated[
        str | None,
        typer.Option("--at", metavar="A,B,...", help="After how many messages to compare."),
    ] = None,
    windows: Annotated[
        int,
        typer.Option(
            "--windows", min=0, metavar="N", help="Also compare window by window, for a feed that shifts."
        ),
    ] = 0,
    report: Annotated[
        Path | None,
        typer.Option("--report", metavar="FILE", help="An HTML report with the curves; replaces one there."),
    ] = None,
    memory: Annotated[str, typer.Option("--memory", metavar="SIZE", help="Memory for the log.")] = "4GB",
    as_json: AsJson = False,
) -> None:
    """Compare learners with batch fits of the same messages.

    After 1,000, 3,000, 10,000, ... messages of an invented stream, or of your own log, each learner's weights
    are held against a batch fit, by a general library, of the same messages at the same strength.
    """
    from stream.runs.converging.converge import converge as run_converge

    if logs and (scenario or feed or seed is not None):
        raise UsageError("a LOG is there already: leave --scenario, --seed and --feed out")
    _refuse_without_effect(feed or [], changes or [])
    if report is not None:
        check_output(report, "--report")
    size, at = size_of(memory, "--memory"), _cuts(cuts)
    with stage_bar() as tell, tempfile.TemporaryDirectory(prefix="bedload-converge-") as folder:
        if logs:
            stream = _of_logs(logs, settings_from(config, changes), messages, fresh, tell)
        else:
            drawn = _feed((messages or LEARNED) + (fresh or FRESH), seed, scenario, feed)
            stream = _of_scenario(drawn, fresh or FRESH, Path(folder), config, changes, tell)
        job = _job(stream, learners, strengths, at, epochs, solver, windows, size)
        for one in job.learners:
            note_compiling("ftrl" if one.method == "ftrl" else "truncated_gradient")
        found = run_converge(stream.settings, job, stream.known, about=stream.about, tell=tell)
    found["command"] = shlex.join(["bedload", *sys.argv[1:]])
    if report is not None:
        from stream.reports import write_convergence

        write_convergence(found, report)
    if as_json:
        show_json(found)
    else:
        show_convergence(found, report)


def _refuse_without_effect(feed: list[str], changes: list[str]) -> None:
    """Raises UsageError for what other options say: how long the stream is, and which learners there are."""
    for option, texts, cures in (("--feed", feed, IN_OPTIONS), ("--set", changes, IN_LEARNERS)):
        for text in texts:
            name = text.partition("=")[0]
            if name in cures:
                raise UsageError(f"{option} {text}: here {cures[name]} says that: leave it out")


def _feed(messages: int, seed: int | None, scenario: str | None, changes: list[str] | None) -> CourierFeed:
    return feed_of(messages, seed or 0, scenario or STEADY, changes or [], said=("converge", "--feed"))


@dataclass(frozen=True, slots=True)
class _Stream:
    """A log as `settings` read it: `messages` to learn, `fresh` ones after them, what is known of it."""

    settings: Settings
    known: Known | None
    messages: int
    fresh: int
    about: dict[str, Any]


def _of_scenario(
    feed: CourierFeed,
    fresh: int,
    folder: Path,
    config: Path | None,
    changes: list[str] | None,
    tell: Callable[[float, str], None],
) -> _Stream:
    """The stream, written into `folder`; read by the settings where some are named."""
    from dataclasses import asdict

    from stream.cli.scenario import courier_settings, write_stream

    log = folder / "stream.jsonl"
    if config is None:
        settings = courier_settings(log, changes or [])
    else:
        settings = _reading(settings_from(config, changes), (str(log),))
    known = write_stream(feed, log, tell)
    return _Stream(settings, known, feed.messages - fresh, fresh, {"files": [], "scenario": asdict(feed)})


def _of_logs(
    logs: list[str],
    settings: Settings,
    messages: int | None,
    fresh: int | None,
    tell: Callable[[float, str], None],
) -> _Stream:
    """The user's own log: what the options leave open is taken from its length."""
    from stream.runs.tuning.first_pass import count
    from stream.sources.files import matching_files

    if "-" in logs:
        raise UsageError(
            "converge reads the log more than once: save standard input to a file, and name that"
        )
    paths = tuple(str(Path(log_pattern(text, "for a scenario")).absolute()) for text in logs)
    settings = _reading(settings, paths)
    whole = count(settings, lambda share, done: tell(share or 0.0, "counting")).messages
    if not whole:
        raise BadData("the log has no messages: there is nothing to compare")
    fresh = fresh or min(FRESH, whole // FRESH_SHARE)
    learned = messages or whole - fresh
    if learned < 1:
        raise BadData(
            f"the log has {whole:,} messages, no more than the {fresh:,} fresh ones: give a smaller --fresh"
        )
    names = [file.name for file in matching_files(settings.feed.paths, settings.folder)]
    return _Stream(settings, None, learned, fresh, {"files": names, "scenario": None})


def _reading(settings: Settings, paths: tuple[str, ...]) -> Settings:
    """The same settings, but for the feed."""
    feed = settings.feed.model_copy(update={"kind": "log", "paths": paths})
    return settings.model_copy(update={"feed": feed})


def _job(
    stream: _Stream,
    learners: list[str] | None,
    strengths: list[float] | None,
    cuts: tuple[int, ...],
    epochs: int,
    solver: Solver,
    windows: int,
    memory_bytes: int,
) -> Job:
    from stream.runs.converging.job import Job, cuts_of

    if windows == 1 or windows > stream.messages // FEWEST_IN_WINDOW:
        raise UsageError(f"--windows {windows}: give 2 or more, of {FEWEST_IN_WINDOW} messages each at least")
    return Job(
        learners=tuple(dict.fromkeys(_wanted(text, stream) for text in learners or METHODS)),
        strengths=_strengths(strengths, stream),
        messages=stream.messages,
        fresh=stream.fresh,
        cuts=cuts_of(stream.messages, cuts),
        epochs=epochs,
        solver=solver.value,
        windows=windows,
        memory_bytes=memory_bytes,
    )


def _wanted(text: str, stream: _Stream) -> Wanted:
    """A learner that `text` names; without a rate: that of the settings if these name this method, and, as
    the default there is none for a scenario, this rate."""
    from stream.runs.converging.job import Wanted

    method, *rest = text.split(":")
    averaged = rest[-1:] == [AVERAGED]
    rate, *more = rest[: len(rest) - averaged] or [""]
    if method not in METHODS or more:
        raise UsageError(
            f"--learner {text}: give one of {', '.join(METHODS)}, then :RATE, then :{AVERAGED} if wanted"
        )
    own = stream.settings.learner
    if not rate:
        said = stream.known is None or "learning_rate" in own.model_fields_set
        of_settings = said and own.method == method
        return Wanted(cast(Any, method), own.learning_rate if of_settings else RATES[method], averaged)
    try:
        found = float(rate)
    except ValueError:
        found = 0.0
    if not 0 < found <= 1e6:
        raise UsageError(f"--learner {text}: the learning rate must be a number above 0, up to 1e6")
    return Wanted(cast(Any, method), found, averaged)


def _strengths(asked: list[float] | None, stream: _Stream) -> tuple[float, ...]:
    for strength in asked or ():
        if not 0 < strength < HIGHEST_STRENGTH:
            raise UsageError(
                f"--strength {strength:g}: give a number above 0 (without a penalty, a batch fit may have no "
                f"optimum) and below {HIGHEST_STRENGTH:g}"
            )
    found = tuple(dict.fromkeys(asked or [stream.settings.learner.l1_per_example]))
    if not found[0] > 0:
        raise UsageError("the settings have learner.l1_per_example = 0: give --strength X above 0")
    return found


def _cuts(text: str | None) -> tuple[int, ...]:
    if text is None:
        return ()
    try:
        found = tuple(int(part.replace("_", "")) for part in text.split(","))
    except ValueError:
        found = ()
    if not found or min(found) < 1:
        raise UsageError(f"--at takes whole numbers above 0 set apart by commas; got {text!r}")
    return found
