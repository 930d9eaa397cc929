"""Values come in; they go to a topic in whole batches, far faster than a producer sends records one by one.

Layouts as in the Kafka protocol guide: record batches of version 2, requests to produce of version 7.
"""

import functools
import itertools
import socket
import struct
import time
from collections.abc import Mapping, Sequence
from types import TracebackType
from typing import Self

import crc32c
from kafka.codec import lz4_encode

__all__ = ["Filler"]

ANSWER_S = 600
"""Generous: a broker may be paused meanwhile."""
PRODUCE, VERSION, LZ4 = 0, 7, 3
REQUEST = struct.Struct(">hhihhhi")
HEAD = struct.Struct(">qiib")
SUM = struct.Struct(">I")
BODY = struct.Struct(">hiqqqhii")
NOT_LEADER = 6
ANSWER = struct.Struct(">ihqqq")


class Filler:
    """One connection to a broker that leads every partition; each `send` waits until it is written.

    `lz4`: compress the batches; without it they go as they are, as producers send them unless told otherwise.
    """

    def __init__(self, server: str, topic: str, *, lz4: bool = False) -> None:
        host, _, port = server.rpartition(":")
        self._socket = socket.create_connection((host, int(port)), timeout=ANSWER_S)
        self._socket.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
        self._topic = topic.encode()
        self._lz4 = lz4
        self._numbers = itertools.count()

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self._socket.close()

    def send(self, batches: Mapping[int, Sequence[bytes]]) -> None:
        """One batch of values for each partition. Returns when the broker has them.

        What a topic that was made this moment has no leader for yet is sent again.
        """
        deadline = time.monotonic() + 30
        while batches:
            assert time.monotonic() < deadline, f"partitions {list(batches)} have had no leader for 30 s"
            now_ms = int(time.time() * 1000)
            parts = [REQUEST.pack(PRODUCE, VERSION, next(self._numbers), -1, -1, 1, 60_000), _count(1)]
            parts += [struct.pack(">h", len(self._topic)), self._topic, _count(len(batches))]
            for partition, values in batches.items():
                batch = packed(values, now_ms, self._lz4)
                parts += [_count(partition), _count(len(batch)), batch]
            request = b"".join(parts)
            self._socket.sendall(_count(len(request)) + request)
            again = self._without_leader(self._take(*struct.unpack(">i", self._take(4))), len(batches))
            batches = {partition: batches[partition] for partition in again}
            if again:
                time.sleep(0.05)

    def _without_leader(self, answer: bytes, partitions: int) -> list[int]:
        again = []
        first = 4 + 4 + 2 + len(self._topic) + 4
        for place in range(partitions):
            partition, error, *_ = ANSWER.unpack_from(answer, first + place * ANSWER.size)
            if error == NOT_LEADER:
                again.append(partition)
                continue
            assert error == 0, f"partition {partition}: the broker refused a batch with error {error}"
        return again

    def _take(self, size: int) -> bytes:
        taken = bytearray()
        while len(taken) < size:
            piece = self._socket.recv(size - len(taken))
            assert piece, "the broker closed the connection"
            taken += piece
        return bytes(taken)


def packed(values: Sequence[bytes], time_ms: int, lz4: bool = False) -> bytes:
    """A record batch of values without keys, all of one time."""
    records = bytearray()
    for number, value in enumerate(values):
        record = b"\0\0%b\1%b%b\0" % (_varint(number), _varint(len(value)), value)
        records += _varint(len(record)) + record
    data = lz4_encode(bytes(records)) if lz4 else bytes(records)
    facts = (LZ4 if lz4 else 0, len(values) - 1, time_ms, time_ms, -1, -1, -1, len(values))
    body = BODY.pack(*facts) + data
    return HEAD.pack(0, len(body) + SUM.size + 5, -1, 2) + SUM.pack(crc32c.crc32c(body)) + body


def _count(number: int) -> bytes:
    return number.to_bytes(4, "big")


@functools.cache
def _varint(number: int) -> bytes:
    """Of a number that is not negative, zigzag."""
    left, out = number << 1, bytearray()
    while left > 0x7F:
        out.append(left & 0x7F | 0x80)
        left >>= 7
    out.append(left)
    return bytes(out)
