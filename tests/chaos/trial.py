"""A broker and a list of kills in; a feed worked, killed and held against the oracles, its figures out."""

import uuid
from collections import Counter
from contextlib import closing
from dataclasses import dataclass

from tests.chaos import oracles
from tests.chaos.feeding import PARTITIONS, Feed
from tests.chaos.series import Series, settings_of
from tests.replays import BOUNDED

__all__ = ["Figures", "killed_again_and_again"]

AT_FIRST = 3_000
VARIANTS = {"topics": None, "files": BOUNDED}
"""Settings beside dead letters and scores, and beside files of rejects: there with admission and removal."""


@dataclass(frozen=True)
class Figures:
    """`kills`: by place; `missed`: by named place, lives that did not get there in time, killed at any time.

    `advances`: lives that left a newer checkpoint; `again`: messages learned once more; `repeated`: dead
    letters or scores sent once more.
    """

    kills: Counter
    missed: Counter
    advances: int
    messages: int
    bad: int
    again: int
    letters_repeated: int
    scores_repeated: int
    seconds: float


def killed_again_and_again(broker, workers, folder, outward, kills, seed=7):
    """`kills`: as `Series.run` wants them; `seed`: of the feed.

    Raises AssertionError where anything is lost, doubled, broken or left over.
    """
    topic = f"chaos-{uuid.uuid4().hex[:12]}"
    for name in ("", ".bad", ".scored"):
        broker.make_topic(topic + name, partitions=PARTITIONS)
    folder.mkdir()
    with closing(Feed(broker.servers, topic, seed)) as feed:
        feed.send(AT_FIRST)
        settings = settings_of(broker, feed, outward, VARIANTS[outward])
        series = Series(broker, feed, settings, folder / "state", workers, outward)
        series.run(kills)
    letters, scores = check(broker, feed, settings, folder, outward)
    return Figures(
        series.kills,
        series.missed,
        series.advances,
        len(feed.sent),
        sum(feed.counts()["rejected"].values()),
        series.again,
        letters,
        scores,
        series.seconds,
    )


def check(broker, feed, settings, folder, outward):
    """All oracles; returns repeats of dead letters and of scores."""
    state = folder / "state"
    oracles.topic_holds_what_was_sent(broker.servers, feed)
    oracles.nothing_broken(state)
    oracles.nothing_left_over(state)
    order = oracles.journal_reads_each_offset_once(state, feed.sent)
    oracles.every_message_counts_once(state, feed, settings)
    margins = oracles.same_as_learned_from_a_log(settings, state, folder, order, feed.sent)
    oracles.same_as_uninterrupted(settings, state, folder / "again")
    if outward == "files":
        oracles.bad_records_are_kept(state, feed)
        return 0, 0
    return (
        oracles.dead_letters_are_complete(broker.servers, feed),
        oracles.scores_are_complete(broker.servers, feed, margins),
    )
