"""A feed that goes on and a worker in; the worker killed again and again, what was seen meanwhile out."""

import os
import random
import select
import signal
import time
from collections import Counter
from contextlib import closing, suppress
from dataclasses import asdict, dataclass, field

from kafka import TopicPartition
from kafka.errors import RetriableError

from stream.journal import FILE_NAME, Kind, Mark, spans_after
from tests.broker.running import wait_for
from tests.chaos.feeding import PARTITIONS
from tests.chaos.oracles import newest_about, nothing_broken
from tests.chaos.places import PLACES, Strike
from tests.replays import settings_for

__all__ = ["ANY_TIME", "TOGETHER", "Series", "drawn_kills", "settings_of"]

ANY_TIME = "any time"
TOGETHER = "with the broker, which is silent by then"
SILENT_S = 0.5
REACHED_WITHIN_S = 30
LIFE_S = 1.5


def settings_of(broker, feed, outward, variant=None):
    """Settings that checkpoint several times a second; `outward`: "topics" or "files"."""
    sections = {}
    if outward == "topics":
        sections = {"rejects": {"topic": f"{feed.topic}.bad"}, "scores": {"topic": f"{feed.topic}.scored"}}
    settings = settings_for(
        [],
        variant,
        feed={
            "kind": "topic",
            "servers": broker.servers,
            "topic": feed.topic,
            "start": "earliest",
            "group": f"{feed.topic}.group",
        },
        worker={"checkpoint_every_s": 0.12, "snapshot_every_s": 0.3, "unavailable_after_s": 60},
        state={"checkpoint_every": 700},
        **sections,
    )
    return settings.model_validate(
        {**settings.model_dump(), "fields": [*settings.fields, {"path": "id", "kind": "category"}]}
    )


@dataclass
class Series:
    """Kills of one worker. `kills`: by place; `again`: messages that a later life had to learn once more."""

    broker: object
    feed: object
    settings: object
    folder: object
    workers: object
    outward: str
    kills: Counter = field(default_factory=Counter)
    missed: Counter = field(default_factory=Counter)
    advances: int = 0
    again: int = 0
    seconds: float = 0.0

    def run(self, kills):
        """Kills it as planned, one life after the other, then lets it live to the end of the topic."""
        began = time.monotonic()
        with closing(self.broker.admin()) as admin, self.feed.flowing():
            for place, turn in kills:
                before = self._reached()
                self._live_and_die(place, turn, before)
                self._look(admin)
                self.advances += self._reached() > before
        self._start(until_end=True)
        assert self.workers.wait() == 0, self._said()
        self.seconds += time.monotonic() - began

    def _live_and_die(self, place, turn, before):
        note = self.folder.with_name("struck")
        note.write_bytes(b"")
        strike = Strike(place, turn, str(note), seed=turn) if place not in (ANY_TIME, TOGETHER) else None
        self._start(strike=None if strike is None else asdict(strike))
        with open(os.pidfd_open(self.workers.pid)) as ended:
            select.select([ended], [], [], turn if strike is None else REACHED_WITHIN_S)
        if place == TOGETHER:
            wait_for(lambda: self._reached() > before, "a checkpoint of this life", REACHED_WITHIN_S)
            self.broker.pause()
            time.sleep(SILENT_S)
        os.kill(self.workers.pid, signal.SIGKILL)
        assert self.workers.wait() == -signal.SIGKILL, self._said()
        if place == TOGETHER:
            self.broker.kill()
            self.broker.start_again()
        if strike is not None and not note.stat().st_size:
            self.missed[place] += 1
            place = ANY_TIME
        self.kills[place] += 1

    def _start(self, **options):
        log = str(self.folder.with_name("said"))
        self.workers.start(self.settings, self.folder, log=log, outward=self.outward, **options)

    def _said(self):
        return self.folder.with_name("said").read_text()[-4_000:]

    def _reached(self):
        about = newest_about(self.folder)
        return 0 if about is None else about["messages"]

    def _look(self, admin):
        """What must hold after every single kill."""
        nothing_broken(self.folder)
        about = newest_about(self.folder)
        position = None if about is None else about["position"]
        self.again += messages_behind(self.folder / FILE_NAME, position)
        self._check_committed(admin, {} if about is None else position["source"]["partitions"])

    def _check_committed(self, admin, partitions):
        """Nothing is committed to the group that is in no durable checkpoint."""
        group = self.settings.feed.group
        places = [TopicPartition(self.feed.topic, number) for number in range(PARTITIONS)]
        for place, at in committed_of(admin, group, places).items():
            saved = partitions.get(str(place.partition), {"next": -1})
            assert at.offset <= saved["next"], f"{place}: committed {at.offset}, saved {saved}"


def messages_behind(journal, position):
    """How many the journal has read behind the newest checkpoint."""
    if position is None and not journal.exists():
        return 0
    mark = Mark() if position is None else Mark.from_json(position["journal"])
    behind = [span for span, _ in spans_after(journal, mark) if span.kind is Kind.READ]
    return sum(span.last - span.first for span in behind)


def committed_of(admin, group, places):
    """What the group has committed. Its first commit makes the topic for it, and that takes a moment."""
    for _ in range(40):
        with suppress(RetriableError):
            return admin.list_group_offsets({group: places})[group]
        time.sleep(0.25)
    raise AssertionError(f"nobody knows what is committed to {group}")


def drawn_kills(outward, count, seed):
    """Pairs of a named place and a turn there and, half of them, of any time and the seconds until then.

    Where records go out, one in twenty kills is the broker's too: what it has not acknowledged is lost then.
    """
    places, draw = PLACES[outward], random.Random(seed)
    names = []
    while len(names) < (count + 1) // 2:
        names += draw.sample(sorted(places), len(places))
    found = [(name, draw.randint(1, places[name].turns)) for name in names[: (count + 1) // 2]]
    if outward == "topics":
        found += [(TOGETHER, draw.uniform(0.0, LIFE_S)) for _ in range(count // 20)]
    found += [(ANY_TIME, draw.uniform(0.0, LIFE_S)) for _ in range(count - len(found))]
    draw.shuffle(found)
    return found
