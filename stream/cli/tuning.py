"""The command `tune`: strengths to try in, the choice as a table or JSON out; the report beside it."""

from __future__ import annotations

import re
import shlex
import sys
from contextlib import suppress
from enum import StrEnum
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer

from stream.cli.compiling import note_compiling
from stream.cli.inputs import DEFAULT_CONFIG, settings_from
from stream.cli.learning import write_new
from stream.cli.options import AsJson, Changes, Config, size_of
from stream.cli.outputs import check_folder, check_output
from stream.cli.screen import Column, count, decimal, note, show_json, show_table, stage_bar, visible
from stream.errors import UsageError

if TYPE_CHECKING:
    from stream.runs.tuning.choosing import Rule

__all__ = ["add_to"]


class Pick(StrEnum):
    """Rules of choice."""

    lowest_loss = "lowest_loss"
    sparsest = "sparsest_within_one_se"


class Over(StrEnum):
    """The penalty that is tuned."""

    l1_per_example = "l1_per_example"
    l1 = "l1"


def add_to(app: typer.Typer) -> None:
    """Adds the command to `app`."""
    app.command()(tune)


def tune(
    out: Annotated[
        Path, typer.Option("--out", metavar="FOLDER", help="Where report, tables and finished trials go.")
    ],
    config: Config = None,
    changes: Changes = None,
    strengths: Annotated[
        str, typer.Option("--strengths", metavar="N|A,B,...", help="How many strengths, or which.")
    ] = "32",
    rates: Annotated[
        str | None,
        typer.Option(
            "--learning-rates",
            metavar="A,B,...",
            help="Learning rates to try, not just that of the settings.",
        ),
    ] = None,
    span: Annotated[
        float, typer.Option("--span", metavar="TIMES", help="Strongest against weakest strength.")
    ] = 1000.0,
    over: Annotated[Over, typer.Option("--over", help="Which penalty to tune.")] = Over.l1_per_example,
    pick: Annotated[Pick, typer.Option("--pick", help="Rule of choice.")] = Pick.lowest_loss,
    max_weights: Annotated[
        int | None,
        typer.Option(
            "--max-weights", min=1, metavar="N", help="The best of those with at most so many weights."
        ),
    ] = None,
    max_bytes: Annotated[
        str | None,
        typer.Option("--max-bytes", metavar="SIZE", help="The best of those whose snapshot is no larger."),
    ] = None,
    forward_from: Annotated[
        str | None,
        typer.Option(
            "--forward-from",
            metavar="SHARE|TIME",
            help="Forward test: learn up to this share of the log (70%) or RFC 3339 time, then score only.",
        ),
    ] = None,
    truth: Annotated[
        Path | None,
        typer.Option("--truth", metavar="FILE", help="Truth of a simulated log, to compare with."),
    ] = None,
    workers: Annotated[
        int, typer.Option("--workers", min=1, metavar="N", help="Processes on this machine.")
    ] = 1,
    cluster: Annotated[
        str | None,
        typer.Option("--cluster", metavar="ADDRESS", help="Dask scheduler whose workers run the passes."),
    ] = None,
    memory: Annotated[
        str, typer.Option("--memory", metavar="SIZE", help="Memory for all passes that run at once.")
    ] = "4GB",
    write_settings: Annotated[
        Path | None,
        typer.Option(
            "--write-settings", metavar="FILE", help="A copy of the settings file with the choice; new."
        ),
    ] = None,
    as_json: AsJson = False,
) -> None:
    """Try many L1 strengths over a log at once, and say which one to use.

    Every strength learns the log in its order, each message scored before it is learned. The report shows log
    loss against the number of weights. Up to 64 settings go through the log together, and are kept once they
    have: an interrupted run goes on behind those."""
    from stream.runs.tuning.grid import Grid
    from stream.runs.tuning.tune import Job
    from stream.runs.tuning.tune import tune as run_tune

    settings = settings_from(config, changes)
    config = config or (DEFAULT_CONFIG if DEFAULT_CONFIG.exists() else None)
    if write_settings is not None:
        if config is None:
            raise UsageError("--write-settings copies a settings file: give --config FILE")
        check_output(write_settings, "--write-settings", new=True)
    forward_share, forward_ms = _forward(forward_from)
    check_folder(out)
    job = Job(
        grid=Grid(_strengths(strengths), _numbers(rates, "--learning-rates"), _span(span), over.value),
        rule=_rule(pick, max_weights, max_bytes),
        forward_share=forward_share,
        forward_ms=forward_ms,
        truth=truth,
        workers=workers,
        cluster=cluster,
        memory_bytes=size_of(memory, "--memory"),
    )
    note_compiling("ftrl_lanes" if settings.learner.method == "ftrl" else "truncated_gradient_lanes")
    with stage_bar() as tell:
        found = run_tune(
            settings,
            out / "trials",
            job,
            command=shlex.join(["bedload", *sys.argv[1:]]),
            tell=tell,
            say=lambda text: note(f"bedload: {visible(text)}"),
        )
    report = _write(found, out)
    chosen = found["candidates"][found["choice"]["index"]]
    if write_settings is not None and config is not None:
        from stream.runs.tuning.settings_copy import settings_with
        from stream.runs.tuning.trial import Lane

        lane = Lane(chosen["learning_rate"], chosen["l1_per_example"], chosen["l1"])
        write_new(write_settings, settings_with(config, lane))
    if as_json:
        show_json(_summary(found, report))
        return
    _show(found, report, write_settings)


