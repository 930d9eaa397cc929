"""The commands that write settings and learn: `init`, `replay`; what they found as tables or JSON."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer

from stream.cli.compiling import note_compiling
from stream.cli.exits import INTERRUPTED
from stream.cli.inputs import DEFAULT_CONFIG, settings_from
from stream.cli.options import AcceptSettings, AsJson, Changes, Config, StateFolder
from stream.cli.outputs import check_output
from stream.cli.screen import (
    Column,
    count,
    decimal,
    heading,
    line,
    note,
    progress_bar,
    share,
    show_json,
    show_table,
    visible,
)
from stream.cli.stored import show_weights
from stream.errors import BadData, CannotCreate, UsageError

if TYPE_CHECKING:
    from stream.metrics import WindowRow
    from stream.runs.retracing import Retraced
    from stream.settings import Settings

__all__ = ["WINDOW_COLUMNS", "WindowTable", "add_to", "show_summary", "show_window", "write_new"]

WINDOW_COLUMNS = (
    Column("through", 14),
    Column("log loss", 8),
    Column("normalised entropy", 18),
    Column("AUC", 6),
    Column("calibration", 11),
    Column("non-zeros", 11),
    Column("live", 13),
)


def add_to(app: typer.Typer) -> None:
    """Adds the commands of this file to `app`."""
    app.command()(init)
    app.command()(replay)


def init(
    sample: Annotated[
        Path, typer.Option("--sample", metavar="LOG", help="JSON Lines log to look at (.gz and .zst too).")
    ],
    out: Annotated[
        Path, typer.Option("--out", metavar="FILE", help="Settings file to write; never overwritten.")
    ] = DEFAULT_CONFIG,
    as_json: AsJson = False,
) -> None:
    """Write a commented settings file that fits a sample."""
    from stream.runs.init import draft
    from stream.settings import load

    doubts: list[str] = []
    write_new(out, draft(sample, out.parent, doubts.append))
    settings = load(out, environ={})
    for doubt in doubts:
        note(f"bedload: {visible(doubt)}")
    fields = [field.name for field in settings.fields]
    if as_json:
        show_json({"settings": str(out), "label": settings.message.label, "fields": fields})
        return
    label = settings.message.label
    outcome = "no outcome found" if label is None else f"outcome `{label}`"
    print(f"{out}: {len(fields)} fields, {outcome}. Read its comments, then:")
    print("  bedload replay" + ("" if out == DEFAULT_CONFIG else f" --config {out}"))


def replay(
    config: Config = None,
    changes: Changes = None,
    state: StateFolder = None,
    resume: Annotated[
        bool, typer.Option("--resume", help="Go on from the newest whole checkpoint, if there is one.")
    ] = False,
    fresh: Annotated[
        bool, typer.Option("--fresh", help="Start anew in a used state folder; its snapshots stay.")
    ] = False,
    accept_settings: AcceptSettings = False,
    epochs: Annotated[
        int,
        typer.Option("--epochs", min=1, metavar="N", help="Passes over the log; metrics count the first."),
    ] = 1,
    journal: Annotated[
        Path | None,
        typer.Option(
            "--journal",
            metavar="FOLDER",
            help="State folder of a worker: learn again what it learned, in its order, and compare.",
        ),
    ] = None,
    as_json: AsJson = False,
) -> None:
    """Learn over a log once, in order, and leave a snapshot.

    Each message is scored before it is learned, and the metrics use only those scores. Ctrl-C leaves a
    snapshot of what was learned so far."""
    if resume and fresh:
        raise UsageError("--resume goes on and --fresh starts anew: give one of them")
    if accept_settings and journal is not None:
        raise UsageError(
            "--journal learns by the settings of the worker's state: leave --accept-settings out"
        )
    if accept_settings and not resume:
        raise UsageError("--accept-settings changes the settings of a state that goes on: give --resume")
    from stream.runs.replay import replay as run_replay

    settings = settings_from(config, changes, state)
    note_compiling(settings.learner.method)
    if journal is not None:
        _retrace(settings, journal, resume, fresh, epochs, as_json)
        return
    table = None if as_json else WindowTable()
    with progress_bar("learning") as progress:
        result = run_replay(
            settings,
            settings.resolve(settings.state.folder),
            resume=resume,
            fresh=fresh,
            accept_settings=accept_settings,
            epochs=epochs,
            on_window=_no_window if table is None else table.add,
            progress=progress,
        )
    for warning in result.warnings:
        note(f"bedload: {warning}")
    if table is None:
        show_json(result.to_json())
    elif result.resumed_from and not result.messages_read:
        print(f"nothing new since message {count(result.resumed_from)}; snapshot {result.snapshot}")
    else:
        table.begin()
        show_summary(result.to_json())
        _show_strongest(result.snapshot)
    if result.interrupted:
        cure = "" if "-" in settings.feed.paths else "; `bedload replay --resume` goes on from there"
        note(f"bedload: stopped before the end{cure}")
        raise typer.Exit(INTERRUPTED)


def _retrace(settings: Settings, worker: Path, resume: bool, fresh: bool, epochs: int, as_json: bool) -> None:
    if epochs != 1:
        raise UsageError("--journal learns what a worker learned, once: leave --epochs out")
    from stream.runs.retracing import retrace

    table = WindowTable()
    folder = settings.resolve(settings.state.folder)
    on_window = _no_window if as_json else table.add
    found = retrace(settings, folder, worker, resume=resume, fresh=fresh, on_window=on_window)
    for warning in found.run.warnings:
        note(f"bedload: {warning}")
    if as_json:
        show_json(found.to_json())
    else:
        table.begin()
        show_summary(found.run.to_json())
    if found.run.interrupted:
        note("bedload: stopped before the end; --resume goes on from there")
        raise typer.Exit(INTERRUPTED)
    if found.differences:
        raise BadData(
            f"what was learned here is not what {found.worker_checkpoint} holds; they differ in "
            f"{', '.join(found.differences)}. The feed, the settings or the release are not what they were"
        )
    if not as_json:
        print(_compared(found))


def _compared(found: Retraced) -> str:
    if found.worker_checkpoint is None:
        return "the worker has no checkpoint yet to compare with"
    return f"the same bytes as {found.worker_checkpoint}"


def _no_window(row: WindowRow) -> None:
    """Windows are inside the JSON document."""


class WindowTable:
    """Windows as they come, below a heading that waits for the first: an error before it stands alone."""

    def __init__(self) -> None:
        self._begun = False

    def begin(self) -> None:
        """Prints the heading, once."""
        if not self._begun:
            print(heading(WINDOW_COLUMNS))
        self._begun = True

    def add(self, row: WindowRow) -> None:
        """Prints a row."""
        self.begin()
        show_window(row)


def show_window(row: WindowRow) -> None:
    """Prints a row of WINDOW_COLUMNS at once."""
    print(line(WINDOW_COLUMNS, _window_cells(row.to_json())), flush=True)


def _window_cells(row: dict[str, Any]) -> list[str]:
    return [
        count(row["through"]),
        decimal(row["log_loss"]),
        decimal(row["normalised_entropy"]),
        decimal(row["auc"]),
        decimal(row["calibration_ratio"], 3),
        count(row["nnz"]),
        count(row["live"]),
    ]


def show_summary(result: dict[str, Any]) -> None:
    """Prints the end of a run: its metrics as one more row, what it read and took, slices, its snapshot."""
    print("the whole run")
    print(line(WINDOW_COLUMNS, _window_cells({**result, "through": result["messages"]})))
    print()
    if result["resumed_from"] is not None:
        print(f"resumed from message {count(result['resumed_from'])}")
    print(
        f"{count(result['messages'])} messages, {count(result['labelled'])} of them with an outcome, "
        f"{count(result['rejected'])} rejected; {count(result['tokens'])} tokens"
    )
    for reason, rejected in result["rejects_by_reason"].items():
        print(f"  rejected as {reason}: {count(rejected)}")
    kept = Path(result["snapshot"]).parent.parent / "rejects"
    if result["rejected"] and any(kept.iterdir()):
        print(f"  they are in {kept}")
    print(
        f"{decimal(result['seconds'], 1)} s, {count(round(result['messages_per_s'] or 0))} messages/s, "
        f"{count(result['peak_rss_bytes'] // 1_000_000)} MB of memory at most"
    )
    if result["auc"] is not None:
        error = result["auc_error"]
        print(f"AUC {decimal(result['auc'], 5)}, {f'within {error:.1e}' if error else 'exact'}")
    print(f"base rate {share(result['base_rate'])}")
    print(f"snapshot {result['snapshot']}")
    if result["slices"]:
        print()
        _show_slices(result["slices"])


def _show_slices(slices: dict[str, dict[str, Any]]) -> None:
    columns = [
        Column("slice", right=False),
        Column("messages"),
        Column("base rate"),
        Column("log loss"),
        Column("normalised entropy"),
        Column("AUC"),
        Column("calibration"),
    ]
    rows = [
        [
            name,
            count(found["messages"]),
            share(found["base_rate"]),
            decimal(found["log_loss"]),
            decimal(found["normalised_entropy"]),
            decimal(found["auc"]),
            decimal(found["calibration_ratio"], 3),
        ]
        for name, found in slices.items()
    ]
    show_table(columns, rows)


def _show_strongest(path: Path) -> None:
    from stream.snapshots import read_snapshot

    snapshot = read_snapshot(path)
    if len(snapshot.weights):
        print("\nstrongest weights (associations in this feed, not causes)")
        show_weights(snapshot, most=20)


def write_new(path: Path, text: str) -> None:
    """Writes a file that must not be there yet. Raises what `check_output` does."""
    check_output(path, new=True)
    try:
        with open(path, "x", encoding="utf-8") as file:
            file.write(text)
    except FileExistsError:
        raise CannotCreate(f"{path} is there already: take it away, or give another --out") from None
