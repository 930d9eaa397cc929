"""The commands over a state folder, `snapshots` and `checkpoints`: names in, what is stored out."""

from __future__ import annotations

from collections.abc import Iterable
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer

from stream.cli.comparing import comparison_json, show_comparison
from stream.cli.inputs import DEFAULT_CONFIG, settings_from, state_folder
from stream.cli.options import AsJson, Config, Name, StateFolder
from stream.cli.outputs import check_output
from stream.cli.screen import Column, count, decimal, note, share, show_json, show_table, visible
from stream.errors import BadData, InputMissing, UsageError

if TYPE_CHECKING:
    from stream.snapshots import Snapshot, SnapshotEntry, Snapshots

__all__ = ["add_to", "read_snapshot_of", "show_weights", "weight_rows"]

snapshots = typer.Typer(name="snapshots", help="The sparse weights for readers: what is there, what changed.")
checkpoints = typer.Typer(
    name="checkpoints", help="The whole state to resume from: what is there, going back."
)

Most = Annotated[
    int, typer.Option("--most", min=0, metavar="N", help="Rows of each table; 0 for all of them.")
]
OneName = Annotated[str, typer.Argument(metavar="NAME", help="Name as `list` shows it, or its number.")]


def add_to(app: typer.Typer) -> None:
    """Adds the commands of this file to `app`."""
    for group in (snapshots, checkpoints):
        app.add_typer(group)


@snapshots.command("list")
def list_snapshots(config: Config = None, state: StateFolder = None, as_json: AsJson = False) -> None:
    """List the snapshots, newest first."""
    entries = _stored(config, state).list()
    if as_json:
        show_json({"snapshots": [_entry_json(entry) for entry in entries]})
        return
    columns = [
        Column("snapshot", right=False),
        Column("learned"),
        Column("non-zeros"),
        Column("log loss"),
        Column("kB"),
        Column("", right=False),
    ]
    show_table(columns, [_entry_cells(entry) for entry in entries])
    _show_troubles(entry.trouble for entry in entries)


@snapshots.command()
def show(
    config: Config = None,
    state: StateFolder = None,
    name: Name = None,
    most: Most = 30,
    as_json: AsJson = False,
) -> None:
    """Show the weights by name, with their share of messages."""
    snapshot = read_snapshot_of(config, state, name)
    if as_json:
        show_json(_snapshot_json(snapshot, most))
        return
    weights = snapshot.weights
    print(
        f"{snapshot.path.name}: {count(len(weights))} non-zero weights after {count(weights.learned)} "
        f"learned messages, intercept {decimal(weights.intercept, 4, signed=True)}"
    )
    show_weights(snapshot, most)


@snapshots.command()
def compare(
    old: Annotated[str | None, typer.Argument(metavar="OLD", help="The one before the newest.")] = None,
    new: Annotated[str | None, typer.Argument(metavar="NEW", help="The newest.")] = None,
    config: Config = None,
    state: StateFolder = None,
    most: Most = 10,
    as_json: AsJson = False,
) -> None:
    """Tell what changed between two snapshots.

    What entered, left, flipped its sign and moved most."""
    from stream.snapshots import compare as compare_weights
    from stream.snapshots import read_snapshot

    stored = _stored(config, state)
    before, after = _two(stored, old, new)
    first, second = read_snapshot(before), read_snapshot(after)
    limit = most or len(first.weights) + len(second.weights)
    found = compare_weights(first.weights, second.weights, limit)
    if as_json:
        show_json(comparison_json(before.name, after.name, found))
        return
    show_comparison(before.name, after.name, found)


@snapshots.command()
def check(config: Config = None, state: StateFolder = None, as_json: AsJson = False) -> None:
    """Verify every snapshot; exit 65 where one is broken."""
    report = _stored(config, state).check()
    if as_json:
        show_json({"snapshots": [{"name": name, "trouble": trouble} for name, trouble in report]})
    else:
        for name, trouble in report:
            print(f"{name}: {'whole' if trouble is None else visible(trouble)}")
    if any(trouble is not None for _, trouble in report):
        raise typer.Exit(BadData.exit_code)


