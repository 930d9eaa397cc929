"""The command `certify`: a snapshot and a log in, how far the weights are from the batch fit out."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer

from stream.cli.compiling import note_compiling
from stream.cli.inputs import DEFAULT_CONFIG, settings_from
from stream.cli.options import AsJson, Config, Name, StateFolder, size_of
from stream.cli.outputs import check_output
from stream.cli.scoring import log_pattern
from stream.cli.screen import Column, count, decimal, note, share, show_json, show_table, stage_bar
from stream.cli.stored import read_snapshot_of
from stream.errors import BadSettings, UsageError

if TYPE_CHECKING:
    from stream.settings import Settings

__all__ = ["add_to"]

DIGITS = 6
STRONGEST = 1e6


def add_to(app: typer.Typer) -> None:
    """Adds the command to `app`."""
    app.command()(certify)


def certify(
    logs: Annotated[
        list[str] | None,
        typer.Argument(metavar="LOG", help="JSON Lines files; those of feed.paths where none is given."),
    ] = None,
    config: Config = None,
    state: StateFolder = None,
    name: Name = None,
    strength: Annotated[
        float | None,
        typer.Option(
            "--strength",
            metavar="X",
            help="Strength of the batch fit, as l1_per_example; that of the snapshot by default.",
        ),
    ] = None,
    refine: Annotated[
        bool, typer.Option("--refine", help="Then find the batch optimum itself; the log must fit memory.")
    ] = False,
    fresh: Annotated[
        list[str] | None,
        typer.Option(
            "--fresh", metavar="LOG", help="With --refine: a later log, to see what refining is worth."
        ),
    ] = None,
    out: Annotated[
        Path | None,
        typer.Option("--out", metavar="FOLDER", help="With --refine: a snapshot of the optimum; new."),
    ] = None,
    memory: Annotated[
        str | None, typer.Option("--memory", metavar="SIZE", help="With --refine: memory for the log [4GB].")
    ] = None,
    as_json: AsJson = False,
) -> None:
    """Bound how far a snapshot is from the batch optimum of a log.

    The batch optimum: the weights with the least mean log loss plus L1 penalty over the whole log. The
    bound is guaranteed and needs no batch fit; the log is read twice, and nothing is learned."""
    from stream.runs.certifying.certify import certify as run_certify
    from stream.runs.certifying.worth import worth

    _check(strength, refine, fresh, out, memory)
    memory_bytes = size_of(memory or "4GB", "--memory")
    later = tuple(log_pattern(text, "for no comparison") for text in fresh or ())
    settings, paths, folder = _log(logs, config)
    snapshot = read_snapshot_of(config, state, name)
    note_compiling("sums_kernel")
    with stage_bar() as tell:

        def progress(stage: str, fraction: float | None) -> None:
            tell(fraction or 0.0, stage)

        found = run_certify(snapshot, paths, settings, folder=folder, strength=strength, progress=progress)
        refined = None
        if refine:
            refined = worth(snapshot, found, tuple(paths), folder, settings, later, memory_bytes, progress)
    if out is not None and refined is not None:
        from stream.snapshots import write_snapshot

        write_snapshot(out, snapshot.messages, refined.refined.weights, snapshot.about)
    document = found.to_json() | ({} if refined is None else refined.to_json())
    if as_json:
        show_json(document)
    else:
        _show(document)
        if refined is not None:
            _show_refined(document, out)
    if found.findings.rejected:
        note(f"bedload: {count(found.findings.rejected)} rejected messages were left out")


def _check(
    strength: float | None, refine: bool, fresh: list[str] | None, out: Path | None, memory: str | None
) -> None:
    if strength is not None and not 0.0 <= strength <= STRONGEST:
        raise UsageError(f"--strength {strength:g}: give a number above 0, at most {STRONGEST:g}")
    if not refine and (fresh or out is not None or memory is not None):
        raise UsageError("--fresh, --out and --memory are about the batch optimum: give --refine too")
    if out is not None:
        check_output(out, new=True)


def _log(logs: list[str] | None, config: Path | None) -> tuple[Settings | None, list[str], Path]:
    """Settings to read by (None: the snapshot's), the patterns of the log, what these are relative to."""
    if logs:
        paths = [log_pattern(text, "for those of feed.paths") for text in logs]
        return None if config is None else settings_from(config, None), paths, Path()
    if config is None and not DEFAULT_CONFIG.exists():
        raise UsageError(f"which log? Name it, or give --config FILE ({DEFAULT_CONFIG} is not here)")
    settings = settings_from(config, None)
    if settings.feed.kind != "log":
        raise BadSettings("the feed is a topic, which is read only once: name a LOG with its messages")
    return settings, list(settings.feed.paths), settings.folder


def _show(found: dict[str, Any]) -> None:
    gap, objective = found["gap"], found["objective"]
    print(
        f"{Path(found['snapshot']).name}: {count(found['nnz'])} non-zero weights, certified on "
        f"{count(found['labelled'])} labelled of {count(found['messages'])} messages\n"
        f"(tokens of the log: {count(found['coordinates'])}; strength, l1_per_example: "
        f"{found['l1_per_example']:.6g})"
    )
    show_table(
        (Column("nats a message", right=False), Column("", 10), Column("", right=False)),
        [
            ["mean log loss", decimal(found["mean_loss"], DIGITS), _shifted(found["intercept_shift"])],
            ["penalty", decimal(found["penalty"], DIGITS), "strength times the sum of |weight|"],
            ["objective", decimal(objective, DIGITS), "their sum"],
            ["lower bound", decimal(found["lower_bound"], DIGITS), "no weights have a lower objective"],
            ["gap", decimal(gap, DIGITS), f"{share(gap / objective)} of the objective"],
        ],
    )
    print(
        f"A batch fit of this log at this strength is better than these weights by {gap:.6f} nats a message\n"
        "at most; it may be less."
    )
    _show_worst(found["worst"])
    _show_windows(found)


def _show_refined(found: dict[str, Any], out: Path | None) -> None:
    gained = found["objective"] - found["refined_objective"]
    print(
        f"\nbatch optimum: objective {found['refined_objective']:.{DIGITS}f}, proved to within "
        f"{found['refined_gap']:.1e}; {count(found['refined_nnz'])} non-zero weights\n"
        f"The snapshot is {gained:.{DIGITS}f} nats a message above it "
        f"({share(gained / found['refined_objective'])}); {count(found['refined_changed'])} weights came, "
        "went or changed sign."
    )
    if found["fresh_messages"] is not None:
        before, after = found["fresh_log_loss"], found["fresh_log_loss_refined"]
        verdict = "better" if after < before else "no better"
        print(
            f"On {count(found['fresh_messages'])} fresh messages: log loss {before:.5f} as it is, "
            f"{after:.5f} refined: {verdict} by {abs(after - before):.5f}."
        )
    if out is not None:
        print(f"Snapshot of the optimum: {out}; other commands read it with --snapshot {_as_path(out)}")


def _as_path(folder: Path) -> str:
    """With a / in it, by which --snapshot knows a folder from a name."""
    return str(folder) if "/" in str(folder) else f"./{folder}"


def _shifted(shift: float) -> str:
    return f"with the intercept moved by {shift:+.4f}, which fits this log best"


def _show_worst(worst: list[dict[str, Any]]) -> None:
    if not worst:
        print("every coordinate is as an optimum has it")
        return
    print("\ncoordinates that break the conditions of an optimum most (docs/proof.md):")
    columns = (
        Column("field", right=False),
        Column("token", right=False),
        Column("weight", 9),
        Column("gradient", 10),
        Column("violation", 10),
    )
    show_table(
        columns,
        [
            [
                row["field"] or f"address {row['address']}",
                row["token"],
                decimal(row["weight"], 4, True) if row["weight"] else "0",
                f"{row['gradient']:+.2e}",
                f"{row['violation']:.2e}",
            ]
            for row in worst
        ],
    )


def _show_windows(found: dict[str, Any]) -> None:
    if not found["windows"]:
        return
    print("\nmean log loss with that intercept, the whole log and its last windows:")
    rows = [["all", count(found["labelled"]), decimal(found["mean_loss"])]]
    rows += [[count(w["first"]), count(w["last"]), decimal(w["mean_loss"])] for w in found["windows"]]
    show_table((Column("from labelled message"), Column("through"), Column("log loss")), rows)
