"""The command `simulate`: settings of an invented feed in, a log or topic with known truth out."""

from __future__ import annotations

from collections.abc import Callable
from contextlib import ExitStack, closing
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any, TypeVar

import typer

from stream.cli.exits import INTERRUPTED
from stream.cli.options import AsJsonLines
from stream.cli.outputs import check_output
from stream.cli.screen import count, note, progress_bar, share
from stream.errors import BadSettings, BedloadError, UsageError

if TYPE_CHECKING:
    from simulator import CourierFeed, Faults, Pace, Truth

__all__ = ["add_to", "feed_of"]

Advance = Callable[[int, int], None]
Made = TypeVar("Made")
STANDARD_OUTPUT = "standard output"


def add_to(app: typer.Typer) -> None:
    """Adds the command of this file to `app`."""
    app.command()(simulate)


def simulate(
    out: Annotated[
        Path | None,
        typer.Option(
            "--out",
            metavar="FILE",
            help="Log to write, never overwritten; .gz, .zst: compressed; -: standard output.",
        ),
    ] = None,
    topic: Annotated[
        str | None, typer.Option("--topic", metavar="NAME", help="Topic to write to instead; never made.")
    ] = None,
    servers: Annotated[
        list[str] | None,
        typer.Option("--servers", metavar="HOST:PORT", help="Brokers of the topic; may be given many times."),
    ] = None,
    config: Annotated[
        Path | None,
        typer.Option("--config", metavar="FILE", help="Settings whose [feed] says how to reach the brokers."),
    ] = None,
    messages: Annotated[int, typer.Option("--messages", metavar="N", help="How many messages.")] = 100_000,
    seed: Annotated[int, typer.Option("--seed", metavar="N", help="Same seed, same bytes.")] = 0,
    scenario: Annotated[
        str,
        typer.Option(
            "--scenario",
            metavar="NAME",
            help="One of steady, sudden-change, slow-drift, base-rate-shift, seasonal, new-vocabulary, "
            "rare-tokens, duplicated-tokens, collisions, label-noise.",
        ),
    ] = "steady",
    changes: Annotated[
        list[str] | None,
        typer.Option(
            "--set", metavar="KEY=VALUE", help="Another setting of the feed: see docs/simulator.md."
        ),
    ] = None,
    rate: Annotated[
        float | None, typer.Option("--rate", metavar="N", help="Messages a second; without it, flat out.")
    ] = None,
    faults: Annotated[
        list[str] | None,
        typer.Option(
            "--fault",
            metavar="NAME=SHARE",
            help="Of messages: duplicates, reordering, malformed, gaps; of outcomes: lost_outcomes, "
            "repeated_outcomes. May be given many times.",
        ),
    ] = None,
    outcomes: Annotated[
        str | None,
        typer.Option(
            "--outcomes",
            metavar="PLACE",
            help="Keep outcomes out of the messages and write them, when they are known, to this file; with "
            "--topic, to this topic.",
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
    places = _Places(out, topic, tuple(servers or ()), config, outcomes, truth, probabilities)
    places.check(as_json)
    from stream.runs.stopping import stop_on_signal

    feed, chosen = feed_of(messages, seed, scenario, changes or []), faults_of(faults or [], outcomes)
    with progress_bar("simulating") as progress:

        def advance(done: int, whole: int) -> None:
            progress(done / whole, done)

        if rate is None and topic is None:  # a log that gets its name when it is whole: a stop leaves nothing
            drawn = _to_files(feed, chosen, pace_of(None, lambda: False), places, advance)
        else:
            with stop_on_signal() as came:
                pace = pace_of(rate, lambda: bool(came))
                drawn = (_to_topic if topic else _to_files)(feed, chosen, pace, places, advance)
    if not as_json:
        places.tell(drawn)
    if drawn.messages < messages:
        note(f"bedload: stopped after {count(drawn.messages)} of {count(messages)} messages; each is whole")
        raise typer.Exit(INTERRUPTED)


@dataclass(frozen=True, slots=True)
class _Places:
    """Where everything goes, as the options say."""

    log: Path | None
    topic: str | None
    servers: tuple[str, ...]
    config: Path | None
    outcomes: str | None
    truth: Path | None
    probabilities: Path | None

    def check(self, as_json: bool) -> None:
        """Raises UsageError for options that do not fit, and what `check_output` raises."""
        if (self.log is not None) + (self.topic is not None) + as_json != 1:
            raise UsageError(
                "give one of --out FILE (a log in a file), --topic NAME (a topic of a cluster) and --json "
                "(messages on standard output)"
            )
        cluster = bool(self.servers) or self.config is not None
        if self.topic is not None and not cluster:
            raise UsageError("--topic needs --servers HOST:PORT, or --config FILE whose [feed] names them")
        if self.topic is None and cluster:
            raise UsageError("--servers and --config say where a --topic is; without one they mean nothing")
        outcomes = None if self.outcomes is None or self.topic is not None else Path(self.outcomes)
        files = [
            (self.log, "--out"),
            (outcomes, "--outcomes"),
            (self.truth, "--truth"),
            (self.probabilities, "--probabilities"),
        ]
        named = [(path, option) for path, option in files if path is not None and str(path) != "-"]
        for path, option in named:
            check_output(path, option, new=True)
        for i, (path, option) in enumerate(named):
            for other, its in named[i + 1 :]:
                if path.absolute() == other.absolute():
                    raise UsageError(f"{option} and {its} are both {path}; give one of them another place")

    def tell(self, drawn: Truth) -> None:
        """Says what was written and where the truth is; on standard error where lines are on the output."""
        log, late = _named(self.log), None if self.topic else _named(self.outcomes)
        truth = _named(self.truth) or (f"{log}.truth.json" if log not in (None, STANDARD_OUTPUT) else None)
        written_to = (log, late, truth, _named(self.probabilities))
        say = note if STANDARD_OUTPUT in written_to else print
        where = f"the truth is in {truth}" if truth else "the truth is in no file: --truth FILE keeps it"
        if truth == STANDARD_OUTPUT:
            where = f"the truth is on {truth}"
        say(
            f"{log or f'topic {self.topic}'}: {count(drawn.messages)} messages, "
            f"{share(drawn.redelivered_share)} redelivered, {count(drawn.words)} words; {where}"
        )
        faults = {**drawn.records, "malformed": sum(drawn.records["malformed"].values())}
        written = faults.pop("written")
        if any(faults.values()):
            say(
                f"on the way: {count(faults['missing'])} missing, {count(faults['malformed'])} malformed, "
                f"{count(faults['duplicates'])} duplicates, {count(faults['reordered'])} behind a later one; "
                f"{count(written)} records written"
            )
        if drawn.outcomes is not None:
            told = {name: count(value) for name, value in drawn.outcomes.items()}
            waiting = f", {told['waiting']} not known yet" if drawn.outcomes["waiting"] else ""
            say(
                f"{late or self.outcomes}: {told['written']} outcomes, {told['lost']} lost, "
                f"{told['repeated']} repeated{waiting}"
            )


def _named(place: Path | str | None) -> str | None:
    """A file as people call it."""
    return None if place is None else STANDARD_OUTPUT if str(place) == "-" else str(place)


def _to_files(feed: CourierFeed, faults: Faults, pace: Pace, places: _Places, advance: Advance) -> Truth:
    from simulator import write_log

    return write_log(
        feed,
        "-" if places.log is None else places.log,
        truth_path=places.truth,
        probability_path=places.probabilities,
        outcome_path=places.outcomes,
        faults=faults,
        pace=pace,
        progress=advance,
    )


def _to_topic(feed: CourierFeed, faults: Faults, pace: Pace, places: _Places, advance: Advance) -> Truth:
    from simulator.log_file import FileSink, open_log
    from simulator.writing import write_feed
    from stream.cli.topic_sink import TopicSink, cluster_of
    from stream.topics import Publisher, Secrets

    assert places.topic is not None
    settings = cluster_of(places.config, places.servers, places.topic)
    with ExitStack() as kept:
        opened = [
            None if path is None else kept.enter_context(open_log(path))
            for path in (places.probabilities, places.truth)
        ]
        publisher = Publisher(settings.feed, Secrets(settings), "the topics of --topic and --outcomes")
        kept.enter_context(closing(publisher))
        sink = TopicSink(publisher, places.topic, places.outcomes, FileSink(None, None, opened[0]))
        truth = write_feed(feed, sink, faults, pace, advance)
        sink.flush()
        if opened[1] is not None:
            opened[1].write(truth.to_json().encode())
    return truth


def feed_of(
    messages: int,
    seed: int,
    scenario: str,
    changes: list[str],
    *,
    said: tuple[str, str] = ("simulate", "--set"),
) -> CourierFeed:
    """The feed that the options mean. `said`: whose words these are, and the option of the `changes`.

    Raises UsageError for an option of its own and BadSettings for `changes`, or for what does not fit
    together, with the key, its value and what is allowed.
    """
    from dataclasses import fields

    from simulator import CourierFeed
    from simulator.feed import NotAllowed

    options: dict[str, Any] = {"messages": messages, "seed": seed, "scenario": scenario}
    kinds = {field.name: str(field.type) for field in fields(CourierFeed) if field.name not in options}
    given = _numbers(said[1], changes, kinds, BadSettings)
    try:
        return CourierFeed(**options, **given)
    except NotAllowed as error:
        if error.setting in options:
            raise UsageError(f"--{error.setting}: {error}") from None
        raise BadSettings(f"{said[1]}: {error}") from None
    except ValueError as error:
        raise BadSettings(f"{said[0]}: {error}") from None


def faults_of(shares: list[str], outcomes: str | None) -> Faults:
    """The faults that the options mean. Raises UsageError for those that cannot be, with what is allowed, and
    for faults of outcomes that stand in the messages."""
    from dataclasses import fields

    from simulator import Faults

    kinds = {field.name: str(field.type) for field in fields(Faults)}
    faults = _made("--fault", lambda: Faults(**_numbers("--fault", shares, kinds, UsageError)))
    if faults.in_outcomes and outcomes is None:
        raise UsageError("lost and repeated outcomes need --outcomes PLACE: else they stand in the messages")
    return faults


def pace_of(rate: float | None, stopped: Callable[[], bool]) -> Pace:
    """The pace of this rate. Raises UsageError for a rate that cannot be."""
    from simulator import Pace

    return _made("--rate", lambda: Pace(rate, stopped))


def _numbers(
    place: str, texts: list[str], kinds: dict[str, str], wrong: type[BedloadError]
) -> dict[str, Any]:
    """Values by name of texts NAME=VALUE; raises `wrong` for what is none, told as of `place`."""
    given: dict[str, Any] = {}
    for text in texts:
        name, _, value = text.partition("=")
        if name not in kinds:
            raise wrong(f"{place} {text}: there is no {name}; there are {', '.join(kinds)}")
        try:
            given[name] = int(value) if kinds[name] == "int" else float(value)
        except ValueError:
            kind = "a whole number" if kinds[name] == "int" else "a number"
            raise wrong(f"{place} {text}: {name} must be {kind}") from None
    return given


def _made(option: str, make: Callable[[], Made]) -> Made:
    """What `make` gives, its ValueError told as UsageError of `option`."""
    try:
        return make()
    except ValueError as error:
        raise UsageError(f"{option}: {error}") from None