def _write(found: dict[str, Any], out: Path) -> Path:
    """Writes document, tables and report; the report's path."""
    import json

    from stream.durable import write_file
    from stream.reports import write_report, write_tables

    text = json.dumps(found, ensure_ascii=False, allow_nan=False, indent=1)
    write_file(out / "tuning.json", text.encode("utf-8", "replace") + b"\n")
    write_tables(found, out)
    write_report(found, out / "report.html")
    return out / "report.html"


def _summary(found: dict[str, Any], report: Path) -> dict[str, Any]:
    keys = ("l1_per_example", "l1", "learning_rate", "log_loss", "nnz", "log_loss_se")
    candidates = [{key: one[key] for key in keys} for one in found["candidates"]]
    return {
        "chosen": candidates[found["choice"]["index"]],
        "candidates": candidates,
        "rule": found["choice"]["rule"],
        "said": found["choice"]["said"],
        "warnings": found["warnings"],
        "seconds": found["seconds"],
        "messages": found["log"]["messages"],
        "report": str(report),
    }


def _show(found: dict[str, Any], report: Path, written: Path | None) -> None:
    choice, unit = found["choice"], found["grid"]["unit"]
    marks = {choice["runner_up"]: "runner-up", choice["best"]: "lowest loss", choice["index"]: "chosen"}
    rate = found["candidates"][choice["index"]]["learning_rate"]
    print(f"At learning rate {rate:g}; the log's last part, each message scored before it was learned:\n")
    show_table(
        [
            Column(unit, 14),
            Column("non-zeros", 11),
            Column("log loss", 9),
            Column("over the best", 13),
            Column("± s.e.", 8),
            Column("AUC", 6),
            Column("", 11, right=False),
        ],
        [
            [
                f"{one[unit]:.4g}",
                count(one["nnz"]),
                decimal(one["log_loss"], 5),
                decimal(one["difference"], 5, signed=True),
                decimal(one["log_loss_se"], 5),
                decimal(one["auc"]),
                marks.get(one["index"], ""),
            ]
            for one in found["candidates"]
            if one["learning_rate"] == rate
        ],
    )
    _show_rates(found)
    print()
    for sentence in (*choice["said"], *found["warnings"]):
        print(visible(sentence))
    print(f"\nReport: {report}")
    if written is not None:
        print(f"Settings with the choice: {written}")


def _show_rates(found: dict[str, Any]) -> None:
    """The best of each learning rate, where several were tried."""
    rates = found["grid"]["learning_rates"]
    if len(rates) < 2:
        return
    print("\nThe best of each learning rate:\n")
    best = [
        min((one for one in found["candidates"] if one["learning_rate"] == rate), key=_loss_of)
        for rate in rates
    ]
    unit = found["grid"]["unit"]
    show_table(
        [Column("learning rate", 14), Column(unit, 14), Column("non-zeros", 11), Column("log loss", 9)],
        [
            [f"{one['learning_rate']:g}", f"{one[unit]:.4g}", count(one["nnz"]), decimal(one["log_loss"], 5)]
            for one in best
        ],
    )


def _loss_of(candidate: dict[str, Any]) -> float:
    return float(candidate["log_loss"])


def _strengths(text: str) -> int | tuple[float, ...]:
    if re.fullmatch("[0-9]{1,6}", text) and int(text) >= 1:
        return int(text)
    found = _numbers(text, "--strengths")
    if len(found) == 1 and found[0] >= 1:
        raise UsageError("--strengths takes a whole number of them, or strengths set apart by commas")
    return found


def _numbers(text: str | None, option: str) -> tuple[float, ...]:
    if text is None:
        return ()
    try:
        found = tuple(float(part) for part in text.split(","))
    except ValueError:
        found = ()
    if not found or not all(0 < number < 1e12 for number in found):
        raise UsageError(
            f"{option} takes numbers above 0 set apart by commas, for example 0.05,0.1; got {text!r}"
        )
    return found


def _span(span: float) -> float:
    if not 1 < span <= 1e9:
        raise UsageError(f"--span takes a number above 1, up to 1e9; got {span:g}")
    return span


def _rule(pick: Pick, max_weights: int | None, max_bytes: str | None) -> Rule:
    from stream.runs.tuning.choosing import Rule

    if sum([pick is not Pick.lowest_loss, max_weights is not None, max_bytes is not None]) > 1:
        raise UsageError("--pick, --max-weights and --max-bytes are rules of choice: give one of them")
    if max_weights is not None:
        return Rule("max_weights", max_weights)
    if max_bytes is not None:
        return Rule("max_bytes", size_of(max_bytes, "--max-bytes"))
    return Rule(pick.value)


def _forward(text: str | None) -> tuple[float | None, int | None]:
    """A share, or epoch milliseconds."""
    if text is None:
        return None, None
    from stream.decoding.times import epoch_ms

    with suppress(ValueError):
        return None, epoch_ms(text)
    match = re.fullmatch(r"([0-9]+(?:\.[0-9]+)?|\.[0-9]+)(%?)", text)
    share = float(match[1]) / (100 if match[2] else 1) if match else 0.0
    if not 0 < share < 1:
        raise UsageError(
            f"--forward-from takes a share of the log such as 70% or 0.7, or a time such as "
            f"2031-03-03T06:00:00Z; got {text!r}"
        )
    return share, None
