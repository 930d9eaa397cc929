"""What a join takes and gives, one by one: messages ahead of their time and outcomes in, events out."""

from __future__ import annotations

import heapq
import struct
from collections.abc import Iterable, Mapping
from hashlib import blake2b
from typing import Any, NamedTuple, TypeVar

import numpy as np
import numpy.typing as npt

__all__ = [
    "ARRIVED",
    "DIFFERING",
    "HALVES",
    "RELEASED",
    "UNKNOWN",
    "Ahead",
    "Event",
    "Outcome",
    "as_arrays",
    "digest_of",
    "from_arrays",
    "halves_of",
    "taken_before",
]

DIFFERING = -1
"""Label of early outcomes that contradict each other."""
HALVES = struct.Struct("<QQ")
"""Both halves of a hashed id."""
ARRIVED, RELEASED = 0, 1
"""Kinds of events; at one time messages arrive before any is released."""
UNKNOWN = -1
"""Label of a message that has only arrived."""


class Event(NamedTuple):
    """A message that arrives, to be scored, or is released, to be learned with its label.

    `time`: event time of the message, or of its release (ms). `aside`: of one that arrives, that an earlier
    one has its id, so that it will not be released; of one that is released, that it expired.
    """

    time: int
    kind: int
    partition: int
    offset: int
    handle: int
    label: int
    aside: bool
    payload: bytes


class Ahead(NamedTuple):
    """A message whose event time (ms) has not been reached; `handle`: its row."""

    time: int
    partition: int
    offset: int
    digest: bytes
    handle: int


class Outcome(NamedTuple):
    """An outcome with its event time (ms); `label`: 1 or 0."""

    time: int
    partition: int
    offset: int
    digest: bytes
    label: int


def digest_of(ident: str | int) -> bytes:
    """16 bytes that stand for an id; 17 and "17" are one id. They are safe from ids made to collide."""
    return blake2b(str(ident).encode("utf-8", "surrogatepass"), digest_size=16).digest()


E = TypeVar("E", Ahead, Outcome)


def taken_before(heap: list[E], until: int) -> list[E]:
    """Takes what is before `until` out of a heap, in order."""
    taken = []
    while heap and heap[0].time < until:
        taken.append(heapq.heappop(heap))
    return taken


def halves_of(digests: list[bytes]) -> tuple[npt.NDArray[np.uint64], npt.NDArray[np.uint64]]:
    """Both halves of hashed ids."""
    halves = np.frombuffer(b"".join(digests), "<u8").astype(np.uint64).reshape(-1, 2)
    return halves[:, 0], halves[:, 1]


def as_arrays(outcomes: Iterable[Outcome]) -> dict[str, npt.NDArray[Any]]:
    """Columns of outcomes, as a checkpoint holds them."""
    outcomes = list(outcomes)
    return {
        "times": np.array([o.time for o in outcomes], np.int64),
        "partitions": np.array([o.partition for o in outcomes], np.int64),
        "offsets": np.array([o.offset for o in outcomes], np.int64),
        "ids": np.frombuffer(b"".join(o.digest for o in outcomes), np.uint8).reshape(-1, 16),
        "labels": np.array([o.label for o in outcomes], np.int8),
    }


def from_arrays(arrays: Mapping[str, npt.NDArray[Any]], prefix: str) -> list[Outcome]:
    """What `as_arrays` gave, in the same order, which is that of a heap."""
    columns = [arrays[prefix + name].tolist() for name in ("times", "partitions", "offsets")]
    digests = [row.tobytes() for row in arrays[prefix + "ids"]]
    return [Outcome(*row) for row in zip(*columns, digests, arrays[prefix + "labels"].tolist(), strict=True)]
