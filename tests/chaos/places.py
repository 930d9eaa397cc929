"""Places in a worker where it kills itself with SIGKILL: before what it does there, within it, or after."""

import os
import random
import signal
import threading
import time
from collections.abc import Callable
from dataclasses import dataclass
from fnmatch import fnmatch

from stream.checkpoints import Checkpoints
from stream.runs.model import Model
from stream.sources import JournalledSource
from stream.topics import Publisher
from stream.topics.client import Client

__all__ = ["PLACES", "Strike", "lie_in_wait"]

LEARNING_S = 3e-4
"""About as long as a block of a few dozen messages takes."""
MOST_TURNS = 6


@dataclass(frozen=True)
class Call:
    """Calls of a method; of those that return, the ones that `counts` (object, result) says yes to.

    `turns`: how many of them there are in any life, at least.
    """

    owner: type
    name: str
    when: str
    counts: Callable[[object, object], object] = lambda *_: True
    turns: int = MOST_TURNS


@dataclass(frozen=True)
class File:
    """Calls of a function of `os`, on a descriptor or names of which one fits the pattern."""

    name: str
    pattern: str
    when: str
    turns: int = MOST_TURNS


@dataclass(frozen=True)
class Strike:
    """The `turn`-th call at a place. `note`: a file that is empty until then."""

    place: str
    turn: int
    note: str
    seed: int = 0


NEW_CHECKPOINT, NEW_SNAPSHOT = "*/checkpoints/.writing-*", "*/snapshots/.writing-*"
EVERYWHERE = {
    "checkpoint read at the start": Call(Checkpoints, "newest", "after", turns=1),
    "read again from the journal": Call(
        JournalledSource, "read", "after", lambda me, block: me.following and len(block), turns=1
    ),
    "before a fetch": Call(Client, "poll", "before"),
    "after a fetch": Call(Client, "poll", "after", lambda _, found: found),
    "journal record half written": File("write", "*/journal", "within"),
    "journal record written": File("write", "*/journal", "after"),
    "journal synced": File("fsync", "*/journal", "after"),
    "while learning": Call(Model, "predict_then_update", "within"),
    "block learned": Call(Model, "predict_then_update", "after"),
    "checkpoint half written": File("pwrite", NEW_CHECKPOINT + "/arrays.safetensors", "within"),
    "its manifest half written": File("write", NEW_CHECKPOINT + "/manifest.json", "within"),
    "before its rename": File("rename", NEW_CHECKPOINT, "before"),
    "after its rename": File("rename", NEW_CHECKPOINT, "after"),
    "its rename synced": File("fsync", "*/checkpoints", "after"),
    "an old one renamed away": File("rename", "*/checkpoints/.removing-*", "after"),
    "before the commit": Call(Client, "commit", "before"),
    "after the commit": Call(Client, "commit", "after"),
    "snapshot half written": File("write", NEW_SNAPSHOT + "/arrays.safetensors", "within"),
    "before the snapshot's rename": File("rename", NEW_SNAPSHOT, "before"),
    "after the snapshot's rename": File("rename", NEW_SNAPSHOT, "after"),
}
PLACES = {
    "topics": {
        **EVERYWHERE,
        "dead letter or score sent": Call(Publisher, "send", "after"),
        "before they are acknowledged": Call(Publisher, "flush", "before"),
        "all acknowledged": Call(Publisher, "flush", "after"),
    },
    "files": {
        **EVERYWHERE,
        "reject half written": File("write", "*/rejects.jsonl", "within"),
        "rejects synced": File("fsync", "*/rejects.jsonl", "after"),
    },
}
"""By where rejects go: to a topic, beside scores, or to files in the state folder."""


def lie_in_wait(strike, outward):
    """Has this process kill itself there; `outward`: "topics" or "files"."""
    place, blow = PLACES[outward][strike.place], Blow(strike)
    if isinstance(place, File):
        setattr(os, place.name, watched_file(place, blow))
    else:
        setattr(place.owner, place.name, watched_call(place, blow))


class Blow:
    """Counts turns, and kills at the one that was asked for; for several threads."""

    def __init__(self, strike):
        self._left = strike.turn
        self._place = strike.place.encode() + b"\n"
        self._lock = threading.Lock()
        self._write = os.write
        self._note = os.open(strike.note, os.O_WRONLY | os.O_CLOEXEC)
        self._delay_s = random.Random(strike.seed).uniform(0, LEARNING_S)

    def is_due(self):
        with self._lock:
            self._left -= 1
            return self._left == 0

    def fall(self):
        self._write(self._note, self._place)
        os.kill(os.getpid(), signal.SIGKILL)
        time.sleep(60)

    def fall_soon(self):
        """From another thread, while this one goes on."""

        def later():
            time.sleep(self._delay_s)
            self.fall()

        threading.Thread(target=later, daemon=True).start()


def watched_call(place, blow):
    real = getattr(place.owner, place.name)

    def call(me, *arguments):
        if place.when == "after":
            found = real(me, *arguments)
            if place.counts(me, found) and blow.is_due():
                blow.fall()
            return found
        if blow.is_due():
            if place.when == "before":
                blow.fall()
            blow.fall_soon()
        return real(me, *arguments)

    return call


def watched_file(place, blow):
    real = getattr(os, place.name)

    def call(what, *more, **options):
        if not any(fnmatch(name, place.pattern) for name in names_of(what, *more)) or not blow.is_due():
            return real(what, *more, **options)
        if place.when == "within":
            data = memoryview(more[0])
            real(what, data[: len(data) // 2], *more[1:], **options)
        elif place.when == "after":
            real(what, *more, **options)
        return blow.fall()

    return call


def names_of(what, *more):
    """Of a descriptor the name that its file has, of a rename both names."""
    if isinstance(what, int):
        return [os.readlink(f"/proc/self/fd/{what}")]
    return [str(name) for name in (what, *more)]
