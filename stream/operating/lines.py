"""Log records come in, lines on standard error go out: text for people, or a JSON object each.

A record of ours has an event (a fixed word) and fields of plain numbers and words; what is in a message never
gets here. Records of other parts of the program have the event "note" and a text.
"""

from __future__ import annotations

import json
import logging
import sys
import time
from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from typing import Any, Literal, TextIO

from stream.operating.figures import FeedHealth, Figures

__all__ = ["log_lines", "progress_fields"]


@contextmanager
def log_lines(form: Literal["text", "json"], stream: TextIO | None = None) -> Iterator[None]:
    """Writes what is logged meanwhile to `stream` (standard error, unless given), a line each."""
    handler = logging.StreamHandler(stream or sys.stderr)
    handler.setFormatter(_Json() if form == "json" else _Text())
    logger = logging.getLogger("stream")
    before = logger.level
    logger.addHandler(handler)
    logger.setLevel(logging.INFO)
    try:
        yield
    finally:
        logger.removeHandler(handler)
        logger.setLevel(before)


def progress_fields(
    figures: Figures, feed: FeedHealth | None, now_s: float, messages_before: int, seconds: float
) -> dict[str, Any]:
    """The fields of an interval's line; `messages_before`: messages of this process `seconds` ago."""
    lags = [] if feed is None else [lag for lag in feed.lags.values() if lag is not None]
    checkpoint_s = figures.checkpoint_s
    return {
        "messages": figures.learned,
        "messages_per_s": round((figures.messages - messages_before) / seconds, 1) if seconds > 0 else None,
        "rejects": sum(figures.rejects.values()),
        "lag": sum(lags) if lags else None,
        "log_loss": None if figures.log_loss is None else round(figures.log_loss, 6),
        "nonzeros": figures.nonzeros,
        "live": figures.live,
        "checkpoints": figures.checkpoints,
        "checkpoint_age_s": None if checkpoint_s is None else round(now_s - checkpoint_s, 1),
    }


def _parts(record: logging.LogRecord) -> tuple[str, Mapping[str, Any]]:
    event = getattr(record, "event", None)
    if event is None:
        return "note", {"text": record.getMessage(), "part": record.name}
    return event, getattr(record, "fields", {})


def _time(record: logging.LogRecord) -> str:
    whole = time.strftime("%Y-%m-%dT%H:%M:%S", time.gmtime(record.created))
    return f"{whole}.{int(record.msecs):03d}Z"


class _Json(logging.Formatter):
    def format(self, record: logging.LogRecord) -> str:
        event, fields = _parts(record)
        head = {"at": _time(record), "level": record.levelname.lower(), "event": event}
        return json.dumps({**head, **fields}, ensure_ascii=True, default=str)


class _Text(logging.Formatter):
    def format(self, record: logging.LogRecord) -> str:
        event, fields = _parts(record)
        told = " ".join(f"{name}={_plain(value)}" for name, value in fields.items())
        level = record.levelname.lower()
        head = event if event == level else f"{level} {event}"
        return f"{_time(record)} {head} {told}".rstrip()


def _plain(value: Any) -> str:
    """On one line, whatever it is; texts with blanks in quotation marks."""
    if value is None:
        return "-"
    text = str(value)
    return json.dumps(text) if not text.isprintable() or " " in text or not text else text
