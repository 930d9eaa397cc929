"""Rejected messages of blocks come in; they go to a file to be repaired and replayed, counted by reason.

One JSON object a line in rejects.jsonl: number (1, 2, ... over the whole run), file, offset, reason, detail,
and the original as `line`, or `line_base64` where it is not UTF-8, with `cut` where it is only the
beginning. The number is what a resumed run cuts the file back by, so a file that was repaired and removed in
between is no trouble.
"""

from __future__ import annotations

import base64
import math
import mmap
import os
from collections.abc import Iterable, Iterator, Mapping
from contextlib import contextmanager
from pathlib import Path
from typing import Any, Literal, Protocol

import msgspec

from stream.durable import make_folder, os_errors
from stream.errors import BadData, BedloadError
from stream.message import Block, Reject
from stream.settings.models import MessagePaths

__all__ = ["FILE_NAME", "RejectFile", "RejectLog", "RejectSink"]

FILE_NAME = "rejects.jsonl"
KEPT_BYTES = 64 * 1024
PENDING_BYTES = 1 << 20


class RejectSink(Protocol):
    """Where rejected messages go; `where` names it for people."""

    where: str

    def put(self, number: int, block: Block, reject: Reject) -> None:
        """Takes reject `number` (1, 2, ... over the run), a message of `block`."""
        ...

    def sync(self) -> None:
        """Returns when all that was put is safe; raises where it is not, and for good from then on."""
        ...

    def close(self) -> None:
        """Releases what is open."""
        ...


