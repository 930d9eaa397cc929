"""The commands over rejected messages, `rejects`: a state folder in, what was rejected and why out."""

from __future__ import annotations

from collections import Counter
from collections.abc import Iterator
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer

from stream.cli.inputs import settings_from, state_folder
from stream.cli.options import AsJson, Config, StateFolder
from stream.cli.screen import Column, count, note, show_json, show_table, visible
from stream.errors import InputMissing

if TYPE_CHECKING:
    from stream.reject_file import KeptReject

__all__ = ["add_to"]

rejects = typer.Typer(name="rejects", help="Rejected messages kept in files: which, how many, why.")


def add_to(app: typer.Typer) -> None:
    """Adds the commands of this file to `app`."""
    app.add_typer(rejects)


@rejects.command("list")
def list_rejects(
    config: Config = None,
    state: StateFolder = None,
    reason: Annotated[
        str | None, typer.Option("--reason", metavar="REASON", help="Only those rejected for this reason.")
    ] = None,
    most: Annotated[
        int, typer.Option("--most", min=0, metavar="N", help="How many, the latest; 0 for all of them.")
    ] = 30,
    as_json: AsJson = False,
) -> None:
    """List rejected messages, the latest last, without what they say."""
    kept_here = list(_kept(config, state))
    if not kept_here:
        _note_elsewhere(config, state, _counted(config, state))
    found = [kept for kept in kept_here if reason is None or kept.reason == reason]
    shown = found[-most:] if most else found
    if as_json:
        show_json({"rejects": [_facts(kept) for kept in shown], "of": len(found)})
        return
    columns = [
        Column("number"),
        Column("from", right=False),
        Column("partition"),
        Column("offset"),
        Column("reason", right=False),
        Column("detail", right=False),
    ]
    show_table(
        columns,
        [
            [count(k.number), k.file, str(k.partition), str(k.offset), k.reason, visible(k.detail)]
            for k in shown
        ],
    )
    if len(shown) < len(found):
        print(f"the latest {count(len(shown))} of {count(len(found))}; --most 0 lists all")


@rejects.command()
def counts(config: Config = None, state: StateFolder = None, as_json: AsJson = False) -> None:
    """Count rejected messages by reason, most first."""
    found = Counter(kept.reason for kept in _kept(config, state))
    if not found:
        found = _counted(config, state)
        _note_elsewhere(config, state, found)
    by_reason = dict(sorted(found.items(), key=lambda item: (-item[1], item[0])))
    if as_json:
        show_json({"rejects": found.total(), "by_reason": by_reason})
        return
    columns = [Column("reason", right=False), Column("messages")]
    show_table(columns, [[reason, count(number)] for reason, number in by_reason.items()])


@rejects.command()
def show(
    number: Annotated[int, typer.Argument(metavar="N", help="Its number, as `list` shows it.")],
    config: Config = None,
    state: StateFolder = None,
    as_json: AsJson = False,
) -> None:
    """Show one rejected message, with all that was kept of it."""
    kept = next((kept for kept in _kept(config, state) if kept.number == number), None)
    if kept is None:
        raise InputMissing(
            f"no reject number {number} is kept in {_folder(config, state)}; `bedload rejects list --most 0` "
            "lists those that are"
        )
    text = kept.line if kept.line is not None else kept.line_base64 or ""
    if as_json:
        name = "line" if kept.line is not None else "line_base64"
        show_json({**_facts(kept), name: text, "cut": kept.cut})
        return
    place = f"partition {kept.partition}, offset {count(kept.offset)}"
    print(f"number {count(kept.number)}: {visible(kept.file)}, {place}")
    print(f"{kept.reason}: {visible(kept.detail)}")
    if kept.line is None:
        print("not UTF-8; as base64:")
    print(visible(text) + (" ... (only the beginning was kept)" if kept.cut else ""))


def _kept(config: Path | None, state: Path | None) -> Iterator[KeptReject]:
    from stream.reject_file import kept_rejects

    return kept_rejects(_folder(config, state))


def _counted(config: Path | None, state: Path | None) -> Counter[str]:
    """By reason, as the newest checkpoint counts them, wherever they went."""
    from stream.checkpoints import Checkpoints

    newest = Checkpoints(_folder(config, state).parent / "checkpoints", keep=1).newest_manifest()
    return Counter() if newest is None else Counter(newest[1]["about"]["rejects"]["by_reason"])


def _note_elsewhere(config: Path | None, state: Path | None, counted: Counter[str]) -> None:
    """Says where rejected messages are, none of which is kept in files."""
    topic = None if config is None and state is not None else settings_from(config, None).rejects.topic
    if topic is not None:
        note(f"bedload: rejects go to topic {topic} (rejects.topic), and none is kept in files; counts by")
        note("bedload: reason are those of the newest checkpoint, and bedload_rejects_total of a worker")
    elif counted:
        note(f"bedload: {count(counted.total())} messages were rejected up to the newest checkpoint; none is")
        note("bedload: kept in files: they went to rejects.topic, or rejects.action keeps none")


def _folder(config: Path | None, state: Path | None) -> Path:
    """Where rejects are kept. Raises InputMissing where there is no state."""
    folder = state_folder(config, state)
    if not folder.is_dir():
        raise InputMissing(f"there is no state folder {folder}")
    return folder / "rejects"


def _facts(kept: KeptReject) -> dict[str, Any]:
    return {
        "number": kept.number,
        "file": kept.file,
        "partition": kept.partition,
        "offset": kept.offset,
        "reason": kept.reason,
        "detail": kept.detail,
    }
