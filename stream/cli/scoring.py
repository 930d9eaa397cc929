"""The commands `score` and `explain`: messages and a snapshot in, scores and their reasons out."""

from __future__ import annotations

import json
import sys
from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer

from stream.cli.compiling import note_compiling
from stream.cli.inputs import settings_from
from stream.cli.options import AsJsonLines, Config, Name, StateFolder
from stream.cli.screen import Column, count, decimal, heading, line, note, visible
from stream.cli.stored import read_snapshot_of

if TYPE_CHECKING:
    from stream.runs.explaining import Explanation
    from stream.runs.scoring import Scored, Scorer

__all__ = ["add_to", "show_explanation", "show_scores"]

Logs = Annotated[
    list[str] | None,
    typer.Argument(metavar="LOG", help="JSON Lines files; standard input where none is given."),
]

SCORE_COLUMNS = (Column("id", 40, right=False), Column("probability", 11), Column("margin", 9))
DIGITS = 4
EXPLAIN_COLUMNS = (
    Column("", 17, right=False),
    Column("token", 32, right=False),
    Column("value", 8),
    Column("weight", 8),
    Column("effect", 9),
    Column("margin", 9),
)


def add_to(app: typer.Typer) -> None:
    """Adds the commands of this file to `app`."""
    app.command()(score)
    app.command()(explain)


def score(
    logs: Logs = None,
    config: Config = None,
    state: StateFolder = None,
    name: Name = None,
    as_json: AsJsonLines = False,
) -> None:
    """Score messages with a snapshot.

    Probability and margin of each, in the order of the log. With --json a rejected message has a line
    too, which says why.
    """
    from stream.runs.scoring import json_lines
    from stream.runs.scoring import score as run_score

    scorer = _scorer(logs, config, state, name)
    if not as_json:
        print(heading(SCORE_COLUMNS))
    for lines in run_score(scorer):
        if as_json:
            sys.stdout.buffer.write(json_lines(lines))
            sys.stdout.buffer.flush()
        else:
            show_scores(lines)
    _tell_rejects(scorer)


def explain(
    logs: Logs = None,
    config: Config = None,
    state: StateFolder = None,
    name: Name = None,
    only: Annotated[
        list[str] | None,
        typer.Option("--id", metavar="ID", help="Only messages with this id; may be given many times."),
    ] = None,
    as_json: AsJsonLines = False,
) -> None:
    """Say which tokens made the score of a message.

    Effects are associations in the feed that was learned, not causes; a person decides what follows.
    Tokens may be personal data.
    """
    from stream.errors import InputMissing
    from stream.runs.explaining import explain as run_explain

    scorer = _scorer(logs, config, state, name)
    wanted = frozenset(only or ())
    shown = 0
    for explanation in run_explain(scorer, wanted):
        if as_json:
            sys.stdout.write(json.dumps(explanation.to_json(), ensure_ascii=False, allow_nan=False) + "\n")
        else:
            if shown:
                print()
            show_explanation(explanation)
        shown += 1
    _tell_rejects(scorer)
    if wanted and not shown:
        ids = ", ".join(sorted(wanted))
        cure = "" if scorer.settings.message.id else "; message.id is not set, so messages have none"
        raise InputMissing(f"no message has the id {ids}{cure}")


def show_scores(lines: list[Scored]) -> None:
    """Prints rows of SCORE_COLUMNS; of a rejected message, why."""
    for scored in lines:
        if scored.rejected is not None:
            print(visible(f"rejected ({scored.rejected}): {scored.detail}"))
            continue
        cells = [_id_text(scored.id), decimal(scored.probability), decimal(scored.margin, DIGITS, True)]
        print(line(SCORE_COLUMNS, cells))


def show_explanation(explanation: Explanation) -> None:
    """Prints the table of one message.

    Its effects are rounded, and its margins are sums of what is printed, so that each row adds up by
    hand; the row `rounding` brings them to the margin, which is rounded only once.
    """
    print(f"message {_id_text(explanation.id)}")
    print(heading(EXPLAIN_COLUMNS))
    units = _units(explanation.intercept)
    _row("intercept", "", "", "", None, units)
    for title, effects in (
        ("towards yes", explanation.towards_yes),
        ("towards no", explanation.towards_no),
    ):
        print(title)
        for effect in effects:
            units += _units(effect.effect)
            numbers = (decimal(effect.value, DIGITS), decimal(effect.weight, DIGITS, True))
            _row(f"  {effect.field}", effect.token, *numbers, _units(effect.effect), units)
    _row("rounding", "", "", "", _units(explanation.margin) - units, _units(explanation.margin))
    _row("margin", "", "", "", None, _units(explanation.margin))
    print(f"probability {decimal(explanation.probability)}")
    print(
        f"{count(explanation.zero_or_unseen)} of {count(explanation.tokens)} tokens have weight zero "
        "or were never seen"
    )


def _row(field: str, token: str, value: str, weight: str, effect: int | None, margin: int) -> None:
    cells = [field, token, value, weight, "" if effect is None else _signed(effect), _signed(margin)]
    print(line(EXPLAIN_COLUMNS, cells))


def _units(number: float) -> int:
    """`number` in units of the last digit that is printed, rounded as the printed text is."""
    return int(f"{number:.{DIGITS}f}".replace(".", ""))


def _signed(units: int) -> str:
    whole, rest = divmod(abs(units), 10**DIGITS)
    return f"{'-' if units < 0 else '+'}{whole}.{rest:0{DIGITS}d}"


def _id_text(id_: object) -> str:
    return "(no id)" if id_ is None else visible(str(id_))


def _scorer(logs: list[str] | None, config: Path | None, state: Path | None, name: str | None) -> Scorer:
    from stream.runs.scoring import Scorer

    settings = None if config is None else settings_from(config, None)
    scorer = Scorer(read_snapshot_of(config, state, name), logs or ["-"], settings)
    note_compiling("rows")
    return scorer


def _tell_rejects(scorer: Scorer) -> None:
    sys.stdout.flush()
    if scorer.rejected:
        note(f"bedload: {count(scorer.rejected)} of {count(scorer.messages)} messages were rejected")
    scorer.check_rejects()
