"""Blocks of raw messages come in; examples, column by column, and the rejected rows go out."""

from __future__ import annotations

from typing import Any

import msgspec
import numpy as np
import numpy.typing as npt

from stream.decoding.reasons import MAX_DEPTH, is_too_deep, why_not
from stream.decoding.shape import Shape
from stream.decoding.times import epoch_ms
from stream.decoding.uses import uses_of
from stream.message import Block, Examples, Int64s, Reject
from stream.settings.models import Settings

__all__ = ["Decoder"]

EACH_BYTE = np.uint64(0x0101010101010101)


class Decoder:
    """Decodes the fields that `settings` use, and nothing else, of JSON Lines.

    `ids`, `times`: give those too (times as whole epoch milliseconds, None where absent);
    `labels`: read label and weight (without: every label -1, every weight 1).
    Raises BadSettings where two settings want one path to be what no value can be.
    """

    def __init__(
        self, settings: Settings, ids: bool = False, times: bool = False, labels: bool = True
    ) -> None:
        self._max_line_bytes = settings.feed.max_line_bytes
        self._uses = uses_of(settings, ids, times, labels)
        self._shape = Shape(self._uses)
        message = settings.message
        self._label = message.label if labels else None
        self._weight = message.weight if labels else None
        self._id = message.id if ids else None
        self._time = message.time if times else None
        self._ids, self._times = ids, times
        self._paths = list(dict.fromkeys(field.path for field in settings.fields))

    def decode(self, block: Block) -> tuple[Examples, list[Reject]]:
        """Every message of the block is either an example or a reject (see stream.decoding.reasons)."""
        structs = self._all_at_once(block) if len(block) else []
        if structs is not None:
            rows = np.arange(len(block), dtype=np.int64)
            try:
                return self._examples(rows, self._shape.columns(structs)), []
            except ValueError:  # a time; the slow way names it
                pass
        good, structs, rejects = self._one_at_a_time(block)
        return self._examples(np.array(good, np.int64), self._shape.columns(structs)), rejects

    def _all_at_once(self, block: Block) -> list[Any] | None:
        """The structs of all messages; None where anything at all is not as it should be.

        One object a line is certain when every line begins with { and ends with }, and there are as
        many objects as lines: an object that went on behind a line's last } would need a comma or
        another closing bracket next, and no string holds a line feed.
        """
        data = np.frombuffer(block.buffer, np.uint8)
        lengths = block.ends - block.starts
        if lengths.max() > self._max_line_bytes or lengths.min() < 2:
            return None
        if (data[block.starts] != ord("{")).any() or (data[block.ends - 1] != ord("}")).any():
            return None
        lines = block.buffer[block.starts[0] : block.ends[-1]]
        if not _is_utf8(lines) or _may_be_deep(block, 1).any():
            return None
        try:
            structs = self._shape.decoder.decode_lines(lines)
        except (msgspec.MsgspecError, RecursionError):
            return None
        return structs if len(structs) == len(block) else None

    def _one_at_a_time(self, block: Block) -> tuple[list[int], list[Any], list[Reject]]:
        """Rows that decode, their structs, and a reject for each other row."""
        rows: list[int] = []
        structs: list[Any] = []
        rejects: list[Reject] = []
        limits = zip(block.starts.tolist(), block.ends.tolist(), _may_be_deep(block, 0).tolist(), strict=True)
        for row, (start, end, may_be_deep) in enumerate(limits):
            found = self._decode_line(block.buffer[start:end], may_be_deep)
            if isinstance(found, tuple):
                rejects.append(Reject(row, *found))
            else:
                rows.append(row)
                structs.append(found)
        return rows, structs, rejects

    def _decode_line(self, line: bytes, may_be_deep: bool) -> Any | tuple[str, str]:
        """The struct of one line, or the reason and detail of its reject."""
        if len(line) > self._max_line_bytes:
            limit = f"{self._max_line_bytes:,} bytes"
            return "line_too_long", f"the line is over feed.max_line_bytes ({limit})"
        if not _is_utf8(line):
            return "bad_utf8", "the line is not UTF-8"
        if may_be_deep and is_too_deep(line):
            return "bad_json", f"objects and lists are nested more than {MAX_DEPTH} deep"
        try:
            struct = self._shape.decoder.decode(line)
        except msgspec.MsgspecError as error:
            return why_not(line, self._uses, error)
        if self._time is not None:
            try:
                epoch_ms(self._shape.column([struct], self._time)[0])
            except ValueError:
                allowed = self._uses[self._time].allowed()
                return "bad_time", f"{self._time} is text that is no time; allowed: {allowed}"
        return struct

    def _examples(self, rows: Int64s, columns: dict[str, list[Any]]) -> Examples:
        """Columns as Examples. Raises ValueError where a time cannot be read."""
        absent: list[Any] = [None] * len(rows)
        ids = columns[self._id] if self._id is not None else absent
        times = [epoch_ms(v) for v in columns[self._time]] if self._time is not None else absent
        return Examples(
            rows,
            {path: columns[path] for path in self._paths},
            _labels(columns[self._label] if self._label is not None else absent),
            _weights(columns[self._weight] if self._weight is not None else absent),
            ids if self._ids else [],
            times if self._times else [],
        )


def _is_utf8(data: bytes) -> bool:
    """msgspec checks only the texts that it decodes."""
    if data.isascii():
        return True
    try:
        data.decode()
    except UnicodeDecodeError:
        return False
    return True


def _may_be_deep(block: Block, brackets_each: int) -> npt.NDArray[np.bool_]:
    """bool[m]: messages with so many brackets that they could be nested too deep.

    `brackets_each`: opening brackets that every message is known to hold.
    """
    begin, end = int(block.starts[0]), int(block.ends[-1])
    data = np.frombuffer(block.buffer, np.uint8)[begin:end]
    opens = np.zeros((len(data) + 63) // 64 * 64, np.bool_)
    np.equal(data & 0xDF, ord("["), out=opens[: len(data)])  # [ or {
    if np.count_nonzero(opens) - brackets_each * (len(block) - 1) <= MAX_DEPTH:
        return np.zeros(len(block), np.bool_)
    of_8_bytes = np.bitwise_count(opens.view(np.uint64))
    of_64_bytes = (of_8_bytes.view(np.uint64) * EACH_BYTE) >> np.uint64(56)  # the eight counts added up
    running = np.concatenate(([0], np.cumsum(of_64_bytes.astype(np.int64))))
    first, last = (block.starts - begin) // 64, (block.ends - begin + 63) // 64
    return np.asarray(running[last] - running[first] > MAX_DEPTH)


def _labels(values: list[Any]) -> npt.NDArray[np.int8]:
    """1 for true or 1, 0 for false or 0, -1 for none."""
    try:
        return np.frombuffer(bytes(values), np.int8).copy()
    except TypeError:
        return np.array([-1 if value is None else value for value in values], np.int8)


def _weights(values: list[Any]) -> npt.NDArray[np.float64]:
    return np.array([1.0 if value is None else value for value in values], np.float64)
