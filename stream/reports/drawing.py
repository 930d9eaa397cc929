"""What every picture shares: looks, axes and places on a log axis in, pieces of a figure out.

Figures are the plotting library's JSON. Where a colour belongs stands the name of a style property of the
page ("--ink"), which the page's script fills in as the reader's screen, or paper, wants it.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterable, Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any

from stream.reports.texts import plain

__all__ = [
    "CLEAR",
    "DASHES",
    "SERIES",
    "SHAPES",
    "Entry",
    "Figure",
    "LogPlaces",
    "Picture",
    "axis",
    "layout",
    "padded",
    "swatch_dash",
    "vertical",
]

Figure = dict[str, Any]

CLEAR = "rgba(0,0,0,0)"
SERIES = tuple(f"--series-{i}" for i in range(1, 7))
SHAPES = ("circle", "square", "diamond", "triangle-up", "cross", "triangle-down")
DASHES = ("solid", "dash", "dot", "dashdot", "longdash")
_DASH_OF_SWATCH = {"solid": "none", "dash": "7 4", "dot": "2 4", "dashdot": "8 3 2 3", "longdash": "12 4"}


@dataclass(frozen=True, slots=True)
class Entry:
    """A line of a picture's key; `look` as markup draws it: colour, and dash or shape."""

    text: str
    look: Mapping[str, str]


@dataclass(frozen=True, slots=True)
class Picture:
    """A figure, its height in pixels, its key, and a sentence for who cannot see it."""

    figure: Figure
    height: int
    summary: str
    key: Sequence[Entry] = field(default=())


def swatch_dash(dash: str) -> str:
    """The plotting library's name of a dash, as SVG draws it."""
    return _DASH_OF_SWATCH[dash]


def layout(height: int, **more: Any) -> Figure:
    """A layout without a title or legend: the page has both, in text that wraps."""
    return {
        "height": height,
        "margin": {"l": 62, "r": 18, "t": 14, "b": 54},
        "font": {"size": 13, "color": "--ink"},
        "paper_bgcolor": CLEAR,
        "plot_bgcolor": CLEAR,
        "showlegend": False,
        "hovermode": "closest",
        "hoverdistance": 120,
        "hoverlabel": {
            "bgcolor": "--raised",
            "bordercolor": "--axis",
            "font": {"size": 13, "color": "--ink"},
            "align": "left",
        },
        "modebar": {"bgcolor": CLEAR, "color": "--muted", "activecolor": "--ink"},
        "dragmode": "zoom",
        "uirevision": "kept",
        **more,
    }


def axis(title: str, **more: Any) -> Figure:
    """An axis with a title and quiet lines."""
    return {
        "title": {"text": title, "standoff": 12, "font": {"color": "--muted"}},
        "gridcolor": "--grid",
        "linecolor": "--axis",
        "zeroline": False,
        "showline": True,
        "ticks": "outside",
        "ticklen": 4,
        "tickcolor": "--axis",
        "automargin": True,
        **more,
    }


def padded(values: Iterable[float], share: float = 0.06) -> list[float]:
    """The range of `values` and a margin; a range of width 0 is widened."""
    found = list(values)
    low, high = min(found), max(found)
    margin = share * (high - low) or abs(high) * share or 1.0
    return [low - margin, high + margin]


def vertical(x: float, colour: str = "--ink") -> Figure:
    """A line from top to bottom at `x`."""
    return {
        "type": "line",
        "xref": "x",
        "yref": "paper",
        "x0": x,
        "x1": x,
        "y0": 0,
        "y1": 1,
        "line": {"color": colour, "width": 1.5, "dash": "dot"},
    }


class LogPlaces:
    """Where values stand on a log axis that has room for an exact zero, apart from the others."""

    def __init__(self, values: Iterable[float], say: Callable[[float], str] = plain) -> None:
        found = [float(value) for value in values]
        positive = [value for value in found if value > 0] or [1.0]
        self._low, self._high, self._say = min(positive), max(positive), say
        self._zero = self._low / max(2.0, (self._high / self._low) ** 0.12)
        self.has_zero = any(value <= 0 for value in found)

    def of(self, value: float) -> float:
        """The place of a value; zero has one below the smallest other."""
        return float(value) if value > 0 else self._zero

    def axis(self, title: str, *, falling: bool = False, **more: Any) -> Figure:
        """The axis, with ticks at round values; with `falling` large values come first."""
        values, texts = self._ticks()
        low = math.log10(self._zero if self.has_zero else self._low)
        span = max(math.log10(self._high) - low, 0.1)
        ends = [low - 0.04 * span, low + 1.04 * span]
        shown = ends[::-1] if falling else ends
        return axis(title, **{"type": "log", "tickvals": values, "ticktext": texts, "range": shown, **more})

    def _ticks(self) -> tuple[list[float], list[str]]:
        first, last = math.floor(math.log10(self._low)), math.ceil(math.log10(self._high))
        steps: tuple[int, ...] = (1,) if last - first > 3 else (1, 3) if last - first > 1 else (1, 2, 3, 5)
        stride = max(1, math.ceil((last - first) / 8))
        values = [float(f"{step}e{power}") for power in range(first, last + 1, stride) for step in steps]
        kept = [value for value in values if self._low * 0.999 <= value <= self._high * 1.001]
        texts = [self._say(value) for value in kept]
        return ([self._zero, *kept], ["0", *texts]) if self.has_zero else (kept, texts)