@snapshots.command()
def export(
    out: Annotated[Path, typer.Option("--out", metavar="FILE", help="File to write; replaced if there.")],
    format: Annotated[
        str | None,
        typer.Option(
            "--format", metavar="FORMAT", help="csv, parquet or json; by the ending of the file, else csv."
        ),
    ] = None,
    config: Config = None,
    state: StateFolder = None,
    name: Name = None,
    as_json: AsJson = False,
) -> None:
    """Write address, name and weight for other tools.

    Sorted by address."""
    from stream.snapshots import export as export_weights

    format = _format_of(out, format)
    check_output(out)
    snapshot = read_snapshot_of(config, state, name)
    export_weights(snapshot.weights, out, format)
    if as_json:
        document = {"snapshot": snapshot.path.name, "out": str(out), "format": format}
        show_json({**document, "nnz": len(snapshot.weights)})
    else:
        print(f"{out}: {count(len(snapshot.weights))} weights of {snapshot.path.name} as {format}")


def _format_of(out: Path, format: str | None) -> str:
    """The format that was asked for, or that the file's ending means. Raises UsageError where they differ."""
    ending = out.suffix.lower().removeprefix(".")
    known = ending in ("csv", "parquet", "json")
    if format is not None and known and format != ending:
        raise UsageError(f"--format {format} and the ending of {out} differ: leave --format out, or rename")
    return format or (ending if known else "csv")


@snapshots.command()
def prune(
    config: Config = None,
    state: StateFolder = None,
    keep: Annotated[
        int | None,
        typer.Option("--keep", min=1, metavar="N", help="Newest ones to keep, instead of the setting."),
    ] = None,
    as_json: AsJson = False,
) -> None:
    """Remove old snapshots; pinned ones and the one in use stay."""
    from stream.runs.rollback import held
    from stream.snapshots import Snapshots

    folder = state_folder(config, state)
    with held(folder) as place:
        removed = Snapshots(place.snapshots, keep or _keep_setting(config)).prune()
    if as_json:
        show_json({"removed": list(removed)})
    else:
        print(f"removed {count(len(removed))}" + "".join(f"\n  {name}" for name in removed))


@snapshots.command()
def pin(
    name: OneName,
    config: Config = None,
    state: StateFolder = None,
    off: Annotated[bool, typer.Option("--off", help="Let it be pruned again.")] = False,
    as_json: AsJson = False,
) -> None:
    """Keep a snapshot from being pruned."""
    stored = _stored(config, state)
    (stored.unpin if off else stored.pin)(name)
    if as_json:
        show_json({"snapshot": stored.find(name).name, "pinned": not off})
    else:
        print(f"{stored.find(name).name} is {'no longer ' if off else ''}pinned")


@snapshots.command()
def use(
    name: Annotated[
        str | None, typer.Argument(metavar="NAME", help="Left out: the newest whole one, as by default.")
    ] = None,
    config: Config = None,
    state: StateFolder = None,
    as_json: AsJson = False,
) -> None:
    """Choose the snapshot that readers take, to roll back or forth."""
    stored = _stored(config, state)
    stored.use(name)
    chosen = stored.in_use()
    if as_json:
        show_json({"in_use": chosen})
    else:
        print(f"readers take {chosen or 'the newest whole snapshot'} from now on")


@checkpoints.command("list")
def list_checkpoints(config: Config = None, state: StateFolder = None, as_json: AsJson = False) -> None:
    """List the checkpoints, newest first, each one verified."""
    from stream.checkpoints import Checkpoints

    folder = state_folder(config, state)
    # Beside a run that removes old ones, what is gone by now is no longer an entry.
    entries = [e for e in Checkpoints(folder / "checkpoints", keep=1).list() if e.path.exists()]
    if as_json:
        names = ("name", "messages", "size_bytes", "trouble")
        show_json({"checkpoints": [{key: getattr(entry, key) for key in names} for entry in entries]})
        return
    columns = [Column("checkpoint", right=False), Column("messages"), Column("kB"), Column("", right=False)]
    show_table(
        columns,
        [[e.name, count(e.messages), _kilobytes(e.size_bytes), _damaged(e.trouble)] for e in entries],
    )
    _show_troubles(e.trouble for e in entries)


@checkpoints.command()
def restore(name: OneName, config: Config = None, state: StateFolder = None, as_json: AsJson = False) -> None:
    """Go back to an older checkpoint; later ones are set aside, not removed."""
    from stream.runs.rollback import restore as go_back

    done = go_back(state_folder(config, state), name)
    if as_json:
        show_json(
            {
                "checkpoint": done.checkpoint.name,
                "set_aside": [str(path) for path in done.moved],
                "snapshots_renamed": dict(done.renamed),
            }
        )
        return
    print(f"{done.checkpoint.name} is the newest checkpoint now; `work` and `replay --resume` go on from it")
    for path in done.moved:
        print(f"  set aside: {path}")
    for old, new in done.renamed:
        print(f"  snapshot {old} is now {new}")


