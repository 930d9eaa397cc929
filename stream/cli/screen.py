"""Values in, plain text for people out: tables within 100 columns, JSON, progress on a terminal."""

from __future__ import annotations

import json
import sys
import time
from collections.abc import Callable, Iterable, Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from typing import Any
from unicodedata import combining, east_asian_width

__all__ = [
    "GAP",
    "WIDTH",
    "Column",
    "cells",
    "count",
    "decimal",
    "heading",
    "line",
    "note",
    "progress_bar",
    "share",
    "show_json",
    "show_table",
    "stage_bar",
    "visible",
]

WIDTH = 100
GAP = "  "
LONGEST_BAR = 40
BESIDE_BAR = 70
"""Of the line of `stage_bar`: 35 for what is being done, the rest for its times."""
Progress = Callable[[float | None, int], None]


@dataclass(frozen=True, slots=True)
class Column:
    """A column of a table: `title`, `width` in terminal cells (0: as wide as needed), side of the text."""

    title: str
    width: int = 0
    right: bool = True


def visible(text: str) -> str:
    """`text` with everything that could move the cursor or recolour a terminal spelt out."""
    return "".join(c if c.isprintable() else c.encode("unicode_escape").decode() for c in text)


def count(value: int | None) -> str:
    """A whole number with thousands set apart, `-` for None."""
    return "-" if value is None else f"{value:,}"


def decimal(value: float | None, digits: int = 4, signed: bool = False) -> str:
    """A number with a fixed count of digits, `-` for None."""
    return "-" if value is None else f"{value:{'+' if signed else ''}.{digits}f}"


def share(value: float | None) -> str:
    """A share from 0 to 1 as a percentage, `-` for None."""
    return "-" if value is None else f"{100 * value:,.2f} %"


def show_json(document: Any) -> None:
    """One JSON document and a line end on standard output; NaN and infinity are bugs, so they raise."""
    sys.stdout.write(json.dumps(document, ensure_ascii=False, allow_nan=False) + "\n")


def note(text: str) -> None:
    """A line for people on standard error."""
    print(text, file=sys.stderr)


def show_table(columns: Sequence[Column], rows: Iterable[Sequence[str]]) -> None:
    """Prints a whole table; the widest text column gives way where 100 columns do not suffice."""
    texts = [[visible(cell) for cell in row] for row in rows]
    fitted = _fit(columns, texts)
    print(heading(fitted))
    for row in texts:
        print(line(fitted, row))


def heading(columns: Sequence[Column]) -> str:
    """The line of titles."""
    return line(columns, [column.title for column in columns])


def line(columns: Sequence[Column], texts: Sequence[str]) -> str:
    """One line of a table whose columns have widths, safe for a terminal."""
    parts = [_pad(visible(cell), column) for cell, column in zip(texts, columns, strict=True)]
    return GAP.join(parts).rstrip()


@contextmanager
def progress_bar(title: str) -> Iterator[Progress]:
    """Gives a function of (fraction read or None, messages so far); it draws on a terminal only."""
    if not sys.stderr.isatty():
        yield lambda fraction, messages: None
        return
    from rich.console import Console
    from rich.progress import BarColumn, TextColumn, TimeElapsedColumn, TimeRemainingColumn
    from rich.progress import Progress as Bar

    bar = Bar(
        TextColumn("{task.description}"),
        BarColumn(),
        TextColumn("{task.fields[messages]:,} messages"),
        TextColumn("{task.fields[rate]:,.0f}/s"),
        TimeElapsedColumn(),
        TextColumn("elapsed"),
        TimeRemainingColumn(),
        TextColumn("left"),
        console=Console(stderr=True),
        auto_refresh=False,
        transient=True,
        redirect_stdout=sys.stdout.isatty(),
    )
    begun = time.monotonic()
    shown = 0.0
    task = bar.add_task(title, total=None, messages=0, rate=0.0)

    def advance(fraction: float | None, messages: int) -> None:
        nonlocal shown
        now = time.monotonic()
        if now - shown < 0.1:
            return
        shown = now
        rate = messages / max(now - begun, 1e-9)
        total = None if fraction is None else 1.0
        bar.update(task, total=total, completed=fraction or 0.0, messages=messages, rate=rate)
        bar.refresh()

    with bar:
        yield advance


@contextmanager
def stage_bar() -> Iterator[Callable[[float, str], None]]:
    """Gives a function of (share done of 1, what is being done); it draws on a terminal only."""
    if not sys.stderr.isatty():
        yield lambda share, text: None
        return
    from rich.console import Console
    from rich.progress import BarColumn, TaskID, TextColumn, TimeElapsedColumn, TimeRemainingColumn
    from rich.progress import Progress as Bar

    console = Console(stderr=True)
    length = min(LONGEST_BAR, max(4, console.width - BESIDE_BAR))
    columns = TextColumn("{task.description}"), BarColumn(length), TextColumn("{task.percentage:3.0f} %")
    times = TimeElapsedColumn(), TextColumn("elapsed"), TimeRemainingColumn(), TextColumn("left")
    bar = Bar(*columns, *times, console=console, auto_refresh=False, transient=True)
    stages: dict[str, TaskID] = {}
    shown = 0.0

    def tell(share: float, text: str) -> None:
        nonlocal shown
        now = time.monotonic()
        if text in stages and now - shown < 0.1:
            return
        shown = now
        if text not in stages:  # each stage has a clock of its own
            for task in stages.values():
                bar.remove_task(task)
            stages.clear()
            stages[text] = bar.add_task(text, total=1.0)
        bar.update(stages[text], completed=share)
        bar.refresh()

    with bar:
        yield tell


def _fit(columns: Sequence[Column], rows: Sequence[Sequence[str]]) -> list[Column]:
    widths = [
        column.width or max([cells(column.title), *(cells(row[i]) for row in rows)])
        for i, column in enumerate(columns)
    ]
    excess = sum(widths) + len(GAP) * (len(widths) - 1) - WIDTH
    texts = [i for i, column in enumerate(columns) if not column.right]
    while excess > 0 and texts:
        widest = max(texts, key=lambda i: widths[i])
        if widths[widest] <= 8:
            break
        widths[widest] -= 1
        excess -= 1
    return [Column(c.title, width, c.right) for c, width in zip(columns, widths, strict=True)]


def _pad(cell: str, column: Column) -> str:
    if not column.right and cells(cell) > column.width:
        cell = _cut(cell, column.width)
    space = " " * (column.width - cells(cell))
    return space + cell if column.right else cell + space


def _cut(text: str, width: int) -> str:
    kept = ""
    for character in text:
        if cells(kept) + cells(character) > width - 1:
            break
        kept += character
    return kept + "…"


def cells(text: str) -> int:
    """How many terminal cells `text` takes: wide East Asian characters two, combining marks none."""
    if text.isascii():
        return len(text)
    return sum(0 if combining(c) else 1 + (east_asian_width(c) in "WF") for c in text)
