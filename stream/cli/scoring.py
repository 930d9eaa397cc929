"""The commands `score` and `explain`: messages and a snapshot in, scores and their reasons out."""

from __future__ import annotations

import glob
import json
import os
import sys
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer

from stream.cli.compiling import note_compiling
from stream.cli.inputs import settings_from
from stream.cli.options import AsJsonLines, Config, Name, StateFolder
from stream.cli.screen import Column, cells, count, decimal, heading, line, note, visible
from stream.cli.stored import read_snapshot_of
from stream.errors import InputMissing

if TYPE_CHECKING:
    from stream.runs.explaining import Explanation
    from stream.runs.scoring import Scored, Scorer

__all__ = ["add_to", "log_pattern", "show_explanation", "show_scores"]

Logs = Annotated[
    list[str] | None,
    typer.Argument(metavar="LOG", help="JSON Lines files; standard input where none is given."),
]

SCORE_COLUMNS = (Column("id", 40, right=False), Column("probability", 11), Column("margin", 9))
DIGITS = 4
TEXTS = 49
"""Cells that field and token have together beside the numbers."""
NUMBERS = (
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
    from stream.runs.explaining import explain as run_explain

    scorer = _scorer(logs, config, state, name)
    wanted = frozenset(only or ())
    shown = 0
    for explanation in run_explain(scorer, wanted):
        if as_json:
            sys.stdout.write(_compact(explanation.to_json()) + "\n")
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
        numbers = (decimal(scored.probability), decimal(scored.margin, DIGITS, True))
        print(line(SCORE_COLUMNS, [_id_text(scored.id), *numbers]))


def show_explanation(explanation: Explanation) -> None:
    """Prints the table of one message.

    Its effects are rounded, and its margins are sums of what is printed, so that each row adds up by
    hand; the row `rounding` brings them to the margin, which is rounded only once.
    """
    columns = _columns(explanation)
    print(f"message {_id_text(explanation.id)}")
    print(heading(columns))
    units = _units(explanation.intercept)
    _row(columns, "intercept", "", "", "", None, units)
    for title, effects in (
        ("towards yes", explanation.towards_yes),
        ("towards no", explanation.towards_no),
    ):
        if effects:
            print(title)
        for effect in effects:
            units += _units(effect.effect)
            numbers = (decimal(effect.value, DIGITS), decimal(effect.weight, DIGITS, True))
            _row(columns, f"  {effect.field}", effect.token, *numbers, _units(effect.effect), units)
    _row(columns, "rounding", "", "", "", _units(explanation.margin) - units, _units(explanation.margin))
    _row(columns, "margin", "", "", "", None, _units(explanation.margin))
    print(f"probability {decimal(explanation.probability)}")
    print(
        f"{count(explanation.zero_or_unseen)} of {count(explanation.tokens)} tokens have weight zero "
        "or were never seen"
    )


def _columns(explanation: Explanation) -> tuple[Column, ...]:
    """Field and token as wide as usual; a long field name takes room that the tokens leave."""
    effects = [*explanation.towards_yes, *explanation.towards_no]
    longest_field = max((cells(visible(effect.field)) + 2 for effect in effects), default=0)
    longest_token = max((cells(visible(effect.token)) for effect in effects), default=0)
    field = max(17, min(longest_field, TEXTS - min(longest_token, TEXTS // 2)))
    return (Column("", field, right=False), Column("token", TEXTS - field, right=False), *NUMBERS)


def _row(
    columns: tuple[Column, ...],
    field: str,
    token: str,
    value: str,
    weight: str,
    effect: int | None,
    margin: int,
) -> None:
    texts = [field, token, value, weight, "" if effect is None else _signed(effect), _signed(margin)]
    print(line(columns, texts))


def _compact(document: dict[str, Any]) -> str:
    """As `score --json` writes its lines."""
    return json.dumps(document, ensure_ascii=False, allow_nan=False, separators=(",", ":"))


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
    paths = [log_pattern(text) for text in logs or ["-"]]
    scorer = Scorer(read_snapshot_of(config, state, name), paths, settings)
    note_compiling("rows")
    return scorer


def log_pattern(text: str, without: str = "to read standard input") -> str:
    """A file's name as a pattern that finds it alone; others as they are. InputMissing without any file."""
    if text == "-" or glob.glob(text):
        return text
    if os.path.exists(text):
        return glob.escape(text)
    raise InputMissing(f"{text}: no such log: correct the name, or leave it out {without}")


def _tell_rejects(scorer: Scorer) -> None:
    sys.stdout.flush()
    scorer.check_rejects()
    if scorer.rejected:
        note(f"bedload: {visible(scorer.rejects_told())}")