class RejectLog:
    """Counts the rejects of one run, hands them on, and stops the run where they are too many.

    `limits`: settings.message, for the share of rejects that stops a run; `window`: messages in a window that
    is judged by itself too (none: no windows). `action`: keep them, in `sink` or else in
    `folder`/rejects.jsonl; only count them; or stop at the first. `state`: what `state()` gave when the
    checkpoint was written that the run goes on from; the file is cut back to it. `count`: rejects so far;
    `by_reason`: the same by reason code. Raises CannotCreate, NoPermission, FileTrouble.
    """

    def __init__(
        self,
        folder: Path,
        limits: MessagePaths,
        state: Mapping[str, Any] | None = None,
        *,
        action: Literal["keep", "skip", "halt"] = "keep",
        window: int | None = None,
        sink: RejectSink | None = None,
    ) -> None:
        self.by_reason: dict[str, int] = dict(state["by_reason"]) if state else {}
        self.count = sum(self.by_reason.values())
        self._limits = limits
        self._halt = action == "halt"
        self._span = max(window, limits.rejects_allowed_before) if window is not None else None
        self._in_span = int(state["in_window"]) if state else 0
        self._span_of: int | None = None
        self._sink: RejectSink | None = None
        if action == "keep":
            self._sink = sink or RejectFile(folder, self.count)

    def add(self, block: Block, rejects: Iterable[Reject], messages_before: int) -> None:
        """Records the rejects of a block and judges their share; for every block, in order, rejects or not.

        `messages_before`: messages of the run before the block. The share of the whole run is judged at the
        message `rejects_allowed_before` and at each reject after it, that of a window at each reject, so
        where a run stops does not depend on how its messages are cut into blocks. Raises BadData at the
        message where the share is over the limit.
        """
        first = max(self._limits.rejects_allowed_before, 1)
        through = messages_before
        self._enter_span(messages_before)
        for reject in sorted(rejects, key=lambda reject: reject.row):
            number = messages_before + reject.row + 1
            if through < first < number:
                self._judge(block, first - messages_before - 1, first)
            self._enter_span(number - 1)
            self._take(block, reject)
            if number >= first:
                self._judge(block, reject.row, number)
            self._judge_span(block, reject.row, number)
            through = number
        if through < first <= messages_before + len(block):
            self._judge(block, first - messages_before - 1, first)
        self._enter_span(messages_before + len(block))

    def sync(self) -> None:
        """Returns when everything added is safe. Once it failed it fails for good."""
        if self._sink is not None:
            self._sink.sync()

    def state(self) -> dict[str, Any]:
        """What a checkpoint keeps, after `sync`: JSON types."""
        return {"by_reason": dict(sorted(self.by_reason.items())), "in_window": self._in_span}

    def close(self) -> None:
        """Releases what is open."""
        if self._sink is not None:
            self._sink.close()

    def _take(self, block: Block, reject: Reject) -> None:
        self.count += 1
        self._in_span += 1
        self.by_reason[reject.reason] = self.by_reason.get(reject.reason, 0) + 1
        if self._halt:
            raise BadData(
                f"{_place(block, reject.row)}: rejected as {reject.reason} ({reject.detail}), and "
                'rejects.action = "halt" stops at the first. Repair the feed or the settings, or take '
                'action = "keep"'
            )
        if self._sink is not None:
            self._sink.put(self.count, block, reject)

    def _enter_span(self, messages: int) -> None:
        """A new window begins where message number `messages` + 1 lies past the present one."""
        if self._span is None:
            return
        if self._span_of not in (None, messages // self._span):
            self._in_span = 0
        self._span_of = messages // self._span

    def _judge(self, block: Block, row: int, messages: int) -> None:
        """Raises BadData where too large a share of the first `messages` was rejected; `row` is the last."""
        if self.count > self._limits.max_reject_share * messages:
            share = f"{self.count:,} of {messages:,} messages were rejected ({self.count / messages:.2%})"
            self._stop(share, block, row)

    def _judge_span(self, block: Block, row: int, messages: int) -> None:
        """Raises BadData where the window of message number `messages` has more rejects than it may have."""
        if self._span is not None and self._in_span > self._limits.max_reject_share * self._span:
            since = (messages - 1) // self._span * self._span
            share = f"{self._in_span:,} of the {messages - since:,} messages after message {since:,} were"
            self._stop(f"{share} rejected, too many for a window of {self._span:,}", block, row)

    def _stop(self, share: str, block: Block, row: int) -> None:
        self.sync()
        often, reason = max((count, reason) for reason, count in self.by_reason.items())
        where = "" if self._sink is None else f"See the lines and reasons in {self._sink.where}; "
        raise BadData(
            f"{share}, over message.max_reject_share = {self._limits.max_reject_share:g}, at "
            f"{_place(block, row)}; most often {reason} ({often:,}). {where}repair the feed or the settings, "
            "or raise the share"
        )


class RejectFile:
    """Rejects of one run in `folder`/rejects.jsonl (0600, folder 0700), made at the first reject.

    `count`: those that the run had so far; the file is cut back to them. Raises CannotCreate, NoPermission,
    FileTrouble.
    """

    def __init__(self, folder: Path, count: int) -> None:
        self.path = folder / FILE_NAME
        self.where = str(self.path)
        self._pending = bytearray()
        self._file: int | None = None
        self._fault: BedloadError | None = None
        self._cut_back(count)

    def put(self, number: int, block: Block, reject: Reject) -> None:
        """Takes one reject; written now and then, at the latest at `sync`."""
        line = block.value(reject.row)
        record: dict[str, Any] = {
            "number": number,
            "file": block.topic,
            "offset": int(block.offsets[reject.row]),
            "reason": reject.reason,
            "detail": reject.detail,
        }
        kept = line[:KEPT_BYTES]
        try:
            record["line"] = kept.decode()
        except UnicodeDecodeError:
            record["line_base64"] = base64.b64encode(kept).decode()
        if reject.reason == "line_too_long" or len(line) > KEPT_BYTES:
            record["cut"] = True
        self._pending += msgspec.json.encode(record) + b"\n"
        if len(self._pending) >= PENDING_BYTES:
            self._put_down()

    def sync(self) -> None:
        """Returns when everything added is on disk. Once it failed it fails for good: a second fsync may
        report success for what the first one lost."""
        self._put_down()
        if self._file is not None:
            with self._trouble("sync"):
                os.fsync(self._file)

    def close(self) -> None:
        """Writes what is waiting, if writing has not failed before, and releases the file."""
        if self._fault is None:
            self._put_down()
        if self._file is not None:
            os.close(self._file)
            self._file = None

    def _put_down(self) -> None:
        """Writes what is waiting; makes the file at the first time."""
        if self._fault is not None:
            raise self._fault
        if not self._pending:
            return
        if self._file is None:
            make_folder(self.path.parent)
            with self._trouble("create"):
                self._file = _open_to_append(self.path)
        with self._trouble("write"):
            waiting = bytes(self._pending)
            while waiting:
                waiting = waiting[os.write(self._file, waiting) :]
        self._pending.clear()

    @contextmanager
    def _trouble(self, action: str) -> Iterator[None]:
        try:
            with os_errors(action, self.path):
                yield
        except BedloadError as fault:
            self._fault = fault
            raise

    def _cut_back(self, count: int) -> None:
        """Drops what the file holds past the first `count` rejects, and a record torn by a crash."""
        with os_errors("cut back", self.path):
            if not self.path.exists() or not self.path.stat().st_size:
                return
            with self.path.open("r+b") as file:
                with mmap.mmap(file.fileno(), 0, access=mmap.ACCESS_READ) as content:
                    size = end = len(content)
                    while end:
                        start = content.rfind(b"\n", 0, end - 1) + 1
                        if _number(content[start:end]) <= count:
                            break
                        end = start
                if end < size:
                    file.truncate(end)
                    os.fsync(file.fileno())


def _place(block: Block, row: int) -> str:
    return f"{block.topic}, partition {block.partition}, offset {int(block.offsets[row]):,}"


def _open_to_append(path: Path) -> int:
    """Descriptor of the file, made 0600 where it is missing, its name synced."""
    flags = os.O_WRONLY | os.O_APPEND | os.O_CREAT | os.O_CLOEXEC | os.O_NOFOLLOW
    descriptor = os.open(path, flags, 0o600)
    folder = os.open(path.parent, os.O_RDONLY | os.O_DIRECTORY | os.O_CLOEXEC)
    try:
        os.fsync(folder)
    finally:
        os.close(folder)
    return descriptor


class _Numbered(msgspec.Struct):
    number: int


def _number(record: bytes) -> float:
    """The number of a record; infinite for one that is not whole."""
    try:
        return msgspec.json.decode(record, type=_Numbered).number if record.endswith(b"\n") else math.inf
    except msgspec.MsgspecError:
        return math.inf
