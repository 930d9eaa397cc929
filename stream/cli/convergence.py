"""The document of `converge` in, tables for people out."""

from __future__ import annotations

from pathlib import Path
from textwrap import fill
from typing import Any

from stream.cli.screen import GAP, WIDTH, Column, cells, count, decimal, note, share, show_table, visible

__all__ = ["show_convergence"]

BATCH = "batch fit"
OF_BATCH = {"hindsight": "hindsight", "all_before": "refitted", "last_window": "last window"}
UNBROKEN = "\u00a0"
ALONE, BESIDE_TRUTH = 36, 13
"""Room for a learner's name and passes in a row of figures, without and with those against the truth."""
GAP_WIDTH = 9
OF = {"gap": "gap to the batch fit", "excess_log_loss": "excess over the truth"}


def show_convergence(found: dict[str, Any], report: Path | None) -> None:
    """Prints a table for each strength, the slopes, and the windows where there are some."""
    log = found["log"]
    name = "the log" if log["scenario"] is None else f"scenario {log['scenario']['scenario']}"
    print(
        f"{name}: {count(log['messages'])} messages learned, {count(log['fresh'])} fresh after them; "
        f"{count(log['different_tokens'])} different tokens"
    )
    names = _names(found)
    rates = _rates(found["learners"], names)
    print(fill(f"batch fits by {found['batch']}; learning rates: {rates}", WIDTH).replace(UNBROKEN, " "))
    for strength in found["strengths"]:
        fits = [fit for fit in found["fits"] if fit["strength"] == strength]
        print(f"\nstrength (l1_per_example) {strength:g}")
        _show_fits(fits, found["has_truth"], names)
        _warn_of_loose(fits)
    print()
    print(fill(_legend(found["has_truth"]), WIDTH))
    _show_slopes(found["slopes"], names)
    for windows in found["windows"]:
        _show_windows(windows)
    if log["rejected"]:
        note(f"bedload: {count(log['rejected'])} rejected messages were left out")
    if report is not None:
        print(f"\nReport: {visible(str(report))}")


def _names(found: dict[str, Any]) -> dict[str, str]:
    """What each learner is called in tables, by its name: short, or a letter and a number where any of these
    is too long for a row of figures."""
    whole = [str(one["name"]) for one in found["learners"]]
    short = {name: _short(name) for name in whole}
    room = (BESIDE_TRUTH if found["has_truth"] else ALONE) - len(_passes(found["epochs"]))
    room -= max(0, _widest_gap(found["fits"]) - GAP_WIDTH)
    if all(len(name) <= room for name in short.values()):
        return short
    return {name: f"L{i}" for i, name in enumerate(whole, 1)}


def _rates(learners: list[dict[str, Any]], names: dict[str, str]) -> str:
    """Every learner and its rate, with the name in tables before it where that does not say which it is."""
    said = []
    for one in learners:
        name, rate = one["name"], f"{one['learning_rate']:g}"
        whole = name if name.endswith(f" {rate}") else f"{name} {rate}"
        text = whole if names[name] == _short(name) else f"{names[name]} is {whole}"
        said.append(text.replace(" ", UNBROKEN))
    return ", ".join(said)


def _warn_of_loose(fits: list[dict[str, Any]]) -> None:
    """Says which batch fits are proved too loosely to measure gaps against."""
    loose = [fit for fit in fits if fit["batch"]["loose"]]
    if loose:
        through = ", ".join(count(fit["messages"]) for fit in loose)
        worst = share(max(fit["batch"]["proved_gap"] for fit in loose))
        print(
            fill(
                f"Warning: the batch fit of {through} messages may be up to {worst} above the optimum: the "
                "gaps and P/R/F1 against it may be far from those against the optimum. Try another --batch.",
                WIDTH,
            )
        )


def _legend(has_truth: bool) -> str:
    planted, excess = (" and the planted ones", ", excess") if has_truth else ("", "")
    return (
        "gap: how far the objective is above the batch fit's; for a batch fit, above the optimum at most. "
        "P/R/F1: precision, recall and F1 of the non-zero weights, against those of the batch "
        f"fit{planted}. seconds: from rows of tokens to weights; log loss{excess}: on the fresh messages."
    )


