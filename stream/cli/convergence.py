"""The document of `converge` in, tables for people out."""

from __future__ import annotations

from pathlib import Path
from typing import Any

from stream.cli.screen import Column, count, decimal, note, share, show_table, visible

__all__ = ["show_convergence"]

OF = {"gap": "gap to the batch fit", "excess_log_loss": "excess over the truth"}


def show_convergence(found: dict[str, Any], report: Path | None) -> None:
    """Prints a table for each strength, the slopes, and the windows where there are some."""
    log = found["log"]
    name = "the log" if log["scenario"] is None else f"scenario {log['scenario']['scenario']}"
    rates = ", ".join(
        one["name"] if one["name"][-1].isdigit() else f"{one['name']} {one['learning_rate']:g}"
        for one in found["learners"]
    )
    print(
        f"{name}: {count(log['messages'])} messages learned, {count(log['fresh'])} fresh after them; "
        f"{count(log['different_tokens'])} different tokens\n"
        f"batch fits by {found['batch']}; learning rates: {rates}"
    )
    for strength in found["strengths"]:
        print(f"\nstrength (l1_per_example) {strength:g}")
        _show_fits([fit for fit in found["fits"] if fit["strength"] == strength], found["has_truth"])
    print(
        "\ngap: how far the objective is above the batch fit's; for a batch fit, above the optimum at most.\n"
        "P/R/F1: precision, recall and F1 of the non-zero weights, against those of the batch fit and the\n"
        "planted ones. seconds: from rows of tokens to weights; log loss, excess: on the fresh messages."
    )
    _show_slopes(found["slopes"])
    for windows in found["windows"]:
        _show_windows(windows)
    if log["rejected"]:
        note(f"bedload: {count(log['rejected'])} rejected messages were left out")
    if report is not None:
        print(f"\nReport: {visible(str(report))}")


def _show_fits(fits: list[dict[str, Any]], has_truth: bool) -> None:
    columns = [
        Column("messages"),
        Column("weights of", right=False),
        Column("gap", 9),
        Column("log loss", 8),
        Column("non-zero", 8),
        Column("batch P/R/F1", 12),
        Column("seconds", 7),
    ]
    if has_truth:
        columns[4:4] = [Column("excess", 7)]
        columns[7:7] = [Column("truth P/R/F1", 12)]
    rows = []
    for fit in fits:
        for one in (fit["batch"], *fit["learned"]):
            rows.append(_row(fit["messages"], one, has_truth))
    show_table(columns, rows)


def _row(messages: int, one: dict[str, Any], has_truth: bool) -> list[str]:
    batch = "name" not in one
    cells = [
        count(messages) if batch else "",
        "batch fit" if batch else _name(one),
        f"<={100 * one['proved_gap']:.3f} %" if batch else share(one["gap"]),
        decimal(one["fresh_log_loss"]),
        count(one["nnz"]),
        "" if batch else _support(one["against_batch"]),
        decimal(one["seconds"] if batch else one["learning_seconds"], 2),
    ]
    if has_truth:
        cells[4:4] = [decimal(one["excess_log_loss"])]
        cells[7:7] = [_support(one["against_truth"])]
    return cells


def _support(support: dict[str, float | None]) -> str:
    figures = (support[name] for name in ("precision", "recall", "f1"))
    return "/".join("-" if x is None else "1" if x == 1 else f"{x:.2f}".removeprefix("0") for x in figures)


def _show_slopes(slopes: list[dict[str, Any]]) -> None:
    if not slopes:
        return
    print("\nhow they fall: figure = factor * messages ^ exponent, fitted over all looks")
    columns = [
        Column("strength"),
        Column("weights of", right=False),
        Column("figure", right=False),
        Column("exponent"),
        Column("± s.e."),
        Column("looks"),
    ]
    show_table(
        columns,
        [
            [
                f"{one['strength']:g}",
                "batch fit" if one["epochs"] is None else _name(one),
                OF[one["of"]],
                decimal(one["exponent"], 2, True),
                decimal(one["error"], 2),
                count(one["points"]),
            ]
            for one in slopes
        ],
    )


def _name(one: dict[str, Any]) -> str:
    """Short, for a column of twelve: `truncated x5`, `averaged x5`."""
    return _short(one) + ("" if one["epochs"] == 1 else f" x{one['epochs']}")


def _short(one: dict[str, Any]) -> str:
    name = str(one["name"]).replace("truncated-gradient", "truncated")
    return name.replace("averaged ftrl", "averaged").replace("averaged truncated", "av. trunc.")


def _show_windows(windows: dict[str, Any]) -> None:
    print(f"\nwindow by window, log loss, strength {windows['strength']:g}")
    parts = [windows["truth"]] if windows["truth"] else []
    parts += [one["losses"] for one in windows["learners"]]
    parts += [windows["batch"][name] for name in ("hindsight", "all_before", "last_window")]
    titles = ["truth"] if windows["truth"] else []
    titles += [_short(one) for one in windows["learners"]]
    titles += ["hindsight", "refitted", "last window"]
    means = windows["means"]
    last = [means["truth"]] if windows["truth"] else []
    last += [*means["learners"], *(means["batch"][n] for n in ("hindsight", "all_before", "last_window"))]
    rows = [
        [count(through), share(windows["base_rate"][i]), *(decimal(part[i]) for part in parts)]
        for i, through in enumerate(windows["through"])
    ]
    rows.append(["from the 2nd", "", *(decimal(mean) for mean in last)])
    show_table([Column("through"), Column("base rate"), *map(Column, titles)], rows)
    print(
        "Learners: predicted before each update. hindsight: a batch fit of all windows, which it has seen;\n"
        "refitted: one of all windows before; last window: one of the window before alone."
    )