def read_snapshot_of(config: Path | None, state: Path | None, name: str | None) -> Snapshot:
    """The snapshot that the options name (a / in `name`: its folder), read whole; newer broken ones are named
    on standard error."""
    if name is not None and "/" in name:
        from stream.snapshots import read_snapshot

        return read_snapshot(Path(name))
    snapshot = _stored(config, state).load(name)
    for trouble in snapshot.passed_over:
        note(f"bedload: passed over a broken snapshot: {trouble}")
    return snapshot


def weight_rows(snapshot: Snapshot, most: int) -> list[dict[str, Any]]:
    """The `most` (0: all) strongest weights, strongest first, ties by address."""
    import numpy as np

    from stream.token_names import field_and_token

    weights = snapshot.weights
    order = np.argsort(-np.abs(weights.values), kind="stable")[: most or None]
    rows = []
    for i in order.tolist():
        field, token = field_and_token(weights.names[i])
        rows.append(
            {
                "address": int(weights.addresses[i]),
                "field": field,
                "token": token,
                "weight": float(weights.values[i]),
                "messages": float(weights.messages[i]),
                "share": float(weights.messages[i]) / weights.learned if weights.learned else None,
            }
        )
    return rows


def show_weights(snapshot: Snapshot, most: int) -> None:
    """Prints the strongest weights as a table."""
    columns = [
        Column("field", right=False),
        Column("token", right=False),
        Column("weight"),
        Column("of messages"),
    ]
    rows = weight_rows(snapshot, most)
    show_table(
        columns, [[r["field"], r["token"], decimal(r["weight"], 4, True), share(r["share"])] for r in rows]
    )
    if len(rows) < len(snapshot.weights):
        print(f"and {count(len(snapshot.weights) - len(rows))} weaker ones")


def _stored(config: Path | None, state: Path | None) -> Snapshots:
    from stream.snapshots import Snapshots

    folder = state_folder(config, state)
    if not folder.is_dir():
        raise InputMissing(f"{folder}: no such state folder; `bedload work` and `bedload replay` make one")
    return Snapshots(folder / "snapshots", keep=1)


def _keep_setting(config: Path | None) -> int:
    from stream.settings import State

    if config is None and not DEFAULT_CONFIG.exists():
        return State().keep_snapshots
    return settings_from(config, None).state.keep_snapshots


def _two(stored: Snapshots, old: str | None, new: str | None) -> tuple[Path, Path]:
    """The folders of the snapshots to compare; by default the newest and the one before it."""
    if old is not None and new is not None:
        return stored.find(old), stored.find(new)
    names = [entry.name for entry in stored.list() if entry.trouble is None]
    if len(names) < 2:
        raise InputMissing(f"{stored.folder}: comparing takes two whole snapshots, there are {len(names)}")
    return stored.find(old or names[1]), stored.find(names[0])


def _entry_json(entry: SnapshotEntry) -> dict[str, Any]:
    return {
        "name": entry.name,
        "path": str(entry.path),
        "messages": entry.messages,
        "learned": entry.manifest.get("learned"),
        "nnz": entry.manifest.get("nnz"),
        "metrics": entry.manifest.get("metrics"),
        "size_bytes": entry.size_bytes,
        "pinned": entry.pinned,
        "in_use": entry.in_use,
        "trouble": entry.trouble,
    }


def _entry_cells(entry: SnapshotEntry) -> list[str]:
    marks = [_damaged(entry.trouble), "in use" if entry.in_use else "", "pinned" if entry.pinned else ""]
    return [
        entry.name,
        count(entry.manifest.get("learned")),
        count(entry.manifest.get("nnz")),
        decimal(entry.manifest.get("metrics", {}).get("log_loss")),
        _kilobytes(entry.size_bytes),
        ", ".join(mark for mark in marks if mark),
    ]


def _damaged(trouble: str | None) -> str:
    return "damaged" if trouble else ""


def _show_troubles(troubles: Iterable[str | None]) -> None:
    """Prints what is wrong below the table, whole however long it is."""
    for trouble in filter(None, troubles):
        print(visible(trouble))


def _kilobytes(size: int) -> str:
    return count(-(-size // 1000))


def _snapshot_json(snapshot: Snapshot, most: int) -> dict[str, Any]:
    weights = snapshot.weights
    return {
        "snapshot": str(snapshot.path),
        "messages": snapshot.messages,
        "learned": weights.learned,
        "intercept": weights.intercept,
        "nnz": len(weights),
        "metrics": snapshot.about.metrics,
        "calibration": snapshot.about.calibration,
        "settings": snapshot.about.settings,
        "weights": weight_rows(snapshot, most),
    }
