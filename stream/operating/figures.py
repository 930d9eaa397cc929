"""What a worker knows of itself in; whether it is ready, and whether it is stuck, out."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Literal, Protocol, runtime_checkable

__all__ = ["FeedHealth", "Figures", "HasHealth", "not_ready", "stuck"]

STUCK_S = 300.0
"""Longer than any block, sweep or wait for a slow disk should take."""
COMPILING_S = 5.0
"""Longer than a block takes, and much shorter than kernels take to compile."""


class FeedHealth(Protocol):
    """How reading a feed goes; stream.topics.Health says what each means."""

    @property
    def since_contact_s(self) -> float | None:
        """Seconds since the feed answered last."""
        ...

    @property
    def lags(self) -> Mapping[int, int | None]:
        """End minus next offset, by partition."""
        ...

    @property
    def stalled(self) -> tuple[int, ...]:
        """Partitions that do not move though their logs grow."""
        ...

    @property
    def trouble(self) -> str | None:
        """Why the feed cannot be reached, while it cannot."""
        ...


@runtime_checkable
class HasHealth(Protocol):
    """A source that can be asked how reading goes, from any thread."""

    def health(self) -> FeedHealth:
        """How it goes now."""
        ...


@dataclass(slots=True)
class Figures:
    """What a worker says of itself: written by the thread that learns, read by any.

    `messages` and `rejects` (by reason) are those of this process, so that they only rise; `learned` is what
    the state holds. `log_loss`, `calibration_ratio` and `nonzeros` are those of the last window that was
    closed. `waiting`: learning waits for brokers to take what is sent out; `untaken`: why they do not.
    `to_compile`: kernels were not compiled before; they are by the time of the first checkpoint. Times (`_s`)
    are of the monotonic clock, None before the first; a worker's `message_s` is its start until one comes.
    """

    phase: Literal["starting", "opening", "replaying", "live", "ending"] = "starting"
    messages: int = 0
    learned: int = 0
    rejects: Mapping[str, int] = field(default_factory=dict)
    live: int = 0
    log_loss: float | None = None
    calibration_ratio: float | None = None
    nonzeros: int | None = None
    checkpoints: int = 0
    checkpoint_failures: int = 0
    checkpoint_s: float | None = None
    message_s: float | None = None
    turned_s: float | None = None
    waiting: bool = False
    untaken: str | None = None
    to_compile: bool = False


def not_ready(
    figures: Figures, feed: FeedHealth | None, now_s: float, stale_after_s: float, stopping: bool
) -> str | None:
    """Why the worker does not keep up with its feed at `now_s` (monotonic clock), or None where it does."""
    if stopping or figures.phase == "ending":
        return "stopping"
    if figures.phase == "starting":
        return "starting: the newest checkpoint is being read"
    trouble = _feed_trouble(feed, stale_after_s)
    if figures.phase == "opening":
        return f"waiting for the feed to answer{': ' + trouble if trouble else ''}"
    if trouble is not None:
        return trouble
    if _compiling(figures, now_s):
        return "compiling, which the first start of a release does (about a minute)"
    if figures.phase == "replaying":
        return "learning again what the journal holds behind the newest checkpoint"
    if figures.untaken is not None:
        return f"dead letters or scores are not taken, and no checkpoint is made: {figures.untaken}"
    if figures.waiting:
        return "learning waits until the brokers take dead letters and scores"
    still_s = _still_s(figures, now_s)
    if still_s > stale_after_s:
        return f"learning has not moved for {still_s:.0f} s (worker.stale_after_s = {stale_after_s:g})"
    if feed is not None and feed.stalled:
        return f"partitions do not move though their logs grow: {', '.join(map(str, feed.stalled))}"
    return None


def stuck(figures: Figures, feed: FeedHealth | None, now_s: float, stale_after_s: float) -> str | None:
    """What a new start would cure: a loop that stands still while it waits for nobody. None: nothing."""
    if figures.phase not in ("replaying", "live") or figures.waiting or _compiling(figures, now_s):
        return None
    still_s = _still_s(figures, now_s)
    if still_s <= STUCK_S or _feed_trouble(feed, stale_after_s) is not None:
        return None
    return f"learning has stood still for {still_s:.0f} s though the feed answers"


def _still_s(figures: Figures, now_s: float) -> float:
    return 0.0 if figures.turned_s is None else now_s - figures.turned_s


def _compiling(figures: Figures, now_s: float) -> bool:
    return figures.to_compile and not figures.checkpoints and _still_s(figures, now_s) > COMPILING_S


def _feed_trouble(feed: FeedHealth | None, stale_after_s: float) -> str | None:
    if feed is None:
        return None
    if feed.trouble is not None:
        return f"the brokers cannot be reached: {feed.trouble}"
    since_s = feed.since_contact_s
    if since_s is not None and since_s > stale_after_s:
        return f"the brokers have not answered for {since_s:.0f} s (worker.stale_after_s = {stale_after_s:g})"
    return None
