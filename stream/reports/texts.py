"""Numbers and names out of a document in, short texts out that no page or picture takes for markup.

A token is arbitrary text: it may hold markup, unprintable characters, text that runs from right to left, or
be as long as a page. Whoever shows one goes through `bdi`, or through `named` and then `in_picture`.
"""

from __future__ import annotations

import html
import json
import math
from collections.abc import Mapping
from typing import Any

__all__ = [
    "UNKNOWN",
    "bdi",
    "count",
    "difference",
    "escaped",
    "in_picture",
    "json_in_page",
    "loss",
    "named",
    "odds",
    "percent",
    "plain",
    "ratio",
    "shortened",
    "size",
    "visible",
    "weight",
]

UNKNOWN = "–"
_JOINERS = "\u200c\u200d"  # without them Persian words and joined emoji fall apart
_FULLY_SHOWN = 80
_SUFFIXES = ("bytes", "kB", "MB", "GB", "TB")


def visible(text: str) -> str:
    """`text` with characters spelt out that show nothing, or that would reorder what stands beside them."""
    return "".join(c if c.isprintable() or c in _JOINERS else rf"\u{{{ord(c):x}}}" for c in text)


def shortened(text: str, most: int = _FULLY_SHOWN) -> str:
    """`text`, or its two ends around an ellipsis, in at most `most` characters."""
    if len(text) <= most:
        return text
    head = (most - 1) * 2 // 3
    return f"{text[:head]}…{text[len(text) - (most - 1 - head) :]}"


def named(token: Mapping[str, Any]) -> str:
    """`route=R7` for people; the field alone for a plain quantity."""
    field, text = visible(str(token["field"])), visible(str(token["token"]))
    if not field and not text:
        return "(name not known)"
    return f"{field}={text}" if text else field


def escaped(text: str) -> str:
    """`text` for HTML, attributes included."""
    return html.escape(text, quote=True)


def in_picture(text: str, most: int) -> str:
    """`text`, shortened, for the plotting library, which reads markup, references and formulas in texts."""
    return html.escape(shortened(text, most), quote=False).replace("$", "&#36;")


def bdi(text: str, most: int = _FULLY_SHOWN) -> str:
    """HTML of a token or another text of the feed, shortened, in a box that its direction cannot leave."""
    shown = visible(text)
    short = shortened(shown, most)
    title = f' title="{escaped(shown)}"' if short != shown else ""
    return f'<bdi class="token"{title}>{escaped(short)}</bdi>'


def json_in_page(document: Any) -> str:
    """JSON that is safe inside a `<script>` element, the same text each time; NaN and infinity raise."""
    text = json.dumps(document, ensure_ascii=True, allow_nan=False, separators=(",", ":"))
    return text.replace("<", "\\u003c").replace(">", "\\u003e").replace("&", "\\u0026")


def count(value: float | None) -> str:
    """A whole number, thousands set apart."""
    return UNKNOWN if value is None else f"{round(value):,}"


def plain(value: float | None, digits: int = 3) -> str:
    """A number as settings take it: 0.1, 0.00032, 3.2e-5."""
    if value is None:
        return UNKNOWN
    text = f"{value:.{digits}g}"
    head, mark, exponent = text.partition("e")
    return f"{head}e{int(exponent)}" if mark else text


def loss(value: float | None) -> str:
    """A log loss or another small figure with four digits."""
    return UNKNOWN if value is None else f"{value:.4f}"


def ratio(value: float | None) -> str:
    """A ratio with three digits."""
    return UNKNOWN if value is None else f"{value:.3f}"


def difference(value: float | None, error: float | None = None) -> str:
    """A signed difference, with its standard error where it has one."""
    if value is None:
        return UNKNOWN
    if value == 0 and not error:
        return "0"
    text = f"{value:+.5f}".replace("-", "−")
    return f"{text} ± {error:.5f}" if error is not None else text


def weight(value: float | None) -> str:
    """A weight in log-odds, with its sign."""
    return UNKNOWN if value is None else f"{value:+.3f}".replace("-", "−")


def odds(value: float | None) -> str:
    """What a weight multiplies the odds of a yes by."""
    if value is None:
        return UNKNOWN
    factor = math.exp(min(value, 700.0))
    digits = 0 if factor >= 100 else 1 if factor >= 10 else 2
    return f"×{factor:,.{digits}f}" if factor >= 0.1 else f"×{plain(factor, 2)}"


def percent(value: float | None) -> str:
    """A share as a percentage, with more digits the smaller it is."""
    if value is None:
        return UNKNOWN
    share = 100 * value
    digits = 0 if share == 0 or share >= 99.95 else 1 if share >= 10 else 2 if share >= 0.1 else 4
    return f"{share:.{digits}f} %"


def size(value: float | None) -> str:
    """Bytes in the largest unit that leaves at least 1 of it."""
    if value is None:
        return UNKNOWN
    for suffix in _SUFFIXES[:-1]:
        if value < 1000:
            return f"{value:,.0f} {suffix}" if suffix == "bytes" else f"{value:.3g} {suffix}"
        value /= 1000
    return f"{value:.3g} {_SUFFIXES[-1]}"