def _show_fits(fits: list[dict[str, Any]], has_truth: bool, names: dict[str, str]) -> None:
    width = max(GAP_WIDTH, _widest_gap(fits))
    columns = [
        Column("messages"),
        Column("weights of", right=False),
        Column("gap", width),
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
            name = BATCH if one is fit["batch"] else _name(one, names)
            rows.append(_row(fit["messages"], name, one, has_truth))
    show_table(columns, rows)


def _row(messages: int, name: str, one: dict[str, Any], has_truth: bool) -> list[str]:
    batch = name == BATCH
    cells = [
        count(messages) if batch else "",
        name,
        _gap(one),
        decimal(one["fresh_log_loss"]),
        count(one["nnz"]),
        "" if batch else _support(one["against_batch"]),
        decimal(one["seconds"] if batch else one["learning_seconds"], 2),
    ]
    if has_truth:
        cells[4:4] = [decimal(one["excess_log_loss"])]
        cells[7:7] = [_support(one["against_truth"])]
    return cells


def _gap(one: dict[str, Any]) -> str:
    return share(one["gap"]) if "gap" in one else f"<={100 * one['proved_gap']:.3f} %"


def _widest_gap(fits: list[dict[str, Any]]) -> int:
    return max(len(_gap(one)) for fit in fits for one in (fit["batch"], *fit["learned"]))


def _support(support: dict[str, float | None]) -> str:
    figures = (support[name] for name in ("precision", "recall", "f1"))
    return "/".join("-" if x is None else "1" if x == 1 else f"{x:.2f}".removeprefix("0") for x in figures)


def _show_slopes(slopes: list[dict[str, Any]], names: dict[str, str]) -> None:
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
                BATCH if one["epochs"] is None else _name(one, names),
                OF[one["of"]],
                decimal(one["exponent"], 2, True),
                decimal(one["error"], 2),
                count(one["points"]),
            ]
            for one in slopes
        ],
    )


def _name(one: dict[str, Any], names: dict[str, str]) -> str:
    """`truncated x5`, `averaged x5`, `L3 x5`."""
    return names[one["name"]] + _passes(one["epochs"])


def _passes(epochs: int) -> str:
    return "" if epochs == 1 else f" x{epochs}"


def _short(name: str) -> str:
    name = name.replace("truncated-gradient", "truncated")
    return name.replace("averaged ftrl", "averaged").replace("averaged truncated", "av. trunc.")


def _show_windows(windows: dict[str, Any]) -> None:
    print(f"\nwindow by window, log loss, strength {windows['strength']:g}")
    means = windows["means"]
    first = [("truth", windows["truth"], means["truth"])] if windows["truth"] else []
    batch = [(title, windows["batch"][key], means["batch"][key]) for key, title in OF_BATCH.items()]
    learners = [
        (_short(one["name"]), one["losses"], mean)
        for one, mean in zip(windows["learners"], means["learners"], strict=True)
    ]
    through = [*map(count, windows["through"]), "from the 2nd"]
    rates = [*map(share, windows["base_rate"]), ""]
    shown = [("through", through), ("base rate", rates)]
    for title, losses, mean in (*first, *batch, *learners):
        if (
            sum(len(GAP) + max(map(cells, (t, *column))) for t, column in shown) + max(8, cells(title))
            > WIDTH
        ):
            _show_columns(shown)
            print()
            shown = [("through", through)]
        shown.append((title, [*map(decimal, losses), decimal(mean)]))
    _show_columns(shown)
    print(
        "Learners: predicted before each update. hindsight: a batch fit of all windows, which it has seen;\n"
        "refitted: one of all windows before; last window: one of the window before alone."
    )


def _show_columns(columns: list[tuple[str, list[str]]]) -> None:
    show_table([Column(title) for title, _ in columns], list(zip(*(c for _, c in columns), strict=True)))
