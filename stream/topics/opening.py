"""A saved position or the settings' start, and what the cluster says, come in; lanes to read on go out."""

from __future__ import annotations

import logging
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from datetime import datetime
from typing import Any

from stream.errors import BadSettings, MessagesGone
from stream.message import Position
from stream.settings.models import Feed
from stream.topics.client import Away, Client, Identity
from stream.topics.lanes import Lane, Last

__all__ = ["Gap", "Opened", "check_identity", "gap_refused", "opened_at", "opened_new"]

CURE = "Begin again with a fresh state folder, or set the feed back to what it was"
log = logging.getLogger(__name__)

Gap = tuple[int, int, int]
"""partition, from, to."""


@dataclass(frozen=True, slots=True)
class Opened:
    """Lanes by partition, and the gaps passed over in them."""

    lanes: Mapping[int, Lane]
    gaps: Sequence[Gap]


def opened_new(feed: Feed, client: Client, identity: Identity) -> Opened:
    """Lanes that begin where feed.start says. Raises BadSettings, Away."""
    partitions = _chosen(feed, identity)
    starts, ends = client.starts(partitions), client.ends(partitions)
    if feed.start == "earliest":
        begin = starts
    elif feed.start == "latest":
        begin = ends
    else:
        assert feed.start is not None
        time_ms = int(datetime.fromisoformat(feed.start).timestamp() * 1000)
        begin = {**ends, **client.at_time(partitions, time_ms)}
    _warn_of_commits(feed, client, begin, f"feed.start = {feed.start} says")
    return Opened({p: Lane(p, begin[p], until=ends[p]) for p in partitions}, [])


def opened_at(feed: Feed, client: Client, identity: Identity, position: Position, skip_gaps: bool) -> Opened:
    """Lanes that go on from a position; partitions that it does not name begin where the log does.

    Raises BadSettings where cluster, topic or log are not what they were, or where messages are gone and
    `skip_gaps` does not let them go.
    """
    check_identity(feed, identity, position["cluster"], position["topic_id"])
    partitions = _chosen(feed, identity)
    saved: dict[int, Any] = {int(number): at for number, at in position["partitions"].items()}
    _check_partitions(feed, identity, partitions, saved)
    starts, ends = client.starts(partitions), client.ends(partitions)
    lanes, gaps = {}, []
    for partition in partitions:
        start, end = starts[partition], ends[partition]
        at = saved.get(partition)
        if at is None:
            lanes[partition] = Lane(partition, start, fresh=True, until=end)
            continue
        _check_end(feed, partition, at["next"], end)
        if at["next"] < start:
            gaps.append((partition, at["next"], start))
        last = None if at["last"] is None else Last(at["last"], at["digest"])
        check = last if last is not None and last.offset >= start else None
        lanes[partition] = Lane(partition, max(at["next"], start), check=check, until=end)
    if gaps and not skip_gaps:
        raise gap_refused(feed, gaps)
    _warn_of_commits(feed, client, {p: at["next"] for p, at in saved.items()}, "the checkpoint says")
    return Opened(lanes, gaps)


def check_identity(feed: Feed, identity: Identity, cluster: str | None, topic_id: str | None) -> None:
    """Raises BadSettings where the topic is another one than before (None: not known)."""
    if cluster is not None and cluster != identity.cluster:
        raise BadSettings(
            f"{', '.join(feed.servers)} is cluster {identity.cluster}, but what was read came from cluster "
            f"{cluster}. {CURE}"
        )
    if topic_id is not None and topic_id != identity.topic_id:
        raise BadSettings(
            f"topic {feed.topic} was deleted and made again: its id is {identity.topic_id} and was "
            f"{topic_id}, so offsets mean other records now. {CURE}"
        )


def gap_refused(feed: Feed, gaps: Sequence[Gap]) -> MessagesGone:
    """The error for messages that are gone before they were read."""
    size = sum(last - first for _, first, last in gaps)
    told = "; ".join(f"partition {p}: {first:,} to {last:,}" for p, first, last in gaps[:5])
    more = f"; and {len(gaps) - 5:,} further partitions" if len(gaps) > 5 else ""
    return MessagesGone(
        f"topic {feed.topic}: {size:,} offsets were removed from the log before they were read ({told}{more})"
    )


def _chosen(feed: Feed, identity: Identity) -> list[int]:
    missing = sorted(set(feed.partitions) - set(identity.partitions))
    if missing:
        raise BadSettings(
            f"feed.partitions names {missing}, but topic {feed.topic} has the partitions "
            f"{identity.partitions[0]} to {identity.partitions[-1]}; name those, or none for all"
        )
    return sorted(feed.partitions) or list(identity.partitions)


def _check_partitions(
    feed: Feed, identity: Identity, chosen: Sequence[int], saved: Mapping[int, Any]
) -> None:
    gone = sorted(saved.keys() - set(identity.partitions))
    if gone:
        raise BadSettings(
            f"topic {feed.topic} has no partitions {gone} any more, which were read: it is "
            f"another topic. {CURE}"
        )
    left_out = sorted(saved.keys() - set(chosen))
    if left_out:
        raise BadSettings(
            f"feed.partitions leaves out {left_out}, which were read before and would be left where they "
            f"are. {CURE}"
        )


def _check_end(feed: Feed, partition: int, offset: int, end: int) -> None:
    if offset > end:
        raise BadSettings(
            f"topic {feed.topic} partition {partition} ends at offset {end:,}, but {offset - end:,} more "
            f"were read before, up to {offset:,}: the log was cut back or is another one. {CURE}"
        )


def _warn_of_commits(feed: Feed, client: Client, ours: Mapping[int, int], whose: str) -> None:
    """Committed offsets count for nothing; somebody may believe that they do."""
    if feed.group is None:
        return
    try:
        committed = client.committed(feed.group, list(ours))
    except Away as away:
        new = "CoordinatorNotAvailable" in str(away)  # nobody ever committed to this cluster
        level = logging.INFO if new else logging.WARNING
        log.log(level, "what is committed to group %s is not known: %s", feed.group, away)
        return
    for partition, offset in sorted(committed.items()):
        if offset > ours[partition] or whose.startswith("feed.start"):
            log.warning(
                "group %s has offset %d committed for partition %d of topic %s; %s %d, and that counts",
                *(feed.group, offset, partition, feed.topic, whose, ours[partition]),
            )
