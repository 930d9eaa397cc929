"""Settings in; the feed that they name as a live source, and a way to the topics of its cluster, out."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from typing import Any, Literal

from stream.errors import BadSettings
from stream.message import LiveSource
from stream.runs.outbox import Publisher
from stream.settings import Settings
from stream.sources import FollowSource

__all__ = ["OnGap", "live_source", "publisher_of", "refuse_other_kind"]

OnGap = Literal["refuse", "skip"]


def live_source(
    settings: Settings,
    *,
    on_gap: OnGap = "refuse",
    stopping: Callable[[], bool] = lambda: False,
    known: dict[str, Any] | None = None,
) -> LiveSource:
    """The feed, to be followed without end.

    `on_gap`: what to do where messages were removed before they were read; `stopping`: asked while a source
    waits to be opened; `known`: a position of the same feed, by which renamed files are found.
    """
    feed = settings.feed
    if feed.kind == "topic":
        from stream.topics import Secrets, TopicSource

        return TopicSource(
            feed,
            Secrets(settings),
            on_gap=on_gap,
            unavailable_after_s=settings.worker.unavailable_after_s,
            stopping=stopping,
        )
    return FollowSource(feed.paths, settings.folder, feed.max_line_bytes, known)


def publisher_of(settings: Settings) -> Callable[[], Publisher]:
    """Connects to the cluster of `settings.feed`, to write there. Raises BadSettings where none is named."""
    if not settings.feed.servers:
        raise BadSettings("rejects.topic and scores.topic need feed.servers: name the brokers that have them")
    from stream.topics import Publisher, Secrets

    return lambda: Publisher(settings.feed, Secrets(settings))


def refuse_other_kind(settings: Settings, position: Mapping[str, Any]) -> None:
    """Raises BadSettings where the feed is of another kind than the one that `position` is a place in."""
    feed = settings.feed
    if "files" in position and feed.kind == "topic":
        was, now = "logs", f"topic {feed.topic}"
    elif "topic" in position and feed.kind == "log":
        was, now = f"topic {position['topic']}", "logs"
    else:
        return
    raise BadSettings(
        f"the state was learned from {was}; the settings read {now}, where the place that it stands at means "
        "nothing. Set feed.kind back, or begin again in another state.folder"
    )
