"""The command `demo`: nothing in, the whole way from an invented feed to an explained score out."""

from __future__ import annotations

import json
from collections.abc import Callable
from itertools import chain
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer

from stream.cli.compiling import note_compiling
from stream.cli.learning import WINDOW_COLUMNS, show_summary, show_window
from stream.cli.options import AsJson
from stream.cli.scoring import SCORE_COLUMNS, show_explanation, show_scores
from stream.cli.screen import Column, decimal, heading, progress_bar, share, show_json, show_table
from stream.cli.stored import weight_rows
from stream.errors import CannotCreate

if TYPE_CHECKING:
    from stream.metrics import WindowRow
    from stream.runs.result import RunResult
    from stream.settings import Settings
    from stream.snapshots import Snapshot

__all__ = ["add_to"]

NEW = 8
"""Messages kept back from learning, to be scored."""

LOG, NEW_LOG, CONFIG, TRUTH = "handoffs.jsonl", "new.jsonl", "bedload.toml", "handoffs.jsonl.truth.json"
CHANGES = ["metrics.window=10_000"]


def add_to(app: typer.Typer) -> None:
    """Adds the command of this file to `app`."""
    app.command()(demo)


def demo(
    folder: Annotated[
        Path, typer.Option("--folder", metavar="FOLDER", help="Where log, settings and state go.")
    ] = Path("demo"),
    messages: Annotated[
        int, typer.Option("--messages", min=1_000, metavar="N", help="How many messages to learn.")
    ] = 60_000,
    as_json: AsJson = False,
) -> None:
    """Simulate a small feed, learn it, show what was learned.

    A parcel courier's depot feed, all of it invented: which handoffs have to be attempted again? Shows
    the strongest weights beside the true ones, scores new messages and explains one. Each step is a
    command that works the same way on a log of your own.
    """
    from stream.runs.explaining import explain
    from stream.runs.scoring import Scorer, score
    from stream.snapshots import read_snapshot

    tell: Callable[[str], object] = (lambda text: None) if as_json else print
    note_compiling("ftrl")
    _simulate(folder, messages, tell)
    settings = _draft(folder, tell)
    result = _learn(settings, folder, as_json, tell)
    snapshot = read_snapshot(Path(result.to_json()["snapshot"]))
    weights = _weights_beside_truth(snapshot, folder)
    new = [str(folder / NEW_LOG)]
    scores = list(chain.from_iterable(score(Scorer(snapshot, new))))
    likeliest = max(scores, key=lambda scored: scored.probability or 0.0)
    explanation = next(explain(Scorer(snapshot, new), frozenset([likeliest.id])))
    if as_json:
        show_json(
            {
                "folder": str(folder),
                "replay": result.to_json(),
                "weights": weights,
                "scores": [{"id": s.id, "probability": s.probability, "margin": s.margin} for s in scores],
                "explanation": explanation.to_json(),
            }
        )
        return
    _show_weights(weights, folder)
    _step(f"score {folder / NEW_LOG} --config {folder / CONFIG}")
    print(heading(SCORE_COLUMNS))
    show_scores(scores)
    _step(f"explain {folder / NEW_LOG} --config {folder / CONFIG} --id {explanation.id}")
    show_explanation(explanation)
    print(
        "\nWeights are associations in the feed, not causes; a person decides what follows from a score."
        "\nYour own log next: bedload init --sample LOG, then bedload replay."
    )


def _simulate(folder: Path, messages: int, tell: Callable[[str], object]) -> None:
    """Writes the log, and keeps its last messages back without their outcomes."""
    from simulator import CourierFeed, write_log

    if folder.exists() and any(folder.iterdir()) and not (folder / TRUTH).exists():
        raise CannotCreate(f"{folder} holds something else: give another --folder")
    folder.mkdir(parents=True, exist_ok=True)
    log = folder / LOG
    _step(f"simulate --out {log} --messages {messages + NEW}", tell)
    with progress_bar("simulating") as progress:
        write_log(
            CourierFeed(messages=messages + NEW),
            log,
            progress=lambda done, whole: progress(done / whole, done),
        )
    lines = log.read_bytes().splitlines(keepends=True)
    log.write_bytes(b"".join(lines[:-NEW]))
    new = [{k: v for k, v in json.loads(text).items() if k != "redelivered"} for text in lines[-NEW:]]
    (folder / NEW_LOG).write_text("".join(json.dumps(message) + "\n" for message in new))
    tell(f"{log}: {messages:,} handoffs; {folder / NEW_LOG}: the {NEW} after them, outcome not known yet")
    tell(lines[0].decode().rstrip())


def _draft(folder: Path, tell: Callable[[str], object]) -> Settings:
    from stream.runs.init import draft
    from stream.settings import load

    config = folder / CONFIG
    _step(f"init --sample {folder / LOG} --out {config}", tell)
    config.write_text(draft(folder / LOG, folder), encoding="utf-8")
    settings = load(config, CHANGES, environ={})
    for field in settings.fields:
        tell(f"  {field.name}: {field.kind}")
    return settings


def _learn(settings: Settings, folder: Path, as_json: bool, tell: Callable[[str], object]) -> RunResult:
    from stream.runs.replay import replay

    _step(f"replay --config {folder / CONFIG} --fresh --set {CHANGES[0]}", tell)
    tell(heading(WINDOW_COLUMNS))

    def on_window(row: WindowRow) -> None:
        if not as_json:
            show_window(row)

    with progress_bar("learning") as progress:
        result = replay(
            settings,
            settings.resolve(settings.state.folder),
            fresh=True,
            on_window=on_window,
            progress=progress,
        )
    if not as_json:
        show_summary(result.to_json())
    return result


def _weights_beside_truth(snapshot: Snapshot, folder: Path) -> list[dict[str, Any]]:
    """The strongest weights, each with the weight that the simulator planted, 0 where it planted none."""
    truth = json.loads((folder / TRUTH).read_text())
    planted = {(row["field"], str(row["token"])): row["weight"] for row in truth["weights"]}
    rows = weight_rows(snapshot, most=16)
    return [{**row, "true_weight": planted.get((row["field"], row["token"]), 0.0)} for row in rows]


def _show_weights(weights: list[dict[str, Any]], folder: Path) -> None:
    _step(f"snapshots show --config {folder / CONFIG}")
    print("(the true weights are what the simulator planted; no other feed comes with them)")
    columns = [
        Column("field", right=False),
        Column("token", right=False),
        Column("weight"),
        Column("true weight"),
        Column("of messages"),
    ]
    show_table(
        columns,
        [
            [
                row["field"],
                row["token"],
                decimal(row["weight"], 3, True),
                decimal(row["true_weight"], 3, True),
                share(row["share"]),
            ]
            for row in weights
        ],
    )


def _step(command: str, tell: Callable[[str], object] = print) -> None:
    tell(f"\n$ bedload {command}")
